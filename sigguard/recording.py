"""A recording as facts: samples in millivolts, sampling rate, lead names, where it came from."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import datetime

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import UsageError

MIN_FS_HZ, MAX_FS_HZ = 50.0, 10_000.0
MAX_LEADS = 64


@dataclass(frozen=True, slots=True)
class RecordingInfo:
    """Everything known of a recording except its samples.

    Arrays run over leads, in the order of ``leads``. ``nan`` stands for unknown.
    """

    name: str
    leads: tuple[str, ...]
    fs_hz: float
    n_samples: int
    path: str | None = None
    format: str = "array"
    sha256: str | None = None
    start_time: datetime | None = None
    rails_mv: NDArray[np.float64] | None = (
        None  # (n_leads, 2): lowest and highest value the converter can give
    )
    step_mv: NDArray[np.float64] | None = None  # (n_leads,): one converter step
    band_hz: NDArray[np.float64] | None = None  # (n_leads, 2): recorded high-pass and low-pass corner
    assumed: tuple[str, ...] = ()  # what a reader had to take for granted, in plain words
    left_out: tuple[str, ...] = ()  # signals that are not ECG, by name
    device: str | None = None  # make and model of the recorder as the header states them
    identity: tuple[tuple[str, str], ...] = ()  # kept in memory only; leaves only with --with-identity

    @property
    def n_leads(self) -> int:
        return len(self.leads)

    @property
    def duration_s(self) -> float:
        return self.n_samples / self.fs_hz


@dataclass(frozen=True, slots=True, eq=False)
class Recording:
    """One or more leads over the same time.

    ``signal_mv`` is (n_leads, n_samples), millivolts, NaN where samples are missing; a single
    lead may be given as (n_samples,). Raises UsageError for shapes, rates or names that cannot be.
    """

    signal_mv: NDArray[np.floating]
    fs_hz: float
    leads: Sequence[str]
    name: str = "array"
    info: RecordingInfo | None = field(default=None)

    def __post_init__(self) -> None:
        try:
            signal = np.asarray(self.signal_mv, dtype=np.float64)
        except (TypeError, ValueError) as err:
            raise UsageError(
                f"signal_mv must be numbers in millivolts, found {type(self.signal_mv).__name__}"
            ) from err
        if signal.ndim == 1:
            signal = signal[np.newaxis]
        if signal.ndim != 2:
            raise UsageError(f"signal_mv must be (n_leads, n_samples), found {signal.ndim} dimensions")
        leads = (self.leads,) if isinstance(self.leads, str) else tuple(str(lead) for lead in self.leads)
        if signal.shape[0] != len(leads):
            raise UsageError(f"{len(leads)} lead names for {signal.shape[0]} signals; the two must agree")
        if not 1 <= len(leads) <= MAX_LEADS:
            raise UsageError(f"a recording has 1 to {MAX_LEADS} leads, found {len(leads)}")
        fs_hz = check_fs(self.fs_hz)
        if signal.shape[1] < 2:
            raise UsageError(f"a recording needs at least two samples, found {signal.shape[1]}")
        signal = np.where(np.isfinite(signal), signal, np.nan)
        leads = unique_names(leads)
        info = self.info or RecordingInfo(name=self.name, leads=leads, fs_hz=fs_hz, n_samples=signal.shape[1])
        for key, value in (
            ("signal_mv", signal),
            ("fs_hz", fs_hz),
            ("leads", leads),
            ("info", info),
            ("name", info.name),
        ):
            object.__setattr__(self, key, value)

    @property
    def n_samples(self) -> int:
        return self.signal_mv.shape[1]

    @property
    def duration_s(self) -> float:
        return self.n_samples / self.fs_hz


def check_fs(fs_hz: float) -> float:
    """The sampling rate as a float; UsageError unless it is a rate an ECG can have."""
    try:
        value = float(fs_hz)
    except (TypeError, ValueError) as err:
        raise UsageError(f"the sampling rate must be a number in hertz, found {fs_hz!r}") from err
    if not MIN_FS_HZ <= value <= MAX_FS_HZ:
        raise UsageError(
            f"the sampling rate must lie from {MIN_FS_HZ:g} to {MAX_FS_HZ:g} Hz, found {value:g}"
        )
    return value


def unique_names(names: Sequence[str]) -> tuple[str, ...]:
    """Names made unique without merging: a second ``II`` becomes ``II#2``."""
    seen: dict[str, int] = {}
    out = []
    for name in names:
        seen[name] = seen.get(name, 0) + 1
        out.append(name if seen[name] == 1 else f"{name}#{seen[name]}")
    return tuple(out)
