from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest


@pytest.mark.parametrize(
    ("contents", "code"),
    [
        (("accept",), 0),
        (("accept", "accept-in-part"), 0),
        (("accept", "repeat"), 3),
        (("repeat", "unreadable"), 1),
        (("bug",), 1),
        (("unreadable", "alarm", "repeat"), 4),
        (("alarm",), 4),
    ],
)
def test_exit_codes(sigguard, calls, recordings, tmp_path, contents, code):
    paths = recordings(**{f"r{k}": word for k, word in enumerate(contents)})
    assert sigguard("check", *paths, "--out", tmp_path / "out").code == code
    assert len(calls) == len(contents)


@pytest.mark.parametrize(("content", "code"), [("repeat", 0), ("unreadable", 1), ("alarm", 4), ("accept", 0)])
def test_exit_zero_hides_only_the_repeat(sigguard, calls, recordings, tmp_path, content, code):
    assert sigguard("check", *recordings(a=content), "--out", tmp_path / "out", "--exit-zero").code == code


def test_one_line_a_recording_on_stdout_and_talk_on_stderr(sigguard, calls, recordings, tmp_path):
    ran = sigguard("check", *recordings(b="accept", a="repeat"), "--out", tmp_path / "out")
    assert [line.split(":")[0] for line in ran.out] == ["b", "a"]
    assert "accept" in ran.out[0] and "repeat" in ran.out[1]
    assert ran.err == [f"Reports: {tmp_path / 'out' / 'index.html'}"]


def test_an_error_is_one_line_without_escape_signs_and_the_others_are_checked(
    sigguard, calls, recordings, tmp_path
):
    paths = recordings(a="unreadable", b="bug", c="accept")
    ran = sigguard("check", *paths, "--out", tmp_path / "out")
    assert len(ran.out) == 1 and ran.out[0].startswith("c:")
    unreadable, bug, where = ran.err
    assert (
        str(paths[0]) in unreadable and "expected samples, found a" in unreadable and "\x1b" not in unreadable
    )
    assert str(paths[1]) in bug and "ZeroDivisionError" in bug
    assert where.startswith("Reports:")
    assert "Traceback" not in "".join(ran.err)


def test_json_gives_one_report_a_line(sigguard, calls, recordings, tmp_path):
    ran = sigguard("check", *recordings(a="accept", b="alarm"), "--out", tmp_path / "out", "--json")
    reports = [json.loads(line) for line in ran.out]
    assert [r["schema"] for r in reports] == ["sigguard.report/1"] * 2
    assert [r["recording"]["name"] for r in reports] == ["a", "b"]
    assert reports[1]["patient_first"][0]["pattern"] == "standstill"


def test_the_index_holds_all_with_links_that_lead_somewhere(sigguard, calls, recordings, tmp_path):
    out = tmp_path / "out"
    sigguard("check", *recordings(a="accept", b="unreadable", c="alarm"), "--out", out, "--no-page")
    assert (out / "index.html").is_file()
    with (out / "index.csv").open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert [(r["name"], r["state"]) for r in rows] == [("c", "repeat"), ("b", "unreadable"), ("a", "accept")]
    assert all((out / r["link"]).is_file() for r in rows if r["link"])


def test_one_recording_needs_no_index(sigguard, calls, recordings, tmp_path):
    ran = sigguard("check", *recordings(a="accept"), "--out", tmp_path / "out")
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == ["a"]
    assert ran.err == [f"Report: {tmp_path / 'out' / 'a'}"]


def test_options_reach_the_screening(sigguard, calls, recordings, tmp_path):
    words = "--profile strip --segment 7.5 --mains 60 --no-page --annotate --fs 250 --units uV --fridericia --with-identity"
    assert sigguard("check", *recordings(a="accept"), "--out", tmp_path / "out", *words.split()).code == 0
    (call,) = calls
    assert callable(call.pop("progress"))
    assert call == {
        "jobs": 1,
        "path": tmp_path / "a.txt",
        "out_dir": tmp_path / "out",
        "name": "a",
        "profile": "strip",
        "segment_s": 7.5,
        "mains": "60",
        "page": False,
        "annotate": True,
        "with_identity": True,
        "fs_hz": 250.0,
        "units": "uV",
        "fridericia": True,
    }


def test_a_wfdb_record_may_go_by_its_bare_name(sigguard, calls, recordings, tmp_path):
    recordings(a="accept")[0].rename(tmp_path / "a.hea")
    assert sigguard("check", tmp_path / "a", "--out", tmp_path / "out").code == 0
    assert [c["path"] for c in calls] == [tmp_path / "a.hea"]


def test_tables_of_earlier_reports_are_no_recordings(sigguard, calls, tmp_path, monkeypatch):
    import sigguard.readers as readers

    out = tmp_path / "out"
    for name in ("out/a/segments.csv", "out/a/report.json", "out/index.csv", "out/b.csv", "in/segments.csv"):
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_text("accept")
    monkeypatch.setattr(readers, "find_recordings", lambda paths: sorted(tmp_path.rglob("*.csv")))
    sigguard("check", tmp_path, "--out", out)
    assert {c["path"].relative_to(tmp_path).as_posix() for c in calls} == {"out/b.csv", "in/segments.csv"}


def test_defaults(sigguard, calls, recordings, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    recordings(a="accept")
    sigguard("check", "a.txt")
    (call,) = calls
    assert call["out_dir"] == Path("sigguard-reports")
    assert (call["profile"], call["segment_s"], call["mains"], call["page"]) == (None, 10.0, "auto", True)
    assert not any(call[key] for key in ("annotate", "with_identity", "fs_hz", "units", "fridericia"))


@pytest.mark.parametrize(
    ("args", "words"),
    [
        (["nowhere.txt"], ["nowhere.txt", "no such file"]),
        (["a.txt", "nowhere.txt"], ["nowhere.txt"]),
        (["x" * 300], ["x" * 300, "name too long"]),
        (["a.txt", "--segment", "4.9"], ["--segment", "5 to 30", "4.9"]),
        (["a.txt", "--segment", "31"], ["--segment", "31"]),
        (["a.txt", "--segment", "nan"], ["--segment", "nan"]),
        (["a.txt", "--segment", "ten"], ["--segment"]),
        (["a.txt", "--profile", "rested"], ["rested", "resting, strip, ambulatory"]),
        (["a.txt", "--profile", "bad.toml"], ["bad.toml", "tolerance"]),
        (["a.txt", "--mains", "55"], ["--mains", "55"]),
        (["a.txt", "--jobs", "0"], ["--jobs", "0"]),
        (["a.txt", "--fs", "1"], ["sampling rate", "1"]),
        (["a.txt", "--units", "V"], ["--units", "V"]),
        (["a.txt", "--out", "a.txt"], ["--out", "a.txt", "folder"]),
        (["a.txt", "--colour"], ["--colour"]),
        ([], ["PATH"]),
    ],
)
def test_wrong_usage_leaves_with_2_and_says_why(
    sigguard, calls, recordings, tmp_path, monkeypatch, args, words
):
    monkeypatch.chdir(tmp_path)
    recordings(a="accept")
    Path("bad.toml").write_text('name = "bad"')
    ran = sigguard("check", *args)
    assert ran.code == 2
    assert calls == [] and ran.out == []
    assert all(word in " ".join(ran.err) for word in words)
    assert "Traceback" not in " ".join(ran.err)


def test_recordings_of_one_name_never_share_a_folder(sigguard, calls, tmp_path):
    out = tmp_path / "out"
    paths = []
    for folder in ("x", "y", "z"):
        (tmp_path / folder).mkdir()
        paths.append(tmp_path / folder / ("A.txt" if folder == "z" else "a.txt"))
        paths[-1].write_text("accept")
    ran = sigguard("check", *paths, "--out", out)
    assert [c["name"] for c in calls] == ["a", "a-2", "A-3"]
    assert ran.out[1].endswith("[reports in a-2]")
    owners = {
        p.parent.name: json.loads(p.read_text())["recording"]["path"] for p in out.glob("*/report.json")
    }
    assert owners == dict(zip(("a", "a-2", "A-3"), map(str, paths), strict=True))
    calls.clear()
    sigguard("check", paths[1], "--out", out)  # a later run finds its own folder again
    assert [c["name"] for c in calls] == ["a-2"]


def test_a_report_that_is_not_known_to_be_ours_stays(sigguard, calls, recordings, tmp_path):
    out = tmp_path / "out"
    (out / "a").mkdir(parents=True)
    (out / "a" / "report.json").write_text("{half")
    sigguard("check", *recordings(a="accept"), "--out", out)
    assert (out / "a" / "report.json").read_text() == "{half"
    assert calls[0]["name"] == "a-2"


def test_a_recording_called_index_does_not_get_in_the_way(sigguard, calls, tmp_path):
    for name in ("index.html.txt", "b.txt"):
        (tmp_path / name).write_text("accept")
    assert (
        sigguard("check", tmp_path / "index.html.txt", tmp_path / "b.txt", "--out", tmp_path / "out").code
        == 0
    )
    assert [c["name"] for c in calls] == ["index.html-2", "b"]
    assert (tmp_path / "out" / "index.html").is_file()


def test_ctrl_c_stops_says_so_and_keeps_what_is_done(sigguard, calls, recordings, tmp_path, monkeypatch):
    import fake_screening

    whole = fake_screening.screen_path

    def pressed(path, **settings):
        if path.stem == "b":
            raise KeyboardInterrupt
        return whole(path, **settings)

    monkeypatch.setattr(fake_screening, "screen_path", pressed)
    ran = sigguard("check", *recordings(a="accept", b="accept", c="accept"), "--out", tmp_path / "out")
    assert ran.code == 130
    assert len(ran.out) == 1
    assert "Stopped: 1 of 3 done; what was written is whole." in ran.err
    assert "a" in (tmp_path / "out" / "index.csv").read_text()
