"""What a synthetic study is like."""

from __future__ import annotations

from dataclasses import dataclass

from seedaudit.errors import Problem, StudyError


@dataclass(frozen=True)
class SynthSettings:
    """What a synthetic study is like.

    Parameters
    ----------
    participants : int
        At least 4; the arms alternate.
    voxel_size : float
        mm, 1 to 8.
    volumes : int
        Per run, at least 20.
    repetition_time : float
        s, 0.25 to 6.
    border_distance : float
        mm from the reported seed to the planted border, 0 to 12.
    border_sd : float
        SD per axis of each participant's smooth border displacement, mm, 0 to 6.
    coupling_sd : float
        SD of each participant's network correlations about the planted ones, Fisher z, 0 to 0.5.
    noise : float
        SD of the voxel noise, relative to a network's signal, 0 to 10.
    leak : float
        Strength of head motion and nuisance in the signal, 0 (clean) to 5.
    quantum : float
        Signal units (grey matter is 900) per stored integer, 0.1 to 40; coarse steps make small
        files.
    random_state : int
        0 or more; the same settings give the same bytes.

    Raises
    ------
    StudyError
        For values out of range; all of them at once.
    """

    participants: int = 12
    voxel_size: float = 4.0
    volumes: int = 120
    repetition_time: float = 2.0
    border_distance: float = 3.0
    border_sd: float = 1.5
    coupling_sd: float = 0.1
    noise: float = 0.8
    leak: float = 1.0
    quantum: float = 1.0
    random_state: int = 20

    def __post_init__(self) -> None:
        ranges = {
            "participants": (4, 9999),
            "voxel_size": (1, 8),
            "volumes": (20, 30000),
            "repetition_time": (0.25, 6),
            "border_distance": (0, 12),
            "border_sd": (0, 6),
            "coupling_sd": (0, 0.5),
            "noise": (0, 10),
            "leak": (0, 5),
            "quantum": (0.1, 40),
            "random_state": (0, 2**63),
        }
        problems = [
            Problem(name, str(getattr(self, name)), f"{low} to {high}")
            for name, (low, high) in ranges.items()
            if not low <= getattr(self, name) <= high
        ]
        if problems:
            raise StudyError(*problems)


DEMO = SynthSettings(voxel_size=5.0, volumes=72, repetition_time=3.0, quantum=30.0)
