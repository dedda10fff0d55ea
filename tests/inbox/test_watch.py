"""One run over an inbox: what is checked, how often, where copies go, what is said."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import time

import jsonschema
import pytest
import quick_screening
from dropped import ROOT, drop, environment, record_files, start, wait_for

from sigguard.inbox import route, watch
from sigguard.inbox.arrivals import Inbox
from sigguard.inbox.ledger import Ledger
from sigguard.report.document import load_schema


def begun(station) -> int:
    return sum(line.startswith("begin") for line in (station.root / "quick.log").read_text().splitlines())


def test_each_content_is_checked_once_and_changed_content_again(station):
    path = drop(station.inbox, "accept-a", seed=1)
    assert len(station.once()[0]) == 1
    assert station.once()[0] == [] and begun(station) == 1
    os.utime(path)  # touched, not changed
    assert station.once()[0] == [] and begun(station) == 1
    drop(station.inbox, "accept-a", seed=2)
    (line,) = station.once()[0]
    assert begun(station) == 2 and line["report"].endswith("accept-a-2")
    drop(station.inbox, "accept-a", seed=1)  # back to the first content: known
    assert station.once()[0] == []
    assert station.rows("SELECT count(*), count(DISTINCT sha256) FROM recording") == [(2, 2)]


def test_recordings_of_one_name_keep_their_own_reports_and_copies(station):
    for ward in ("north", "south"):
        drop(station.inbox / ward, "repeat-a", seed=len(ward) + (ward == "north"))
    lines, _ = station.once()
    assert len({line["report"] for line in lines}) == len({line["routed_to"] for line in lines}) == 2
    for line in lines:
        with open(f"{line['report']}/report.json", encoding="utf-8") as file:
            report = json.load(file)
        jsonschema.validate(report, load_schema())
        assert report["recording"]["sha256"] == line["sha256"]


def test_every_verdict_has_its_place_and_copies_equal_their_source(station):
    for k, name in enumerate(("accept-a", "repeat-b", "alarm-c")):
        drop(station.inbox, name, seed=k)
    (station.inbox / "broken.csv").write_text("I,II\n1,2\nword,3\n")
    lines, tally = station.once()
    where = {line["name"]: line["routed_to"].split(os.sep)[-2] for line in lines}
    assert where == {
        "accept-a.hea": "accept",
        "repeat-b.hea": "repeat",
        "alarm-c.hea": "patient-first",
        "broken.csv": "unreadable",
    }
    assert (tally.n_patient_first, tally.n_repeat, tally.n_unreadable) == (1, 2, 1)
    copy = station.root / "routed" / "repeat" / "repeat-b"
    for file in ("repeat-b.hea", "repeat-b.dat"):
        assert (copy / file).read_bytes() == (station.inbox / file).read_bytes()
    reason = (station.root / "routed" / "unreadable" / "broken" / "reason.txt").read_text()
    assert "broken.csv" in reason and reason.strip() == [x["error"] for x in lines if x["error"]][0]
    assert not list(station.root.rglob("*.part"))


def test_an_alarm_is_not_counted_as_noise(station):
    drop(station.inbox, "alarm-a")
    (line,) = station.once()[0]
    assert line["patient_first"] == ["standstill"] and line["faults"] == {} and line["electrode"] is None
    assert (
        station.rows("SELECT count(*) FROM fault") == station.rows("SELECT count(*) FROM electrode") == [(0,)]
    )


def test_what_cannot_be_read_gets_a_reason_and_the_others_are_checked(station):
    (station.inbox / "odd.bin").write_bytes(bytes(range(256)))
    (station.inbox / "empty.csv").write_bytes(b"")
    (station.inbox / "half.hea").write_text("half 2 100 400\nhalf.dat 16 1000/mV 16 0 0 0 0 I\n")
    (station.inbox / "outside.hea").write_text("outside 1 100 400\n../x.dat 16 1000/mV 16 0 0 0 0 I\n")
    (station.inbox / "link.csv").symlink_to(__file__)
    drop(station.inbox, "bug-a")
    drop(station.inbox, "accept-a", seed=1)
    lines, tally = station.once()
    errors = {line["name"]: line["error"] for line in lines}
    assert (tally.n_checked, tally.n_unreadable) == (1, 6)
    assert "no known format" in errors["odd.bin"] and "an empty file" in errors["empty.csv"]
    assert "line" in errors["half.hea"] and "own folder" in errors["outside.hea"]
    assert "inside the inbox" in errors["link.csv"] and "ZeroDivisionError" in errors["bug-a.hea"]
    assert not (station.root / "routed" / "unreadable" / "link" / "link.csv").exists()
    assert all("\n" not in text for text in station.said) and len(station.said) == 6
    assert station.once()[0] == []


def test_missing_parts_that_come_later_are_checked_then(station):
    files = record_files("accept-a")
    (station.inbox / "accept-a.hea").write_bytes(files["accept-a.hea"])
    lines, tally = station.once(patience_s=60.0)
    assert lines == [] and "accept-a.dat" in tally.left["accept-a.hea"]
    assert "no such file" in station.once()[0][0]["error"]
    (station.inbox / "accept-a.dat").write_bytes(files["accept-a.dat"])
    assert station.once()[0][0]["verdict"] == "accept"


def test_what_changes_while_it_is_checked_is_not_entered(station, monkeypatch):
    path = drop(station.inbox, "accept-a", seed=1)
    real = quick_screening.screen_path

    def meanwhile(given, **settings):
        report = real(given, **settings)
        drop(station.inbox, "accept-a", seed=2)
        return report

    monkeypatch.setattr(quick_screening, "screen_path", meanwhile)
    lines, tally = station.once()
    assert lines == [] and "changed" in tally.left["accept-a.hea"]
    assert not (station.root / "out" / "accept-a").exists() and station.rows("SELECT * FROM recording") == []
    monkeypatch.setattr(quick_screening, "screen_path", real)
    (line,) = station.once()[0]
    assert line["sha256"] == watch.sha256_of([path, path.with_suffix(".dat")])


def test_no_identity_anywhere(station):
    path = drop(station.inbox, "accept-a", device="Cart 7")
    with path.open("a", encoding="utf-8") as header:
        header.write("# Name: Wilhelmine Nobody, born 1900-01-01\n")
    lines, _ = station.once(route_dir=None)
    assert station.rows("SELECT device FROM recording") == [("Cart 7",)]
    assert len(lines) == 1
    for file in (p for p in (station.root / "out").rglob("*") if p.is_file()):
        assert b"Wilhelmine" not in file.read_bytes() and b"1900-01-01" not in file.read_bytes()
    assert "Wilhelmine" not in json.dumps(lines)


def test_files_that_nobody_may_read_are_named_in_the_end(station, monkeypatch):
    drop(station.inbox, "accept-a")

    def refuse(parts):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(watch, "sha256_of", refuse)
    lines, tally = station.once(patience_s=60.0)
    assert lines == [] and "Permission denied" in tally.left["accept-a.hea"]
    assert "Permission denied" in station.once()[0][0]["error"]


def test_a_full_disk_is_not_the_recordings_fault(station, monkeypatch):
    drop(station.inbox, "accept-a")

    def full(*args, **settings):
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(quick_screening, "screen_path", full)
        for _ in range(10):
            lines, tally = station.once()
            assert lines == [] and "No space" in tally.left["accept-a.hea"]
    assert station.once()[0][0]["verdict"] == "accept"


def test_a_copy_that_fails_is_told_and_made_later(station, monkeypatch):
    drop(station.inbox, "repeat-a")
    with monkeypatch.context() as patch:
        patch.setattr(shutil, "copyfileobj", lambda read, write, size: write.write(b"other content"))
        (line,) = station.once()[0]
    assert line["routed_to"] is None and "differs" in line["route_error"]
    assert not list((station.root / "routed").rglob("repeat-a.*"))
    station.once()
    assert station.rows("SELECT routed_to IS NOT NULL, route_error FROM recording") == [(1, None)]
    copy = station.root / "routed" / "repeat" / "repeat-a" / "repeat-a.dat"
    assert copy.read_bytes() == (station.inbox / "repeat-a.dat").read_bytes()


def test_a_recording_that_ends_every_check_is_given_up(station):
    path = drop(station.inbox, "accept-a")
    sha256 = watch.sha256_of([path, path.with_suffix(".dat")])
    facts = dict(signature="", n_bytes=1, out_dir=station.root / "out")
    with Ledger(station.ledger) as ledger:
        for _ in range(8):
            assert ledger.claim("accept-a.hea", sha256, owner="elsewhere|1||x", lease_s=-1.0, **facts).tries
    assert "cut off 8 times" in station.once()[0][0]["error"]


def test_a_line_not_printed_before_a_kill_is_printed_by_the_next_run(station):
    drop(station.inbox, "accept-a")
    (line,) = station.once()[0]
    done = subprocess.run([sys.executable, "-c", "from sigguard.inbox.owner import *; print(this_process('x'))"],
                          env={**os.environ, "PYTHONPATH": str(ROOT)}, capture_output=True, text=True, check=True)  # fmt: skip
    with Ledger(station.ledger) as ledger:
        ledger.db.execute("UPDATE recording SET told = 0, owner = ?", (done.stdout.strip(),))
    assert station.once()[0] == [line]
    assert station.once()[0] == []


def test_what_is_taken_away_after_a_crash_is_entered_as_gone_and_checked_if_it_returns(station):
    path = drop(station.inbox, "accept-a")
    sha256 = watch.sha256_of([path, path.with_suffix(".dat")])
    with Ledger(station.ledger) as ledger:
        ledger.claim(
            "accept-a.hea",
            sha256,
            owner="e|1||x",
            lease_s=-1.0,
            signature="",
            n_bytes=1,
            out_dir=station.root,
        )
    kept = {p: p.read_bytes() for p in (path, path.with_suffix(".dat"))}
    for file in kept:
        file.unlink()
    assert station.once()[0] == [] and "taken from the inbox" in station.said[0]
    for file, data in kept.items():
        file.write_bytes(data)
    assert station.once()[0][0]["verdict"] == "accept"


@pytest.mark.skipif(os.name == "nt", reason="signals of POSIX")
def test_a_recording_that_grows_for_seconds_is_touched_only_when_whole(tmp_path):
    inbox = tmp_path / "inbox"
    inbox.mkdir()
    files = record_files("accept-a", n=4000)
    process = start(tmp_path, "--settle", 0.8, "--every", 0.1, env=environment(tmp_path))
    log = tmp_path / "quick.log"
    try:
        (inbox / "accept-a.hea").write_bytes(files["accept-a.hea"])
        for k in range(16):
            with (inbox / "accept-a.dat").open("ab") as out:
                out.write(files["accept-a.dat"][1000 * k : 1000 * (k + 1)])
            assert not log.exists()
            time.sleep(0.25)
        assert wait_for(lambda: (tmp_path / "lines").read_text().count("\n") == 1)
    finally:
        process.terminate()
        process.wait(30)
    assert log.read_text().splitlines() == ["begin accept-a.hea", "end accept-a.hea"]
    assert json.loads((tmp_path / "lines").read_text())["verdict"] == "accept"


def test_unfinished_files_of_a_killed_writer_are_taken_away(tmp_path):
    (tmp_path / ".report.json.abc.part").write_text("half")
    (tmp_path / "report.json").write_text("{}")
    route.remove_unfinished(tmp_path)
    assert [p.name for p in tmp_path.iterdir()] == ["report.json"]


def test_what_another_has_in_hand_is_read_once_and_taken_when_it_is_free(station, monkeypatch):
    path = drop(station.inbox, "accept-a")
    sha256 = watch.sha256_of([path, path.with_suffix(".dat")])
    (arrival,) = Inbox(station.inbox).look()
    settings = watch.WatchSettings(folder=station.inbox, out_dir=station.root / "out", ledger=station.ledger)
    watcher = watch.Watcher(settings, tell=station.lines.append, complain=station.said.append)
    reads, real = [], watch.sha256_of
    monkeypatch.setattr(watch, "sha256_of", lambda parts: reads.append(parts) or real(parts))
    with Ledger(station.ledger) as ledger:
        ledger.claim(
            "accept-a.hea", sha256, owner="elsewhere|1||x", signature="", n_bytes=1, out_dir=station.root
        )
        for _ in range(5):
            assert "another process" in watcher._one(ledger, arrival)
        assert len(reads) == 1 and station.lines == []
        ledger.renew("elsewhere|1||x", lease_s=-1.0)
        assert watcher._one(ledger, arrival) is None
    assert len(station.lines) == 1
