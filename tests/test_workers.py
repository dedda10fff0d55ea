"""Shared out over processes, a recording gives the same report."""

import os

import numpy as np
import pytest

from sigguard import screening, segment_pass
from sigguard.errors import ReadError
from sigguard.screening import screen_path
from sigguard.workers import Reopen, Workers
from tests.readers.made import wfdb_record
from tests.simulated import leads_of, strip

FS = 500.0


def size_of(source, factor):
    return factor * source.info.n_samples


def die(source):
    os._exit(9)


def fail(source):
    raise ReadError("rec.dat", where="sample 7", expected="more", found="the end", remedy="copy it again")


@pytest.fixture(scope="module")
def path(tmp_path_factory):
    folder = tmp_path_factory.mktemp("rec")
    x = leads_of([strip(8, duration_s=130.0)], "I", "II")
    steps = np.rint(np.clip(x, -5, 5) * 1000).astype(int)
    return wfdb_record(folder, steps, name="long", fs="500", gains=["1000", "1000"], names=["I", "II"])


def test_results_come_in_order(path) -> None:
    n = round(130 * FS)
    assert list(Workers(Reopen(path), 2).run(size_of, ((k,) for k in range(7)))) == [k * n for k in range(7)]


def test_an_error_of_a_process_is_raised_here(path) -> None:
    with pytest.raises(ReadError, match="sample 7: expected more"):
        list(Workers(Reopen(path), 2).run(fail, [()]))


def test_a_killed_process_is_told_as_want_of_memory(path) -> None:
    with pytest.raises(MemoryError):
        list(Workers(Reopen(path), 2).run(die, [(), ()]))


def test_the_report_is_the_same(path, tmp_path, monkeypatch) -> None:
    monkeypatch.setattr(segment_pass, "LEAST_BATCHES", 1)
    monkeypatch.setattr(screening, "LEAST_ALARM_BLOCKS", 0)
    one = screen_path(path, out_dir=tmp_path / "one", page=False)
    two = screen_path(path, out_dir=tmp_path / "two", page=False, jobs=2)
    assert one.to_json() == two.to_json()
    for name in ("segments.csv", "report.json"):
        assert (tmp_path / "one/long" / name).read_bytes() == (tmp_path / "two/long" / name).read_bytes()
    np.testing.assert_array_equal(one.beats, two.beats)
