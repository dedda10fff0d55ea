from __future__ import annotations

import json
import sqlite3
import sys
from dataclasses import dataclass, field
from pathlib import Path

import pytest

pytest.register_assert_rewrite("torture")
import quick_screening  # noqa: E402

from sigguard.inbox.watch import StopRequest, Watcher, WatchSettings  # noqa: E402


@dataclass
class Station:
    """An inbox with its outputs, watched in this process."""

    root: Path
    lines: list[dict] = field(default_factory=list)
    said: list[str] = field(default_factory=list)

    @property
    def inbox(self) -> Path:
        return self.root / "inbox"

    @property
    def ledger(self) -> Path:
        return self.root / "out" / "ledger.sqlite"

    def once(self, **options):
        """One run as by cron; the lines that it printed."""
        settings = {"settle_s": 0.05, "patience_s": 0.0, "route_dir": self.root / "routed", **options}
        self.lines, self.said = [], []
        watcher = Watcher(
            WatchSettings(folder=self.inbox, out_dir=self.root / "out", ledger=self.ledger, **settings),
            tell=lambda line: self.lines.append(json.loads(line)),
            complain=self.said.append,
        )
        tally = watcher.run(StopRequest(), once=True)
        return self.lines, tally

    def rows(self, query: str) -> list[tuple]:
        db = sqlite3.connect(self.ledger)
        try:
            return db.execute(query).fetchall()
        finally:
            db.close()


@pytest.fixture
def station(tmp_path, monkeypatch) -> Station:
    monkeypatch.setitem(sys.modules, "sigguard.screening", quick_screening)
    monkeypatch.setenv("QUICK_LOG", str(tmp_path / "quick.log"))
    found = Station(tmp_path)
    found.inbox.mkdir()
    return found
