"""How many workers the machine allows."""

from __future__ import annotations

import os


def available_cores() -> int:
    """Cores that this process may use, at least one."""
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:  # no such call on this system
        return os.cpu_count() or 1
