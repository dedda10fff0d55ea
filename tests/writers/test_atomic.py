"""Whole files or none."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from sigguard.errors import WriteError
from sigguard.writers import atomic_file, atomic_path, write_bytes_atomic, write_text_atomic


def test_text_and_bytes_arrive_whole(tmp_path: Path):
    path = write_text_atomic(tmp_path / "new" / "a.txt", "µV\n")
    assert path.read_bytes() == "µV\n".encode()
    assert write_bytes_atomic(path, b"\0\1").read_bytes() == b"\0\1"
    assert os.listdir(path.parent) == ["a.txt"]


def test_a_crash_leaves_the_old_file_and_nothing_else(tmp_path: Path):
    path = write_text_atomic(tmp_path / "a.txt", "old")
    with pytest.raises(RuntimeError), atomic_file(path, "w") as file:
        file.write("half")
        file.flush()
        assert path.read_text() == "old"
        raise RuntimeError("power cut")
    assert path.read_text() == "old"
    assert os.listdir(tmp_path) == ["a.txt"]


def test_an_interrupt_cleans_up_as_well(tmp_path: Path):
    with pytest.raises(KeyboardInterrupt), atomic_path(tmp_path / "a.txt") as temporary:
        temporary.write_text("half")
        raise KeyboardInterrupt
    assert os.listdir(tmp_path) == []


def test_what_the_system_refuses_is_a_write_error(tmp_path: Path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(WriteError, match="could not be written"):
        write_text_atomic(tmp_path / "file" / "below" / "a.txt", "x")
    (tmp_path / "folder").mkdir()
    with pytest.raises(WriteError):
        write_text_atomic(tmp_path / "folder", "x")
    assert sorted(os.listdir(tmp_path)) == ["file", "folder"]


def test_the_temporary_file_stands_beside_and_hidden(tmp_path: Path):
    with atomic_path(tmp_path / "a.txt") as temporary:
        assert temporary.parent == tmp_path
        assert temporary.name.startswith(".")
        temporary.write_text("x")


def test_rights_are_those_of_a_new_file(tmp_path: Path):
    (tmp_path / "plain").write_text("x")
    path = write_text_atomic(tmp_path / "a.txt", "x")
    assert path.stat().st_mode == (tmp_path / "plain").stat().st_mode
