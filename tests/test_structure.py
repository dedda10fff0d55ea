"""The house rules that a machine can check: which way imports run, size of rooms, what ships, the caution everywhere."""

from __future__ import annotations

import ast
import csv
import io
import json
import tomllib
from fnmatch import fnmatch
from pathlib import Path

import pytest

from sigguard.findings import CAUTION

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "sigguard"
MODULES = sorted(PACKAGE.rglob("*.py"))

# Every room by its floor; a module imports from its own floor and those below. A new module on the top floor of the
# package that is not named here belongs to the signal rooms.
WORDS, SIGNAL, EDGES, JOINERS, CLI = range(5)
FLOOR = {
    **dict.fromkeys(("errors", "recording", "segments", "findings", "profile", "resources"), WORDS),
    **dict.fromkeys(("readers", "writers", "report"), EDGES),
    **dict.fromkeys(
        ("screening", "segment_pass", "collecting", "stored", "workers", "trimming", "trim_plan"), JOINERS
    ),
    **dict.fromkeys(
        ("rescoring", "acts", "spoilt_strips", "compare", "live", "inbox", "simulate", "training"), JOINERS
    ),
    "cli": CLI,
}
TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "sigguard", "models", "tests", "synthetic"}
MAX_LINES = 450


def room(module: str) -> str:
    """``sigguard.readers.csv_table`` → ``readers``."""
    return module.split(".")[1]


def floor(name: str) -> int:
    return FLOOR.get(name, SIGNAL)


def module_name(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


def imports(source: str) -> set[str]:
    """Modules of this package that a source imports, also within functions and for type checking."""
    found = set()
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are absolute here"
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return {name for name in found if name.startswith("sigguard.") and name != "sigguard.__version__"}


def running_back(module: str, source: str) -> list[str]:
    """The imports of a module that break the order of the house."""
    own = room(module)
    wrong = []
    for name in imports(source):
        other = room(name)
        private = other in ("cli", "training") and own not in ("cli", "training")
        if floor(other) > floor(own) or private or (other == "cli" != own):
            wrong.append(f"{module} imports {name}")
    return wrong


@pytest.mark.parametrize("path", MODULES, ids=module_name)
def test_no_import_runs_back(path: Path) -> None:
    if path == PACKAGE / "__init__.py":  # the public names come from everywhere
        return
    assert not running_back(module_name(path), path.read_text(encoding="utf-8"))


def test_an_import_that_runs_back_is_seen() -> None:
    assert running_back("sigguard.beats", "from sigguard.readers import open_recording")
    assert running_back("sigguard.findings", "def f():\n    import sigguard.grading\n")
    assert running_back("sigguard.screening", "from sigguard.training.run import learn")
    assert running_back("sigguard.training.run", "from sigguard.cli import app")
    assert not running_back("sigguard.cli.train", "from sigguard.training import train")


@pytest.mark.parametrize("path", MODULES, ids=module_name)
def test_rooms_are_small_and_quiet(path: Path) -> None:
    source = path.read_text(encoding="utf-8")
    assert source.count("\n") <= MAX_LINES, "a room that is too long: split it by what it does"
    for node in ast.walk(ast.parse(source)):
        if not isinstance(node, ast.Call):
            continue
        called = ast.unparse(node.func)
        if room(module_name(path) + ".x") != "cli":
            assert called != "print", "the library says nothing; cli does"
            assert called not in ("logging.basicConfig", "sys.exit"), called
        assert called not in ("eval", "exec", "pickle.load", "pickle.loads", "joblib.load"), called
        for keyword in node.keywords:
            risky = keyword.arg in ("allow_pickle", "shell")
            assert not (risky and ast.unparse(keyword.value) == "True"), f"{keyword.arg}=True"


def test_only_the_agreed_names_at_the_top() -> None:
    ignored = [line.strip().rstrip("/") for line in (ROOT / ".gitignore").read_text().splitlines()]
    names = {
        path.name
        for path in ROOT.iterdir()
        if not path.name.startswith(".") and not any(fnmatch(path.name, rule) for rule in ignored if rule)
    }
    # what the README's own commands leave behind
    assert names - {"sigguard-demo", "sigguard-reports"} == TOP_LEVEL


def test_every_room_ships() -> None:
    setup = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["tool"]["setuptools"]
    rooms = {module_name(path.parent / "__init__.py") for path in MODULES}
    assert rooms <= set(setup["packages"]), "pyproject.toml: tool.setuptools.packages lacks a room"
    places = {
        name: ROOT / setup["package-dir"].get(name, name.replace(".", "/")) for name in setup["packages"]
    }
    assert all(place.is_dir() for place in places.values())
    for name, place in places.items():
        patterns = setup["package-data"].get(name, [])
        files = [p.name for p in place.iterdir() if p.is_file() and p.suffix not in (".py", ".pyc")]
        left = [file for file in files if not any(fnmatch(file, pattern) for pattern in patterns)]
        assert not left, f"{name}: {left} would be missing from an installed package"


def test_the_readme_names_commands_that_exist() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = [part.split("```")[0].strip() for part in text.split("```sh\n")[1:]]
    assert len(blocks) == 2, "the README has two commands, each complete"
    assert "sigguard demo" in blocks[0] and "pytest" in blocks[1]
    for words in text.split("tests.")[1:]:
        module = "tests/" + words.split()[0].strip("`…").replace(".", "/") + ".py"
        if module.startswith(("tests/external/", "tests/benchmarks/")):
            assert (ROOT / module).is_file(), f"README names {module}"


def test_the_caution_stands_on_every_output(tmp_path: Path) -> None:
    from sigguard.report.page import render_page
    from sigguard.report.worklist import row_of, worklist_csv, worklist_page
    from sigguard.screening import screen_path

    report = screen_path(ROOT / "synthetic" / "demo" / "08-fibrillation-begins.hea", out_dir=tmp_path)
    folder = tmp_path / report.info.name
    assert json.loads((folder / "report.json").read_text(encoding="utf-8"))["caution"] == CAUTION
    assert CAUTION in (folder / "report.html").read_text(encoding="utf-8")
    assert CAUTION in render_page(report)
    assert CAUTION in worklist_page([row_of(report)])
    rows = list(csv.DictReader(io.StringIO(worklist_csv([row_of(report)]))))
    assert [row["caution"] for row in rows] == [CAUTION]
