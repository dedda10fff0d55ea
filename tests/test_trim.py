"""Trimmed copies of simulated recordings: whole, exact, and never over anybody else's files."""

from __future__ import annotations

import errno
import hashlib
import json
import os
import random
import signal
import subprocess
import sys
import time
from contextlib import suppress
from pathlib import Path

import numpy as np
import pytest
from readers.made import wfdb_record
from simulated import leads_of, strip

import sigguard
from sigguard import read_recording, trim
from sigguard.errors import UsageError, WriteError
from sigguard.findings import CAUTION
from sigguard.readers.wfdb_files import quiet_wfdb
from sigguard.readers.wfdb_stored import StoredWfdb
from sigguard.writers import records

FS_HZ = 250
STEPS_PER_MV = 200
BURST_S = (42.0, 44.0)


def noisy(burst_s=BURST_S, n_s: int = 90) -> np.ndarray:
    """(2, n) steps: a clean recording with one burst of movement and muscle on both leads."""
    ecg = strip(3, fs_hz=float(FS_HZ), duration_s=float(n_s))
    x = leads_of([ecg], "II", "V5").reshape(2, -1).copy()
    x += np.random.default_rng(5).normal(0, 0.008, x.shape)  # as any amplifier has it
    if burst_s:
        here = slice(int(burst_s[0] * FS_HZ), int(burst_s[1] * FS_HZ))
        rng = np.random.default_rng(4)
        for lead in x:
            lead[here] += rng.normal(0, 0.8, here.stop - here.start)
    return np.rint(x * STEPS_PER_MV).astype(np.int64)


def record(folder: Path, d: np.ndarray, fmt: int = 212, name: str = "rec", **more) -> Path:
    folder.mkdir(parents=True, exist_ok=True)
    gains = [f"{STEPS_PER_MV}/mV"] * 2
    return wfdb_record(folder, d, name=name, fmt=fmt, fs=str(FS_HZ), gains=gains, names=["II", "V5"], **more)


@pytest.fixture(scope="module")
def burst() -> np.ndarray:
    return noisy()


def checksums(folder: Path) -> dict[str, str]:
    return {p.name: hashlib.sha256(p.read_bytes()).hexdigest() for p in folder.iterdir() if p.is_file()}


def rdrecord(name: str, **how):
    with quiet_wfdb() as wfdb:
        return wfdb.rdrecord(name, **how)


def steps(header: Path) -> np.ndarray:
    with StoredWfdb(header) as stored:
        return np.array(stored.read(0, stored.n_frames, (-(1 << 40),) * len(stored.signals)))


@pytest.mark.parametrize("fmt", [16, 24, 212, 310])
def test_a_burst_goes_and_the_rest_is_the_sources(tmp_path: Path, burst: np.ndarray, fmt: int) -> None:
    d = np.clip(burst, -511, 511) if fmt == 310 else burst
    path = record(tmp_path / "in", d, fmt)
    before = checksums(tmp_path / "in")
    done = trim(path, keep="intervals", out=tmp_path / "out")
    assert [s.kept for s in done.spans] == [True, False, True]
    first, cut, last = done.spans
    assert (first.start, first.stop, cut.stop, last.stop) == (0, cut.start, last.start, d.shape[1])
    assert cut.start / FS_HZ <= BURST_S[0] + 0.5 and cut.stop / FS_HZ >= BURST_S[1] - 0.5
    assert (cut.stop - cut.start) / FS_HZ <= 5.0  # not the ten seconds of a segment
    for span in (first, last):
        copy = steps(done.manifest.parent / str(span.file))
        np.testing.assert_array_equal(copy, d[:, span.start : span.stop])
    assert checksums(tmp_path / "in") == before


def test_the_cut_lies_between_beats(tmp_path: Path, burst: np.ndarray) -> None:
    done = trim(record(tmp_path, burst), out=tmp_path / "out")
    beats = sigguard.check(record(tmp_path, noisy(None))).beats
    for edge in (done.spans[1].start, done.spans[1].stop):
        assert np.abs(beats - edge).min() > 0.15 * FS_HZ


def test_the_manifest_adds_up(tmp_path: Path, burst: np.ndarray) -> None:
    path = record(tmp_path / "in", burst)
    done = trim(path, out=tmp_path / "out", best=True)
    found = json.loads(done.manifest.read_text(encoding="utf-8"))
    assert found["source"]["name"] == "rec.hea"
    data = path.read_bytes() + path.with_suffix(".dat").read_bytes()
    assert found["source"]["sha256"] == hashlib.sha256(data).hexdigest()
    assert found["caution"] == CAUTION
    spans = found["spans"]
    assert set(spans[0]) == {"start_sample", "end_sample", "start_s", "end_s", "kept", "reason", "file"}
    assert sum(s["end_sample"] - s["start_sample"] for s in spans) == burst.shape[1]
    assert [s["start_sample"] for s in spans[1:]] == [s["end_sample"] for s in spans[:-1]]
    assert [s["file"] for s in spans] == ["rec_1.hea", None, "rec_2.hea"]
    assert found["best"]["file"] == "rec_best.hea"
    assert sorted(found["files"]) == sorted(os.listdir(tmp_path / "out"))


def test_blank_keeps_the_times(tmp_path: Path, burst: np.ndarray) -> None:
    done = trim(record(tmp_path / "in", burst), gaps="blank", out=tmp_path / "out")
    ours = read_recording(tmp_path / "out" / "rec.hea")
    theirs = rdrecord(str(tmp_path / "out" / "rec")).p_signal.T
    want = burst / STEPS_PER_MV
    cut = done.spans[1]
    want[:, cut.start : cut.stop] = np.nan
    np.testing.assert_allclose(ours.signal_mv, want, atol=1e-9)
    np.testing.assert_allclose(theirs, want, atol=1e-9)


def test_a_clean_recording_stays_whole(tmp_path: Path) -> None:
    d = noisy(None, 30)
    done = trim(record(tmp_path, d), out=tmp_path / "out")
    assert [(s.start, s.stop, s.kept) for s in done.spans] == [(0, d.shape[1], True)]


def test_of_which_nothing_is_fit_there_is_only_a_manifest(tmp_path: Path) -> None:
    d = np.rint(np.random.default_rng(1).normal(0, 300, (2, 60 * FS_HZ))).clip(-2000, 2000).astype(np.int64)
    d += noisy(None, 60)[:, : d.shape[1]]
    d = d.clip(-2000, 2000)
    for gaps in ("split", "blank"):
        done = trim(record(tmp_path, d), keep="all", out=tmp_path / gaps, gaps=gaps, best=True)
        assert not any(s.kept for s in done.spans)
        assert os.listdir(tmp_path / gaps) == ["rec.cuts.json"]


def test_text_is_put_into_fine_steps_and_said_so(tmp_path: Path) -> None:
    x = noisy(None, 20) / STEPS_PER_MV + 1e-5
    lines = ["time,II,V5"] + [f"{k / FS_HZ:.3f},{a:.6f},{b:.6f}" for k, (a, b) in enumerate(x.T)]
    (tmp_path / "table.csv").write_text("\n".join(lines) + "\n")
    done = trim(tmp_path / "table.csv", out=tmp_path / "out", units="mV")
    copy = rdrecord(str(tmp_path / "out" / "table_1"))
    np.testing.assert_allclose(copy.p_signal.T, np.round(x, 6), rtol=0, atol=1e-9)
    assert copy.fmt == ["32", "32"]
    assert any("1 nV" in note for note in json.loads(done.manifest.read_text())["notes"])


def test_remarks_come_along_only_when_asked(tmp_path: Path) -> None:
    path = record(tmp_path, noisy(None, 20), tail=" 10:00:00 01/02/2020")
    path.write_text(path.read_text() + "# Name: somebody\n")
    trim(path, out=tmp_path / "without")
    trim(path, out=tmp_path / "with", with_identity=True)
    assert all("somebody" not in p.read_bytes().decode("latin-1") for p in (tmp_path / "without").iterdir())
    assert "# Name: somebody" in (tmp_path / "with" / "rec_1.hea").read_text()


def test_nobody_elses_file_is_overwritten(tmp_path: Path) -> None:
    one, other = record(tmp_path / "a", noisy(None, 20)), record(tmp_path / "b", noisy(None, 30))
    out = tmp_path / "out"
    trim(one, out=out)
    before = checksums(out)
    assert trim(other, out=out).name == "rec-2"
    assert trim(one, out=out).name == "rec"  # its own again
    assert {k: v for k, v in checksums(out).items() if k in before} == before
    beside = trim(other, out=tmp_path / "b", gaps="blank")  # into the folder of the source itself
    assert beside.name == "rec-2"
    assert (
        checksums(tmp_path / "b")["rec.dat"]
        == hashlib.sha256(other.with_suffix(".dat").read_bytes()).hexdigest()
    )


def test_a_full_disk_is_one_clear_sentence(tmp_path: Path, monkeypatch, burst: np.ndarray) -> None:
    path = record(tmp_path / "in", burst)
    written = [0]
    encode = records.encode

    def full(steps: np.ndarray, fmt: int) -> bytes:
        written[0] += 1
        if written[0] > 3:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        return encode(steps, fmt)

    monkeypatch.setattr(records, "BLOCK_SAMPLES", 8000)
    monkeypatch.setattr(records, "encode", full)
    with pytest.raises(WriteError, match="the disk is full") as failed:
        trim(path, out=tmp_path / "out")
    assert "\n" not in str(failed.value) and "rec" in str(failed.value)
    assert os.listdir(tmp_path / "out") == []


@pytest.mark.parametrize(
    "wrong", [{"keep": "none"}, {"gaps": "none"}, {"leads": "I"}, {"min_span_s": -1.0}, {"leads": []}]
)
def test_what_makes_no_sense_is_said(tmp_path: Path, wrong: dict) -> None:
    with pytest.raises(UsageError):
        trim(record(tmp_path, noisy(None, 12)), out=tmp_path / "out", **wrong)


SLOW = """
import os, sys, time
from sigguard import trim
from sigguard.writers import records, staging
path, warm = sys.argv[1:]
trim(path, out=warm)
encode, replace = records.encode, os.replace
def slow_encode(*given):
    print("encode", flush=True); time.sleep(0.01); return encode(*given)
def slow_replace(*given):
    time.sleep(0.02); replace(*given)
records.encode, staging.os.replace, records.BLOCK_SAMPLES = slow_encode, slow_replace, 2000
print("warm", flush=True)
for line in sys.stdin:
    gaps, out = line.split()
    child = os.fork()
    if not child:
        trim(path, out=out, gaps=gaps)
        os._exit(0)
    print(child, flush=True)
    os.waitpid(child, 0)
    print("ended", flush=True)
"""


def lines_until(stream, wanted: str) -> list[str]:
    found = []
    while not found or found[-1] != wanted:
        line = stream.readline()
        assert line, f"ended after {found}"
        found.append(line.strip())
    return found


def test_killed_at_any_time_nothing_half_is_there(tmp_path: Path) -> None:
    path = record(tmp_path / "in", noisy((14.0, 16.0), 30))
    whole, before = {}, checksums(tmp_path / "in")
    for gaps in ("split", "blank"):
        trim(path, out=tmp_path / gaps, gaps=gaps)
        whole[gaps] = checksums(tmp_path / gaps)
    rng = random.Random(1)
    cut_short = 0
    command = [sys.executable, "-W", "ignore", "-c", SLOW, str(path), str(tmp_path / "warm")]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as parent:
        assert parent.stdin is not None and parent.stdout is not None
        lines_until(parent.stdout, "warm")
        for k in range(20):
            gaps = ("split", "blank")[k % 2]
            out = tmp_path / f"killed-{k}"
            print(gaps, out, file=parent.stdin, flush=True)
            said = lines_until(parent.stdout, "encode")  # it has begun to write
            time.sleep(rng.uniform(0.0, 0.35))
            while not any(line.isdigit() for line in said):
                said.append(parent.stdout.readline().strip())
            with suppress(ProcessLookupError):  # done before it could be killed
                os.kill(next(int(line) for line in said if line.isdigit()), signal.SIGKILL)
            lines_until(parent.stdout, "ended")
            there = checksums(out)
            cut_short += there != whole[gaps]
            assert there.items() <= whole[gaps].items()
            for header in (name for name in there if name.endswith(".hea") and "layout" not in name):
                rdrecord(str(out / header[:-4]), physical=False)
            assert checksums(tmp_path / "in") == before
            if k % 4 < 2:  # done again it lands in the same place
                assert trim(path, out=out, gaps=gaps).name == "rec"
                assert checksums(out) == whole[gaps]
        parent.stdin.close()
    assert cut_short >= 5
