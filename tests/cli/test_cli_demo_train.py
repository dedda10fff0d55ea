from __future__ import annotations

import sys
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture
def demo(monkeypatch, calls):
    """Stands in for the simulator: two recordings of the given contents."""
    module = ModuleType("sigguard.simulate.demo")
    module.contents = ["accept", "alarm"]

    def write_demo(folder: Path) -> list[Path]:
        paths = [folder / f"demo{k}.txt" for k in range(len(module.contents))]
        for path, text in zip(paths, module.contents, strict=True):
            path.write_text(text)
        return paths

    module.write_demo = write_demo
    monkeypatch.setitem(sys.modules, "sigguard.simulate.demo", module)
    return module


def test_demo_writes_checks_and_says_where(sigguard, demo, calls, tmp_path):
    ran = sigguard("demo", tmp_path / "d")
    assert ran.code == 0  # whatever is found on them, it is meant to be
    assert len(ran.out) == 2 and ran.out[1].startswith("PATIENT FIRST")
    assert ran.err == [
        f"Reports: {tmp_path / 'd' / 'reports' / 'index.html'}",
        f"Recordings: {tmp_path / 'd'}",
    ]
    assert {c["out_dir"] for c in calls} == {tmp_path / "d" / "reports"}


def test_demo_has_a_folder_of_its_own_by_default(sigguard, demo, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert sigguard("demo").code == 0
    assert (tmp_path / "sigguard-demo" / "reports" / "index.html").is_file()


def test_demo_fails_if_one_could_not_be_checked(sigguard, demo, tmp_path):
    demo.contents = ["accept", "bug"]
    assert sigguard("demo", tmp_path / "d").code == 1


@pytest.fixture
def trained(monkeypatch):
    seen = {}

    def train(*, progress, **options):
        progress("corpus", 1, 2)
        seen.update(options)

    from sigguard import training

    monkeypatch.setattr(training, "train", train)
    return seen


def test_train_hands_its_options_on(sigguard, trained, tmp_path):
    ran = sigguard("train", "--noise", tmp_path, "--carriers", tmp_path, "--seed", 7, "--out", tmp_path / "m")
    assert (ran.code, ran.out) == (0, [])
    assert ran.err == ["corpus: 1 of 2", f"Model and card: {tmp_path / 'm'}"]
    assert trained == {
        "noise_dir": tmp_path,
        "carriers_dir": tmp_path,
        "seed": 7,
        "out_dir": tmp_path / "m",
        "jobs": 2,
    }


def test_train_options_fit_the_function_they_go_to(sigguard, tmp_path, monkeypatch):
    import inspect

    from sigguard import training

    signature = inspect.signature(training.train)
    seen = []
    monkeypatch.setattr(training, "train", lambda **options: seen.append(signature.bind(**options)))
    assert sigguard("train", "--out", tmp_path / "m").code == 0
    assert seen[0].arguments["seed"] is None


@pytest.mark.parametrize("option", ["--noise", "--carriers"])
def test_train_wants_folders_that_are_there(sigguard, trained, tmp_path, option):
    ran = sigguard("train", option, tmp_path / "none", "--out", tmp_path / "m")
    assert ran.code == 2 and option in ran.err[0] and trained == {}
