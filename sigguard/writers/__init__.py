"""Writing results: whole files or none."""

from __future__ import annotations

from sigguard.writers.annotations import write_quality_annotation
from sigguard.writers.atomic import atomic_file, atomic_path, write_bytes_atomic, write_text_atomic

__all__ = [
    "atomic_file",
    "atomic_path",
    "write_bytes_atomic",
    "write_quality_annotation",
    "write_text_atomic",
]
