"""Digests of files and of settings."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

import numpy as np


def file_digest(path: Path) -> str:
    """SHA-256 of a file as stored; `unreadable` when it cannot be read."""
    try:
        with open(path, "rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError:
        return "unreadable"


def digest(*parts: Any) -> str:
    """SHA-256 of arrays, texts and numbers, in order."""
    total = hashlib.sha256()
    for part in parts:
        if isinstance(part, np.ndarray):
            total.update(f"{part.dtype.str}{part.shape}".encode())
            total.update(np.ascontiguousarray(part).tobytes())
        else:
            total.update(repr(part).encode())
        total.update(b"\0")
    return total.hexdigest()
