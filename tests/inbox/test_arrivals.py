"""What counts as one recording, and when it has arrived."""

from __future__ import annotations

import os

import pytest
from dropped import drop, record_files

from sigguard.inbox.arrivals import Inbox, Settling
from sigguard.readers import open_recording
from sigguard.readers.base import sha256_of


class Clock:
    now = 0.0

    def __call__(self) -> float:
        return self.now


def settling(clock: Clock, *, settle_s: float = 3.0, patience_s: float = 60.0) -> Settling:
    return Settling(settle_s, patience_s, clock=clock, disk_clock=lambda: 0.0)


def test_a_record_is_its_header_with_its_files_and_companions_are_none(tmp_path):
    drop(tmp_path / "ward", "a")
    (tmp_path / "ward" / "a.atr").write_bytes(b"\x00\x01\x02\x03")
    (found,) = Inbox(tmp_path).look()
    assert found.name == "ward/a.hea" and [p.name for p in found.parts] == ["a.hea", "a.dat"]
    assert found.waits_for == ""
    with open_recording(found.path) as opened:  # the ledger's checksum is that of the report
        assert opened.info.sha256 == sha256_of(found.parts)


def test_a_record_of_several_segments_is_one_arrival_with_all_files(tmp_path):
    for k in (1, 2):
        drop(tmp_path, f"m_{k}", seed=k)
    (tmp_path / "m.hea").write_text("m/2 2 100 800\nm_1 400\nm_2 400\n")
    (found,) = Inbox(tmp_path).look()
    assert [p.name for p in found.parts] == ["m.hea", "m_1.hea", "m_1.dat", "m_2.hea", "m_2.dat"]
    with open_recording(found.path) as opened:
        assert opened.info.sha256 == sha256_of(found.parts)
    (tmp_path / "m_2.dat").unlink()
    (found,) = Inbox(tmp_path).look()
    assert "m_2.dat" in found.waits_for


def test_hidden_files_and_places_left_out_are_not_seen(tmp_path):
    drop(tmp_path / "out", "a")
    drop(tmp_path / ".sync", "b")
    (tmp_path / ".c.hea").write_text("c 1")
    assert Inbox(tmp_path, (tmp_path / "out",)).look() == []


@pytest.mark.parametrize("first", ["a.hea", "a.dat"])
def test_whichever_file_comes_first_waits_for_the_other(tmp_path, first):
    files = record_files("a")
    clock = Clock()
    inbox, wait = Inbox(tmp_path), settling(clock)
    (tmp_path / first).write_bytes(files[first])
    for clock.now in (0.0, 5.0, 50.0):
        ready, waiting = wait.split(inbox.look())
        assert ready == [] and list(waiting) == [first]
    (other,) = set(files) - {first}
    (tmp_path / other).write_bytes(files[other])
    for clock.now, n in ((51.0, 0), (53.9, 0), (54.1, 1)):
        ready, _ = wait.split(inbox.look())
        assert len(ready) == n
    assert ready[0].name == "a.hea"


def test_a_growing_file_is_left_alone_until_it_has_stopped(tmp_path):
    files = record_files("a")
    clock = Clock()
    inbox, wait = Inbox(tmp_path), settling(clock)
    (tmp_path / "a.hea").write_bytes(files["a.hea"])
    for k in range(16):
        clock.now = 2.0 * k
        with (tmp_path / "a.dat").open("ab") as out:
            out.write(files["a.dat"][100 * k : 100 * (k + 1)])
        assert wait.split(inbox.look())[0] == []
    assert (tmp_path / "a.dat").stat().st_size == len(files["a.dat"])
    clock.now += 3.1
    assert len(wait.split(inbox.look())[0]) == 1


def test_a_copy_that_stalls_short_of_what_the_header_promises_is_waited_for(tmp_path):
    files = record_files("a")
    clock = Clock()
    inbox, wait = Inbox(tmp_path), settling(clock)
    (tmp_path / "a.hea").write_bytes(files["a.hea"])
    (tmp_path / "a.dat").write_bytes(files["a.dat"][:-2])
    for clock.now in (0.0, 59.0):
        ready, waiting = wait.split(inbox.look())
        assert ready == [] and waiting
    assert "samples" in waiting["a.hea"]
    clock.now = 60.1
    assert [a.name for a in wait.split(inbox.look())[0]] == [
        "a.hea"
    ]  # patience has an end: it will be named unreadable


def test_a_change_that_keeps_size_and_time_is_noticed(tmp_path):
    path = drop(tmp_path, "a")
    (before,) = Inbox(tmp_path).look()
    data, kept = path.with_suffix(".dat"), os.stat(path.with_suffix(".dat"))
    data.write_bytes(bytes(len(data.read_bytes())))
    os.utime(data, ns=(kept.st_atime_ns, kept.st_mtime_ns))
    (after,) = Inbox(tmp_path).look()
    assert after.signature != before.signature


def test_links_out_are_refused_and_pipes_not_touched(tmp_path):
    inbox = tmp_path / "inbox"
    outside = drop(tmp_path / "outside", "secret")
    drop(inbox, "a")
    (inbox / "out.csv").symlink_to(outside)
    (inbox / "folder").symlink_to(outside.parent)
    (inbox / "loop").symlink_to(inbox)
    (inbox / "again.hea").symlink_to(inbox / "a.hea")
    os.mkfifo(inbox / "pipe.hea")
    found = {a.name: a for a in Inbox(inbox).look()}
    assert set(found) == {"a.hea", "out.csv", "folder", "again.hea"}
    for name in ("out.csv", "folder"):
        assert "link" in found[name].refused and "inside the inbox" in found[name].refused
    assert found["a.hea"].refused is None


def test_a_header_that_names_a_file_outside_does_not_wait_for_it_and_takes_no_part_of_it(tmp_path):
    drop(tmp_path, "secret")
    inbox = tmp_path / "inbox"
    inbox.mkdir()
    (inbox / "a.hea").write_text("a 1 100 400\n../secret.dat 16 1000/mV 16 0 0 0 0 I\n")
    (found,) = Inbox(inbox).look()
    assert found.waits_for == "" and [p.name for p in found.parts] == ["a.hea"]
