"""sigguard: signal-quality gatekeeper for incoming ECG recordings."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"
__all__ = [
    "Recording",
    "Report",
    "SigguardError",
    "__version__",
    "check",
    "open_recording",
    "read_recording",
    "trim",
]

if TYPE_CHECKING:
    from sigguard.errors import SigguardError
    from sigguard.readers import open_recording, read_recording
    from sigguard.recording import Recording
    from sigguard.report.document import Report
    from sigguard.screening import check
    from sigguard.trimming import trim

_HOME = {
    "Recording": "sigguard.recording",
    "Report": "sigguard.report.document",
    "SigguardError": "sigguard.errors",
    "check": "sigguard.screening",
    "open_recording": "sigguard.readers",
    "read_recording": "sigguard.readers",
    "trim": "sigguard.trimming",
}


def __getattr__(name: str) -> Any:
    """Public names are imported when first asked for, so that the command's help needs no numpy."""
    if name in _HOME:
        return getattr(import_module(_HOME[name]), name)
    raise AttributeError(f"module 'sigguard' has no attribute {name!r}")
