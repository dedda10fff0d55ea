from __future__ import annotations

import hashlib
from dataclasses import FrozenInstanceError
from pathlib import Path

import pytest

import sigguard.profile as profile_module
from sigguard.errors import ProfileError
from sigguard.profile import SHIPPED, Rule, choose_profile, load_profile, parse_profile

FOLDER = Path(profile_module.__file__).with_name("profiles")
WHOLE = """
name = "lab"
[tolerance]
rate_ms = 150
pr_ms = 20
qrs_ms = 20
qt_ms = 30
st_mv = 0.025
[accept]
rate_time_share = 0.9
[in_part]
rate_run_s = 6
"""


@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_profiles_have_the_tolerances_of_the_method(name):
    profile = load_profile(name)
    assert profile.name == name
    assert profile.tolerance.as_tuple() == (150, 20, 20, 30, 0.025)
    assert profile.sha256 == hashlib.sha256((FOLDER / f"{name}.toml").read_bytes()).hexdigest()


def test_shipped_rules():
    resting, strip, ambulatory = (load_profile(name) for name in SHIPPED)
    assert resting.accept == Rule(values=("rate", "pr", "qrs", "qt"), values_time_share=1, st_lead_share=1)
    assert resting.in_part == Rule(
        values=("rate",), values_time_share=1, grade="intervals", grade_lead_share=0.5
    )
    assert strip.accept == Rule(rate_time_share=0.9, somewhere=("qrs",))
    assert strip.in_part == Rule(rate_run_s=6)
    assert ambulatory.accept == Rule(rate_time_share=0.95)
    assert ambulatory.in_part == Rule(rate_time_share=0.5)


@pytest.mark.parametrize(
    ("n_leads", "duration_s", "name"),
    [
        (12, 10, "resting"),
        (8, 60, "resting"),
        (15, 10, "resting"),
        (12, 61, "strip"),
        (7, 10, "strip"),
        (1, 2, "strip"),
        (3, 300, "strip"),
        (3, 301, "ambulatory"),
        (12, 86_400, "ambulatory"),
        (1, 14 * 86_400, "ambulatory"),
    ],
)
def test_choose_profile(n_leads, duration_s, name):
    assert choose_profile(n_leads, duration_s) == name


def test_profile_is_frozen():
    with pytest.raises(FrozenInstanceError):
        load_profile("strip").name = "other"  # type: ignore[misc]


def test_a_lab_hands_its_own_file(tmp_path):
    path = tmp_path / "lab.toml"
    path.write_text(WHOLE, encoding="utf-8")
    for handed in (path, str(path)):
        profile = load_profile(handed)
        assert (profile.name, profile.accept.rate_time_share, profile.in_part.rate_run_s) == ("lab", 0.9, 6.0)
        assert profile.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert profile.use.fits(1, 1e9)


def test_a_shipped_name_wins_over_a_file(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    Path("resting").write_text(WHOLE, encoding="utf-8")
    assert load_profile("resting").name == "resting"
    assert load_profile("./resting").name == "lab"


@pytest.mark.parametrize(
    ("old", "new", "key", "found"),
    [
        ("pr_ms = 20\n", "", "tolerance.pr_ms", "nothing"),
        ("pr_ms = 20", "pr_ms = 0", "tolerance.pr_ms", "0"),
        ("pr_ms = 20", "pr_ms = -3", "tolerance.pr_ms", "-3"),
        ("pr_ms = 20", "pr_ms = nan", "tolerance.pr_ms", "nan"),
        ("pr_ms = 20", "pr_ms = inf", "tolerance.pr_ms", "inf"),
        ("pr_ms = 20", "pr_ms = true", "tolerance.pr_ms", "True"),
        ("pr_ms = 20", 'pr_ms = "20"', "tolerance.pr_ms", "'20'"),
        ("rate_time_share = 0.9", "rate_time_share = 90", "accept.rate_time_share", "90"),
        ("rate_time_share = 0.9", "rate_share = 0.9", "accept.rate_share", "unknown key"),
        ("rate_time_share = 0.9", 'values = ["rates"]', "accept.values", "['rates']"),
        ("rate_time_share = 0.9", 'values = "rate"', "accept.values", "'rate'"),
        ("rate_time_share = 0.9", 'values = ["st"]', "accept.values", "['st']"),
        ("rate_time_share = 0.9", 'grade = "good"\ngrade_lead_share = 0.5', "accept.grade", "'good'"),
        ("rate_time_share = 0.9", "", "accept", "found none"),
        ("rate_run_s = 6", "rate_run_s = 0", "in_part", "found none"),
        ("[in_part]\nrate_run_s = 6", "", "in_part", "nothing"),
        ("[in_part]\nrate_run_s = 6", "in_part = 6", "tolerance", "nothing"),
        ('name = "lab"', 'name = ""', "name", "''"),
        ('name = "lab"', 'name = "a\\nb"', "name", "'a\\nb'"),
        ('name = "lab"', "name = 7", "name", "7"),
        ('name = "lab"', 'name = "lab"\nextra = 1', "extra", "unknown key"),
        ('name = "lab"', 'name = "lab"\nuse = {min_leads = 0}', "use.min_leads", "0"),
        ('name = "lab"', 'name = "lab', "TOML", "fault"),
    ],
)
def test_a_mistake_is_named_with_file_key_expected_and_found(old, new, key, found):
    assert old in WHOLE
    text = WHOLE.replace(old, new) if key != "tolerance" else "in_part = 6\nname = 'lab'"
    with pytest.raises(ProfileError) as caught:
        parse_profile(text.encode(), source="lab.toml")
    message = str(caught.value)
    assert "lab.toml" in message and key in message and "expected" in message and found in message
    assert "\n" not in message.replace("\\n", "") or "TOML" in message


def test_no_such_profile_names_those_there_are(tmp_path):
    for name in ("rested", str(tmp_path), str(tmp_path / "none.toml"), "a\0b", ""):
        with pytest.raises(ProfileError, match="resting, strip, ambulatory"):
            load_profile(name)


def test_no_text_and_too_long(tmp_path):
    with pytest.raises(ProfileError, match="UTF-8"):
        parse_profile(b"\xff\xfe\x00", source="x")
    big = tmp_path / "big.toml"
    big.write_bytes(b"#" * 70_000)
    with pytest.raises(ProfileError, match="at most 65536 bytes"):
        load_profile(big)
