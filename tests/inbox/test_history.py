"""Counts in the history, against a ledger whose entries were counted by hand; decisions of people."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import pytest

from sigguard.errors import LedgerError, UsageError
from sigguard.inbox import history
from sigguard.inbox.ledger import Entry, Ledger
from sigguard.inbox.overrule import overrule

# name, entry, day of arrival (noon of that day, UTC)
ENTRIES = [
    ("north/a.hea", "2026-03-01", Entry(verdict="repeat", device="Cart 1", culprit="LA", leads=(("I", 1.0), ("II", 0.0)), faults=(("I", "motion", 0.9), ("II", "motion", 0.1)))),
    ("north/b.hea", "2026-03-01", Entry(verdict="repeat", device="Cart 1", culprit="LA", leads=(("I", 0.6), ("II", 0.7)), faults=(("I", "motion", 0.9),))),
    ("north/c.hea", "2026-03-02", Entry(verdict="accept", device="Cart 2", leads=(("I", 0.0), ("II", 0.0)))),
    ("south/d.hea", "2026-03-02", Entry(verdict="repeat", device="=Cart", leads=(("II", 0.5),), faults=(("II", "mains", 0.5),))),
    ("south/e.hea", "2026-03-02", Entry(verdict="accept-in-part", culprit="RA", leads=(("II", 0.2),), faults=(("II", "motion", 0.2),))),
    ("south/f.hea", "2026-03-02", Entry(verdict="repeat", patient_first=("standstill",), leads=(("II", 1.0),))),
    ("south/g.csv", "2026-03-02", Entry(error="cannot be read")),
]  # fmt: skip


@pytest.fixture
def ledger(tmp_path, monkeypatch):
    with Ledger(tmp_path / "ledger.sqlite") as opened:
        for name, day, entry in ENTRIES:
            claim = opened.claim(name, "0" * 64, owner="x", signature="", n_bytes=1, out_dir=Path("none"))
            opened.finish(claim, "x", entry, line="{}", checked_at=1.0)
            opened.db.execute(
                "UPDATE recording SET arrived_at = unixepoch(?) WHERE name = ?", (f"{day} 12:00:00", name)
            )
        yield opened


def lines(ledger, group: str) -> dict[str, history.Line]:
    return {line.key: line for line in history.history_of(ledger) if line.group == group}


def counts(line: history.Line) -> tuple[int, int]:
    return line.recordings, line.repeats


def test_rates_by_source_device_and_day(ledger):
    (everything,) = lines(ledger, "all").values()
    assert counts(everything) == (6, 4) and everything.repeat_rate == pytest.approx(4 / 6)
    assert (everything.patient_first, everything.unreadable) == (1, 1)
    assert {k: counts(v) for k, v in lines(ledger, "source").items()} == {"north": (3, 2), "south": (3, 2)}
    assert {k: counts(v) for k, v in lines(ledger, "device").items()} == {
        "Cart 1": (2, 2), "Cart 2": (1, 0), "=Cart": (1, 1), "(not stated)": (2, 1),
    }  # fmt: skip
    assert {k: counts(v) for k, v in lines(ledger, "day").items()} == {
        "2026-03-01": (2, 2),
        "2026-03-02": (4, 2),
    }
    assert lines(ledger, "source")["north"].main_fault == "motion"
    assert lines(ledger, "source")["north"].main_electrode == "LA"


def test_a_lead_counts_the_repeats_in_which_it_was_spoilt(ledger):
    assert {k: counts(v) for k, v in lines(ledger, "lead").items()} == {"I": (3, 2), "II": (6, 3)}
    assert list(lines(ledger, "lead")) == ["I", "II"]


def test_the_share_of_repeats_that_an_electrode_causes(ledger):
    found = lines(ledger, "electrode")
    assert counts(found["LA"]) == (2, 2) and found["LA"].of_all_repeats == 0.5
    assert counts(found["RA"]) == (1, 0) and found["RA"].of_all_repeats == 0.0


def test_faults_count_a_recording_once_however_many_leads_show_them(ledger):
    assert {k: counts(v) for k, v in lines(ledger, "fault").items()} == {"motion": (3, 2), "mains": (1, 1)}


def test_an_overruling_stands_beside_the_verdict_and_counts_as_disagreement(ledger):
    made = overrule(ledger, "north/a.hea", verdict="accept", because="  rhythm  strip\nwas enough ")
    assert (made.original, made.verdict, made.because) == ("repeat", "accept", "rhythm strip was enough")
    overrule(ledger, "g.csv", verdict="repeat", because="read on another machine")
    overrule(ledger, "c", verdict="repeat", because="wrong arm")
    overrule(ledger, "c", verdict="accept", because="no, it was right")
    assert counts(lines(ledger, "all")["all"]) == (6, 4), "the program's verdicts stay"
    assert {k: v.overruled for k, v in lines(ledger, "source").items()} == {"north": 1, "south": 1}
    assert history.disagreements_of(ledger) == [
        {"source": "north", "original": "accept", "verdict": "accept", "n": 1},
        {"source": "north", "original": "repeat", "verdict": "accept", "n": 1},
        {"source": "south", "original": "unreadable", "verdict": "repeat", "n": 1},
    ]
    told = history.overrulings_of(ledger)
    assert [o["because"] for o in told][:2] == ["no, it was right", "wrong arm"] and len(told) == 4


def test_overruling_needs_a_verdict_a_reason_and_one_recording(ledger):
    with pytest.raises(UsageError, match="expected one of"):
        overrule(ledger, "north/a.hea", verdict="good", because="x")
    with pytest.raises(UsageError, match="reason"):
        overrule(ledger, "north/a.hea", verdict="accept", because=" \n ")
    with pytest.raises(LedgerError, match="found none"):
        overrule(ledger, "z.hea", verdict="accept", because="x")
    claim = ledger.claim("east/a.hea", "1" * 64, owner="x", signature="", n_bytes=1, out_dir=Path("none"))
    ledger.finish(claim, "x", Entry(verdict="accept"), line="{}", checked_at=1.0)
    with pytest.raises(UsageError, match="fits 2 recordings"):
        overrule(ledger, "a.hea", verdict="repeat", because="x")
    assert overrule(ledger, "a-2", verdict="repeat", because="x").name == "east/a.hea"
    assert len(history.overrulings_of(ledger)) == 1


def test_the_csv_can_be_read_and_runs_no_formula(ledger):
    rows = list(csv.DictReader(io.StringIO(history.as_csv(ledger))))
    found = {(row["group"], row["key"]): row for row in rows}
    assert found["electrode", "LA"]["of_all_repeats"] == "0.5"
    assert found["device", "'=Cart"]["repeats"] == "1"
    assert len(rows) == len(history.history_of(ledger))


def test_an_empty_ledger_has_an_empty_history(tmp_path):
    with Ledger(tmp_path / "new.sqlite") as empty:
        assert history.history_of(empty) == [] and "no recording yet" in history.as_text(empty)
        assert history.as_csv(empty).splitlines() == [",".join(history.COLUMNS)]
