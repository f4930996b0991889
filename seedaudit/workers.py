"""What the machine allows: cores, and memory that stays with the process."""

from __future__ import annotations

import contextlib
import ctypes
import os
import sys

_TRIM_THRESHOLD, _MMAP_THRESHOLD = -1, -3  # parameters of glibc's mallopt, from malloc.h
_LARGEST_KEPT = 32 << 20
_MOST_KEPT = 512 << 20


def available_cores() -> int:
    """Cores that this process may use, at least one."""
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:  # no such call on this system
        return os.cpu_count() or 1


def reuse_freed_memory() -> None:
    """Let freed arrays of up to 32 MB be used again instead of going back to the system.

    A map of a 2 mm brain takes 2 MB. By default every temporary of that size is fetched from the
    system page by page and given back at once, which takes several times as long as the arithmetic
    on it. Does nothing where the C library is not glibc.
    """
    if sys.platform != "linux":
        return
    with contextlib.suppress(AttributeError, OSError):
        library = ctypes.CDLL(None)
        library.mallopt(_MMAP_THRESHOLD, _LARGEST_KEPT)
        library.mallopt(_TRIM_THRESHOLD, _MOST_KEPT)
