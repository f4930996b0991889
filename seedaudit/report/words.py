"""The words of a result: verdict, methods paragraph, captions."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any


def verdict(numbers: Mapping[str, Any]) -> str:
    """One honest sentence from the headline numbers of a seed."""
    return f"seed {numbers['name']}: stability {numbers['stability']}"
