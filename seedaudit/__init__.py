"""seedaudit: does a seed-correlation result survive a small shift of its seed?

The story of an audit is told in `seedaudit.auditing`. The names below are loaded when they are
first used, so that the command line answers at once.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from seedaudit._version import __version__

if TYPE_CHECKING:
    from seedaudit.auditing import audit, audit_images
    from seedaudit.errors import DataError, SeedAuditError, StudyError
    from seedaudit.results import Audit, SeedAudit
    from seedaudit.store import load_audit
    from seedaudit.study import Study

_HOME = {
    "Audit": "results",
    "DataError": "errors",
    "SeedAudit": "results",
    "SeedAuditError": "errors",
    "Study": "study",
    "StudyError": "errors",
    "audit": "auditing",
    "audit_images": "auditing",
    "load_audit": "store",
}

__all__ = [
    "Audit",
    "DataError",
    "SeedAudit",
    "SeedAuditError",
    "Study",
    "StudyError",
    "__version__",
    "audit",
    "audit_images",
    "load_audit",
]


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return __all__
