"""Synthetic studies whose true answer is known."""

from seedaudit.synth.study import DEMO, SynthSettings, synth_study

__all__ = ["DEMO", "SynthSettings", "synth_study"]
