"""A few hundred spoilt files of each new format; ``python -m tests.external.mutate`` makes many thousands."""

from __future__ import annotations

from pathlib import Path

import pytest
from external import mutate


@pytest.mark.parametrize("name", mutate.MAKERS)
def test_spoilt_files_open_or_are_refused_in_a_sentence(name: str, tmp_path: Path):
    tally = mutate.run(name, tmp_path, 250, seed=1)
    assert tally.failures == []
    assert tally.opened > 10 and tally.refused > 10  # the changes are neither harmless nor all fatal


def test_the_watch_sees_what_it_watches_for(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """Each promise broken on purpose, by a reader that does what no reader may."""
    (tmp_path / "in").mkdir()
    (tmp_path / "outside").write_bytes(b"x")
    sound = mutate._read

    def told_as(reader) -> str:
        calls = iter([lambda path: 0, reader])
        monkeypatch.setattr(mutate, "_read", lambda path: next(calls)(path))
        return " ".join(mutate.run("ishne", tmp_path / "in", 1).failures)

    assert "open" in told_as(lambda path: (tmp_path / "outside").read_bytes() and 0)
    assert "KeyError" in told_as(lambda path: {}["no"])
    assert "held" in told_as(lambda path: len(bytearray(30_000_000)) * 0)
    monkeypatch.setattr(mutate, "SLOW_S", 0.0)
    assert "took" in told_as(lambda path: 0)
    monkeypatch.setattr(mutate, "_read", sound)
