"""Trimmed copies of open recordings: what goes, what stays, and that it is the source's own.

Run as a script for the figures: ``python -m tests.external.test_trim DATA``.
"""

from __future__ import annotations

import hashlib
import json
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from sigguard import check, read_recording, trim
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.segments import GRADES
from sigguard.trimming import Trimmed

# 118e00: noise added from 5 to 7, 9 to 11, 13 to 15 and 17 to 19 min (README of the open data)
NOISY_S = ((300, 420), (540, 660), (780, 900), (1020, 1140))
INTERVALS = GRADES.index("intervals")


@dataclass(frozen=True)
class NoiseStress:
    """Shares from 0 to 1, and the segments of the copies measured again."""

    noisy_gone: float
    unseen_noise_gone: float
    fit_stay: float
    segments_again: int
    fit_again: int


def noise_stress(data: Path, out: Path, record: str = "118e00") -> NoiseStress:
    """What ``--keep intervals`` makes of a noise-stress record."""
    path = data / "nstdb" / record
    report = check(path)
    done = trim(path, keep="intervals", out=out)
    second = np.arange(int(done.info.duration_s)) + 0.5
    at = second * done.info.fs_hz
    kept = np.zeros(len(second), bool)
    for span in done.spans:
        kept[(at >= span.start) & (at < span.stop)] = span.kept
    noisy = np.zeros(len(second), bool)
    for start, stop in NOISY_S:
        noisy[start:stop] = True
    n_leads = len(report.info.leads)
    grade = np.asarray(report.segments.grade).reshape(-1, n_leads).max(axis=1)
    starts = np.asarray(report.segments.start_s)[::n_leads]
    fit = grade[np.searchsorted(starts, second, side="right") - 1] >= INTERVALS
    again = segments_again(done, "any", INTERVALS)
    return NoiseStress(
        noisy_gone=float((~kept[noisy]).mean()),
        unseen_noise_gone=float((~kept[1020:1140]).mean()),
        fit_stay=float(kept[fit & ~noisy].mean()),
        segments_again=len(again),
        fit_again=int(again.sum()),
    )


def segments_again(done: Trimmed, leads: str, level: int) -> np.ndarray:
    """Of each segment of the kept copies of 10 s and more, measured again: does it have the grade?"""
    out = []
    for span in done.spans:
        if not span.kept or "patient first" in span.reason or (span.stop - span.start) / done.info.fs_hz < 10:
            continue
        report = check(done.manifest.parent / span.file)
        grade = np.asarray(report.segments.grade).reshape(-1, len(report.info.leads))
        best = grade.max(axis=1) if leads == "any" else grade.min(axis=1)
        out += (best >= level).tolist()
    return np.array(out, dtype=bool)


def digits(path: Path) -> np.ndarray:
    """Steps by the wfdb package, not by our own reader."""
    with quiet_wfdb() as wfdb:
        return wfdb.rdrecord(str(path), physical=False).d_signal


def checksums(folder: Path) -> dict[str, str]:
    return {
        p.name: hashlib.sha256(p.read_bytes()).hexdigest() for p in sorted(folder.iterdir()) if p.is_file()
    }


def test_noise_goes_and_what_is_fit_stays(open_data: Path, tmp_path: Path) -> None:
    found = noise_stress(open_data, tmp_path)
    assert found.noisy_gone >= 0.90
    assert found.unseen_noise_gone >= 0.90
    assert found.fit_stay >= 0.95
    assert found.segments_again > 30
    assert found.fit_again / found.segments_again >= 0.97


@pytest.mark.parametrize(
    "record",
    ["misc/s0010_re", "misc/a103l"],  # 16 and 212 bits are read back in tests/test_trim.py
    ids=["two-files", "16+24"],
)
def test_kept_samples_are_the_sources_bit_for_bit(open_data: Path, tmp_path: Path, record: str) -> None:
    before = checksums((open_data / record).parent)
    done = trim(open_data / record, keep="rhythm", leads="any", out=tmp_path)
    source = digits(open_data / record)
    kept = [span for span in done.spans if span.kept]
    assert kept
    for span in kept:
        copy = digits(tmp_path / Path(span.file).stem)
        np.testing.assert_array_equal(copy, source[span.start : span.stop])
    assert done.spans[0].start == 0 and done.spans[-1].stop == len(source)
    assert all(a.stop == b.start for a, b in zip(done.spans, done.spans[1:], strict=False))
    assert checksums((open_data / record).parent) == before


def test_a_blank_copy_keeps_the_time_base(open_data: Path, tmp_path: Path) -> None:
    path = open_data / "mitdb" / "203"
    done = trim(path, keep="rhythm", gaps="blank", out=tmp_path)
    with quiet_wfdb() as wfdb:
        copy, source = wfdb.rdrecord(str(tmp_path / "203")).p_signal, wfdb.rdrecord(str(path)).p_signal
    ours = read_recording(tmp_path / "203.hea").signal_mv
    assert copy.shape == source.shape and ours.shape == source.T.shape
    assert {span.kept for span in done.spans} == {True, False}
    for span in done.spans:
        here = slice(span.start, span.stop)
        if span.kept:
            np.testing.assert_array_equal(copy[here], source[here])
            np.testing.assert_allclose(ours[:, here], source[here].T, atol=1e-12)
        else:
            assert np.isnan(copy[here]).all() and np.isnan(ours[:, here]).all()
    assert (tmp_path / "203.atr").read_bytes()[-2:] == b"\0\0"


@pytest.mark.parametrize("record", ["106"])
def test_each_beat_is_still_on_its_sample(open_data: Path, tmp_path: Path, record: str) -> None:
    path = open_data / "mitdb" / record
    split = trim(path, keep="rhythm", out=tmp_path / "split")
    trim(path, keep="rhythm", gaps="blank", out=tmp_path / "blank")
    with quiet_wfdb() as wfdb:
        source = wfdb.rdann(str(path), "atr")
        blank = wfdb.rdann(str(tmp_path / "blank" / record), "atr")
        copies = [
            (span, wfdb.rdann(str(tmp_path / "split" / Path(span.file).stem), "atr"))
            for span in split.spans
            if span.kept
        ]
    np.testing.assert_array_equal(blank.sample, source.sample)
    assert blank.symbol == source.symbol and blank.aux_note == source.aux_note
    assert copies
    for span, copy in copies:
        here = (source.sample >= span.start) & (source.sample < span.stop)
        np.testing.assert_array_equal(copy.sample + span.start, source.sample[here])
        assert copy.symbol == [s for s, inside in zip(source.symbol, here, strict=True) if inside]
        np.testing.assert_array_equal(copy.subtype, source.subtype[here])
        np.testing.assert_array_equal(copy.chan, source.chan[here])


@pytest.mark.parametrize("record", ["cu20"])
def test_fibrillation_is_kept_and_named(open_data: Path, tmp_path: Path, record: str) -> None:
    """Stretches marked by eye for this project, ± 2 s (README of the open data)."""
    marked = {"cu01": [(214, 508)], "cu20": [(244, 269)], "cu34": [(118, 131), (388, 430)]}[record]
    done = trim(open_data / "cudb" / record, keep="all", out=tmp_path)
    assert done.patient_first
    fs_hz = done.info.fs_hz
    for start_s, end_s in marked:
        over = [
            max(0.0, min(s.stop / fs_hz, end_s) - max(s.start / fs_hz, start_s))
            for s in done.spans
            if s.kept and "patient first" in s.reason
        ]
        assert sum(over) >= 0.9 * (end_s - start_s)
    manifest = json.loads(done.manifest.read_text(encoding="utf-8"))
    assert len(manifest["patient_first"]) == len(done.patient_first)


def main(data: Path) -> None:
    for record in ("118e00", "118e12"):
        with tempfile.TemporaryDirectory() as folder:
            print(record, noise_stress(data, Path(folder), record))
    for record in ("mitdb/106", "mitdb/203", "mitdb/208", "mitdb/118", "mitdb/230"):
        for keep in ("rhythm", "intervals", "all"):
            with tempfile.TemporaryDirectory() as folder:
                done = trim(data / record, keep=keep, out=folder)
                again = segments_again(done, "any", GRADES.index(keep))
                n = sum(s.kept for s in done.spans)
                print(
                    f"{record} {keep}: {done.kept_s:.0f} of {done.info.duration_s:.0f} s kept in {n} spans; "
                    f"measured again {int(again.sum())} of {len(again)} segments hold",
                    flush=True,
                )


if __name__ == "__main__":
    main(Path(sys.argv[1]))
