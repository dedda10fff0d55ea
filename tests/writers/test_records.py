"""Our WFDB writer, held against the wfdb package's reader."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from sigguard.errors import UsageError, WriteError
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.readers.wfdb_header import FORMATS
from sigguard.readers.wfdb_stored import StoredWfdb
from sigguard.writers import records
from sigguard.writers.records import (
    RecordFrame,
    SignalSpec,
    encode,
    later,
    number_text,
    write_master,
    write_record,
)

WRITTEN = (16, 24, 32, 61, 80, 160, 212)


def spec(fmt: int, name: str, **change: object) -> SignalSpec:
    known = dict(fmt=fmt, per_frame=1, gain=200.0, baseline=-7, unit="mV", adc_bits=0, adc_zero=0, name=name)
    return SignalSpec(**(known | change))


def steps(n_signals: int, n: int, fmt: int, seed: int = 1) -> list[np.ndarray]:
    half = 1 << (FORMATS[fmt][2] - 1)
    return list(np.random.default_rng(seed).integers(-half, half, size=(n_signals, n)))


@pytest.mark.parametrize("fmt", WRITTEN)
@pytest.mark.parametrize("n_signals", [1, 3])
@pytest.mark.parametrize("n", [400, 401])
def test_wfdb_reads_what_was_written(tmp_path: Path, monkeypatch, fmt: int, n_signals: int, n: int) -> None:
    monkeypatch.setattr(records, "BLOCK_SAMPLES", 100)  # several blocks
    d = steps(n_signals, n, fmt)
    specs = [spec(fmt, f"s{k}") for k in range(n_signals)]
    write_record(tmp_path, "r", specs, lambda a, b: [x[a:b] for x in d], 0, n, RecordFrame(360.0))
    with quiet_wfdb() as wfdb:
        found = wfdb.rdrecord(str(tmp_path / "r"), physical=False)
    np.testing.assert_array_equal(found.d_signal.T, d)
    assert (found.fs, found.sig_name, found.adc_gain, found.baseline) == (
        360,
        [s.name for s in specs],
        [200.0] * n_signals,
        [-7] * n_signals,
    )
    # 16 bits either way: signed in header(5), unsigned in the package
    assert [c % 65536 for c in found.checksum] == [c % 65536 for c in found.calc_checksum()]
    assert found.init_value == [int(x[0]) for x in d]


def test_files_of_two_formats_and_several_samples_a_frame(tmp_path: Path) -> None:
    a, b, c = steps(1, 300, 16)[0], steps(1, 600, 16, 2)[0], steps(1, 300, 212, 3)[0]
    specs = [spec(16, "a"), spec(16, "b", per_frame=2), spec(212, "c", gain=None, unit=None)]

    def read(first: int, last: int) -> list[np.ndarray]:
        return [a[first:last], b[2 * first : 2 * last], c[first:last]]

    files = write_record(tmp_path, "r", specs, read, 100, 250, RecordFrame(250.0))
    assert files == ["r.dat", "r-2.dat", "r.hea"]
    with StoredWfdb(tmp_path / "r.hea") as stored:
        found = stored.read(0, 150, (0, 0, 0))
        assert stored.signals[2].gain is None
    for got, want in zip(found, read(100, 250), strict=True):
        np.testing.assert_array_equal(got, want)


def test_gaps_are_null_segments(tmp_path: Path) -> None:
    d = steps(2, 100, 16)
    specs = [spec(16, "I"), spec(16, "II")]
    for name, first in (("r_1", 0), ("r_2", 60)):
        write_record(
            tmp_path, name, specs, lambda a, b: [x[a:b] for x in d], first, first + 40, RecordFrame(100.0)
        )
    write_master(tmp_path, "r", specs, [("r_1", 40), (None, 20), ("r_2", 40)], RecordFrame(100.0))
    assert "~ 20" in (tmp_path / "r.hea").read_text().splitlines()
    with quiet_wfdb() as wfdb:
        found = wfdb.rdrecord(str(tmp_path / "r")).p_signal.T
    want = (np.array(d, dtype=float) + 7) / 200
    want[:, 40:60] = np.nan
    want[np.array(d) == -32768] = np.nan
    np.testing.assert_allclose(found, want, rtol=0, atol=1e-9)


def test_a_step_that_does_not_fit_is_an_error() -> None:
    for fmt in (16, 24, 80, 212):
        half = 1 << (FORMATS[fmt][2] - 1)
        for wrong in (half, -half - 1):
            with pytest.raises(WriteError, match=f"format {fmt}"):
                encode(np.array([wrong]), fmt)
    with pytest.raises(UsageError, match="508"):
        encode(np.array([0]), 508)


def test_signals_of_a_record_with_gaps_need_names(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="names"):
        write_master(tmp_path, "r", [spec(16, "I"), spec(16, "I")], [("r_1", 4)], RecordFrame(100.0))


def test_start_time_and_remarks(tmp_path: Path) -> None:
    start = later(datetime(2020, 2, 28, 23, 59, 59), 2.5)
    frame = RecordFrame(100.0, start, ("a\nb", "c"))
    write_record(tmp_path, "r", [spec(16, "I")], lambda a, b: [np.zeros(b - a, np.int64)], 0, 10, frame)
    with quiet_wfdb() as wfdb:
        found = wfdb.rdheader(str(tmp_path / "r"))
    assert found.base_datetime == datetime(2020, 2, 29, 0, 0, 1, 500_000)
    assert found.comments == ["a?b", "c"]


@pytest.mark.parametrize("value", [200.0, 0.1, 10520.0, 7.30001, 1 / 3, 999.9999999])
def test_numbers_lose_nothing(value: float) -> None:
    assert float(number_text(value)) == value
