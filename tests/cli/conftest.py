from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import fake_screening
import pytest

from sigguard.cli import main


@dataclass
class Ran:
    code: int
    out: list[str]
    err: list[str]


@pytest.fixture
def calls(monkeypatch):
    """Puts the stand-in for screening in place; gives the list of its calls."""
    monkeypatch.setitem(sys.modules, "sigguard.screening", fake_screening)
    fake_screening.CALLS.clear()
    return fake_screening.CALLS


@pytest.fixture
def sigguard(monkeypatch, capsys):
    """Runs the command line in this process."""

    def run(*args: object) -> Ran:
        monkeypatch.setattr(sys, "argv", ["sigguard", *map(str, args)])
        with pytest.raises(SystemExit) as left:
            main()
        said = capsys.readouterr()
        return Ran(int(left.value.code or 0), said.out.splitlines(), said.err.splitlines())

    return run


@pytest.fixture
def recordings(tmp_path):
    """Writes stand-in recordings: ``recordings(a="accept", b="repeat")`` gives their paths."""

    def write(**content: str) -> list[Path]:
        paths = []
        for name, text in content.items():
            path = tmp_path / f"{name}.txt"
            path.write_text(text)
            paths.append(path)
        return paths

    return write
