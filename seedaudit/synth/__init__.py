"""Synthetic studies whose true answer is known."""

from seedaudit.synth.settings import DEMO, SynthSettings
from seedaudit.synth.study import synth_study

__all__ = ["DEMO", "SynthSettings", "synth_study"]
