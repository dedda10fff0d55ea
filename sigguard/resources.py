"""Where the files that ship with the package are: beside a checkout, or inside an installed wheel."""

from __future__ import annotations

from io import BytesIO
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import ModelError, UsageError

KINDS = ("models", "synthetic")
_PACKAGE = Path(__file__).resolve().parent


def resource_path(kind: str, name: str) -> Path:
    """Path of a shipped file: kind "models" or "synthetic", name as in the folder.

    In an installed package the folders are ``sigguard/_models`` and ``sigguard/_synthetic``; in a checkout
    they lie beside the package. Raises UsageError for an unknown kind, a name that leaves the folder, or a
    file that is not there.
    """
    if kind not in KINDS:
        raise UsageError(f"kind of shipped file must be one of {', '.join(KINDS)}, found {kind!r}")
    for folder in (_PACKAGE / f"_{kind}", _PACKAGE.parent / kind):
        path = folder / name
        if path.exists() and path.resolve().is_relative_to(folder.resolve()):
            return path
    raise UsageError(f"shipped file {kind}/{name} not found; the installation may be incomplete")


def model_arrays(file: str, what: str) -> dict[str, NDArray]:
    """The plain arrays of a shipped model file; ModelError where it is missing or damaged."""
    try:
        raw = resource_path("models", file).read_bytes()
        with np.load(BytesIO(raw), allow_pickle=False) as archive:
            return {key: archive[key] for key in archive.files}
    except (UsageError, OSError, ValueError) as err:
        raise ModelError(f"{file}: the {what} cannot be read; the installation may be incomplete") from err
