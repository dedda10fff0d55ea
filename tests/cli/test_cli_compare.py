"""``sigguard compare`` as a user types it; screening is stood in for where only the command is tested."""

from __future__ import annotations

import json
from pathlib import Path

from jsonschema import Draft202012Validator

from sigguard.report.comparison import load_compare_schema

DEMO = Path(__file__).resolve().parents[2] / "synthetic" / "demo"


def test_one_line_two_files_and_the_reports(calls, recordings, sigguard, tmp_path):
    out = tmp_path / "out"
    ran = sigguard("compare", *recordings(a="accept", b="accept-in-part"), "--out", out)
    assert ran.code == 0 and len(ran.out) == 1 and ran.out[0].startswith("keep a over all")
    document = json.loads((out / "compare.json").read_text(encoding="utf-8"))
    Draft202012Validator(load_compare_schema()).validate(document)
    assert 'href="./a/report.html"' in (out / "compare.html").read_text(encoding="utf-8")
    assert [call["name"] for call in calls] == ["a", "b"]


def test_exit_codes(calls, recordings, sigguard, tmp_path):
    def code(*options, **content):
        return sigguard("compare", *recordings(**content), "--out", tmp_path / "out", *options).code

    assert code(a="accept", b="repeat") == 3
    assert code("--exit-zero", a="accept", b="repeat") == 0
    assert code(a="unreadable", b="repeat", c="accept") == 1
    assert code("--exit-zero", a="unreadable", b="bug", c="alarm") == 4
    assert code(a="unreadable", b="bug") == 1
    assert code(a="accept") == 2


def test_an_unreadable_take_is_one_sentence_and_the_others_are_compared(
    calls, recordings, sigguard, tmp_path
):
    ran = sigguard("compare", *recordings(a="unreadable", b="accept", c="accept"), "--out", tmp_path / "out")
    assert ran.code == 1 and len(ran.out) == 1 and "b and c" in ran.out[0]
    assert sum("export again" in line for line in ran.err) == 1 and not any(
        "Traceback" in line for line in ran.err
    )
    document = json.loads((tmp_path / "out" / "compare.json").read_text(encoding="utf-8"))
    assert [u["take"] for u in document["unreadable"]] == ["a"]


def test_json_and_takes_of_one_name(calls, recordings, sigguard, tmp_path):
    first, second = recordings(a="accept", b="accept")
    other = tmp_path / "more"
    other.mkdir()
    second = second.rename(other / "a.txt")
    ran = sigguard("compare", first, second, "--out", tmp_path / "out", "--json")
    assert [t["take"] for t in json.loads(ran.out[0])["takes"]] == ["a", "a-2"]


def test_the_same_take_twice_is_no_comparison(calls, recordings, sigguard, tmp_path):
    (path,) = recordings(a="accept")
    ran = sigguard("compare", path, path, "--out", tmp_path / "out")
    assert ran.code == 2 and "two or more" in ran.err[-1] and not (tmp_path / "out").exists()


def test_the_clean_demo_recording_is_kept(sigguard, tmp_path):
    ran = sigguard(
        "compare", DEMO / "05-loose-left-arm.hea", DEMO / "01-clean.hea", "--out", tmp_path / "out"
    )
    assert ran.out[0].startswith("keep 01-clean over all")
    document = json.loads((tmp_path / "out" / "compare.json").read_text(encoding="utf-8"))
    Draft202012Validator(load_compare_schema()).validate(document)
    assert document["takes"][0]["sha256"] != document["takes"][1]["sha256"]
