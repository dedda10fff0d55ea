"""Checks of what was typed, before anything is read or written; each raises UsageError or ProfileError."""

from __future__ import annotations

from collections.abc import Sequence
from enum import StrEnum
from math import isfinite
from pathlib import Path

from sigguard.errors import UsageError

MIN_SEGMENT_S, MAX_SEGMENT_S = 5.0, 30.0


class Mains(StrEnum):
    HZ_50 = "50"
    HZ_60 = "60"
    AUTO = "auto"


class Units(StrEnum):
    MILLIVOLT = "mV"
    MICROVOLT = "uV"


def check_segment(segment_s: float) -> float:
    if not (isfinite(segment_s) and MIN_SEGMENT_S <= segment_s <= MAX_SEGMENT_S):
        raise UsageError(
            f"--segment takes {MIN_SEGMENT_S:g} to {MAX_SEGMENT_S:g} seconds, found {segment_s:g}"
        )
    return segment_s


def check_jobs(jobs: int) -> int:
    if jobs < 1:
        raise UsageError(f"--jobs takes the number of processes, 1 or more, found {jobs}")
    return jobs


def check_profile(profile: str | None) -> str | None:
    if profile is not None:
        from sigguard.profile import load_profile

        load_profile(profile)
    return profile


def check_rate(fs_hz: float | None) -> float | None:
    if fs_hz is None:
        return None
    from sigguard.recording import check_fs

    return check_fs(fs_hz)


def check_paths(paths: Sequence[Path]) -> list[Path]:
    """The paths, if each is there; a WFDB record may go by its bare name."""
    for path in paths:
        try:
            there = path.exists() or path.with_name(f"{path.name}.hea").is_file()
        except (OSError, ValueError) as err:
            raise UsageError(f"{path}: cannot be looked at: {getattr(err, 'strerror', None) or err}") from err
        if not there:
            raise UsageError(f"{path}: no such file or folder")
    return list(paths)


def check_out(out_dir: Path, option: str = "--out") -> Path:
    """A folder to write to, made if it is not there."""
    try:
        out_dir.mkdir(parents=True, exist_ok=True)
    except OSError as err:
        raise UsageError(
            f"{option} {out_dir}: expected a folder that can be written to, found: {err.strerror}"
        ) from err
    return out_dir


def check_folder(option: str, folder: Path | None) -> Path | None:
    if folder is not None and not folder.is_dir():
        raise UsageError(f"{option} {folder}: no such folder")
    return folder


def check_inbox(folder: Path, *outputs: Path | None) -> Path:
    """The folder to watch, if it is there and not what is written to as well."""
    if not folder.is_dir():
        raise UsageError(f"{folder}: expected a folder to watch, found no such folder")
    if folder.resolve() in [place.resolve() for place in outputs if place is not None]:
        raise UsageError(f"{folder}: reports and copies need another folder than the inbox itself")
    return folder


def check_seconds(option: str, seconds: float, *, least_s: float) -> float:
    if not (isfinite(seconds) and seconds >= least_s):
        raise UsageError(f"{option} takes {least_s:g} seconds or more, found {seconds:g}")
    return seconds
