"""report.json: its schema, its numbers, what may and may not be in it."""

from __future__ import annotations

import json
import subprocess
import sys

import jsonschema
import numpy as np
import pytest

from sigguard.findings import CAUTION, Value
from sigguard.report.document import Report, load_schema, number
from sigguard.report.table import SegmentTable, round_up

from .factory import alarm_report, empty_report, make_report, make_values, nan_report

REPORTS = {
    "twelve": make_report,
    "empty": empty_report,
    "nan": nan_report,
    "alarm": alarm_report,
    "day": lambda: make_report(leads=("II", "V5"), duration_s=3600.0, fs_hz=250.0),
    "odd names": lambda: make_report(leads=("\udc80II", "<script>"), name="a\udcffb"),
}


@pytest.fixture(params=REPORTS, scope="module")
def report(request) -> Report:
    return REPORTS[request.param]()


def test_schema_is_sound_and_strict_all_the_way_down():
    schema = load_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    loose = []

    def walk(node, path):
        if isinstance(node, dict):
            if "properties" in node and path and not path.endswith("/properties"):
                closed = (
                    node.get("additionalProperties") is False or node.get("unevaluatedProperties") is False
                )
                if not closed and path != "/$defs/value":  # closed by those who use it
                    loose.append(path)
            for key, value in node.items():
                walk(value, f"{path}/{key}")

    walk(schema, "")
    assert loose == [] and schema["additionalProperties"] is False


def test_every_report_validates(report):
    jsonschema.Draft202012Validator(load_schema()).validate(report.to_dict())
    jsonschema.Draft202012Validator(load_schema()).validate(report.to_dict(with_identity=True))


def test_only_plain_json_types_and_never_nan(report):
    def walk(node):
        if isinstance(node, dict):
            assert all(type(key) is str for key in node)
            for value in node.values():
                walk(value)
        elif isinstance(node, list):
            for value in node:
                walk(value)
        else:
            assert type(node) in (str, int, float, bool, type(None)), node

    walk(report.to_dict())
    text = report.to_json()
    assert "\n" not in text and text.encode("utf-8")
    assert json.loads(text, parse_constant=lambda c: pytest.fail(f"{c} in JSON")) == report.to_dict()


def test_schema_refuses_what_the_contract_does_not_name():
    validator = jsonschema.Draft202012Validator(load_schema())
    for change in (
        lambda d: d.update(extra=1),
        lambda d: d["measurements"]["pr"].update(extra=1),
        lambda d: d["measurements"]["pr"].update(unit="s"),
        lambda d: d["measurements"]["st"]["by_lead"]["I"].update(low=0.0),
        lambda d: d["leads"][0]["grade_fraction"].pop("none"),
        lambda d: d.update(verdict="reject"),
        lambda d: d.pop("caution"),
        lambda d: d["recording"].update(start_s=0),
    ):
        found = make_report().to_dict()
        change(found)
        assert not validator.is_valid(found)


def test_caution_and_verdict():
    report = make_report()
    assert report.verdict == report.to_dict()["verdict"] == "accept-in-part"
    assert report.to_dict()["caution"] == CAUTION


def test_identity_leaves_only_when_asked_for():
    report = make_report()
    assert "Inparticular" not in report.to_json() and "1900" not in report.to_json()
    assert report.to_dict(with_identity=True)["recording"]["identity"]["born"] == "1900-01-01"


def test_rounding_never_narrows_a_bound():
    values = make_values()
    values["pr"] = Value("ms", 158.26, 1.0, 2.0, 20.04, False)
    found = make_report(values=values).to_dict()["measurements"]["pr"]
    assert found["value"] == 158.3
    assert found["bound_95"] == 20.1  # 20.04 must not read as the tolerance of 20
    assert float(round_up(20.0, decimals=1)) == 20.0
    assert float(round_up(0.3, decimals=1)) == 0.3  # 3.0000000000000004 / 10 in floats
    assert np.isnan(round_up(float("nan"), decimals=1))
    assert str(number(-1e-9, 3)) == "0.0"


def test_a_missing_measurement_is_null_not_absent():
    report = make_report(values={})
    found = report.to_dict()["measurements"]
    assert {m: found[m]["value"] for m in ("rate", "pr", "qrs", "qt", "qtc")} == dict.fromkeys(
        ("rate", "pr", "qrs", "qt", "qtc")
    )
    assert found["rate"]["unit"] == "1/min" and found["rate"]["reliable"] is False


def test_signals_left_out_are_named():
    assert any("RESP" in text for text in make_report().to_dict()["recording"]["assumed"])


def test_report_is_frozen_and_its_segments_can_write_themselves():
    report = make_report()
    assert isinstance(report.segments, SegmentTable)
    assert isinstance(report.segments.rows(np.array([0])), SegmentTable)
    with pytest.raises(AttributeError):
        report.notes = ()


def test_making_json_loads_no_template_engine():
    code = "import sys, sigguard.report.document; sys.exit('jinja2' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
