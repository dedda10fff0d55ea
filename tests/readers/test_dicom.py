"""DICOM waveforms: pydicom's own test file, and objects made here."""

from __future__ import annotations

import re
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from readers import made
from sigguard.errors import NoECGLead, ReadError
from sigguard.leads import LEAD_OF_CODE, STANDARD_LEADS
from sigguard.readers import find_recordings, open_recording, read_recording

pydicom = pytest.importorskip("pydicom")


@pytest.fixture(scope="module")
def real() -> Path:
    from pydicom.data import get_testdata_file

    name = get_testdata_file("waveform_ecg.dcm", download=False)
    if name is None:
        pytest.skip("this pydicom does not carry waveform_ecg.dcm")
    return Path(str(name))


def lead(k: int = 2, **more: object) -> dict:
    return {"code": f"2:{k}"} | more


def test_rhythm_of_the_real_file_equals_pydicom(real: Path):
    data = pydicom.dcmread(real)
    theirs = data.waveform_array(0).T / 1000.0  # µV
    recording = read_recording(real)
    assert recording.leads == STANDARD_LEADS
    assert (recording.fs_hz, recording.n_samples) == (1000.0, 10_000)
    np.testing.assert_allclose(recording.signal_mv, theirs, rtol=0, atol=1e-12)
    info = recording.info
    assert info is not None
    assert info.start_time == datetime(2013, 1, 25, 10, 59, 19)
    assert info.band_hz is not None and info.band_hz[0].tolist() == [0.05, 300.0]
    assert info.step_mv == pytest.approx(np.full(12, 0.00125))


def test_identity_of_the_real_file_stays_out_unless_asked_for(real: Path):
    data = pydicom.dcmread(real)
    private = {
        str(data.get(key)) for key in ("PatientID", "PatientBirthDate", "AccessionNumber", "InstitutionName")
    }
    shown = repr(open_recording(real).info)
    assert not any(text in shown for text in private)
    identity = dict(open_recording(real, with_identity=True).info.identity)
    assert identity["PatientID"] == str(data.PatientID)


def test_scale_is_sensitivity_correction_and_baseline(tmp_path: Path):
    steps = made.digits(2, 300, 12).T
    leads = [lead(1, sensitivity=2.5, correction=1.02, baseline=-7.5), lead(2, unit="mV", sensitivity=0.005)]
    with open_recording(made.dicom_file(tmp_path / "a.dcm", [{"steps": steps, "leads": leads}])) as opened:
        np.testing.assert_allclose(opened.read()[0], (steps[:, 0] * 2.5 * 1.02 - 7.5) / 1000)
        np.testing.assert_allclose(opened.read()[1], steps[:, 1] * 0.005)
        np.testing.assert_array_equal(opened.read_digital(), steps.T)


def test_padding_is_missing(tmp_path: Path):
    steps = made.digits(1, 300, 12).T.copy()
    steps[20:30] = -32768
    path = made.dicom_file(tmp_path / "a.dcm", [{"steps": steps, "leads": [lead()], "padding": -32768}])
    assert np.flatnonzero(np.isnan(read_recording(path).signal_mv[0])).tolist() == list(range(20, 30))


def test_skew_moves_a_channel(tmp_path: Path):
    steps = np.tile(np.arange(300)[:, np.newaxis], 3)
    leads = [lead(1), lead(2, sample_skew=4), lead(61, sample_skew=-4)]
    with open_recording(made.dicom_file(tmp_path / "a.dcm", [{"steps": steps, "leads": leads}])) as opened:
        x = opened.read() / 0.0025
        assert opened.info.n_samples == 304
        np.testing.assert_allclose(x[0, :300], np.arange(300))
        assert np.isnan(x[1, :4]).all() and np.isnan(x[2, 296:]).all()
        np.testing.assert_allclose(x[1, 4:304], np.arange(300))
        np.testing.assert_allclose(x[2, :296], np.arange(4, 300))


def test_median_beat_is_never_read_as_rhythm(tmp_path: Path):
    beat = {"steps": made.digits(1, 900, 12, seed=5).T, "leads": [lead()], "originality": "DERIVED"}
    rhythm = {"steps": made.digits(1, 300, 12, seed=6).T, "leads": [lead()]}
    path = made.dicom_file(tmp_path / "a.dcm", [beat, rhythm])
    np.testing.assert_array_equal(open_recording(path).read_digital(), rhythm["steps"].T)
    with pytest.raises(NoECGLead, match="derived waveforms only"):
        open_recording(made.dicom_file(tmp_path / "b.dcm", [beat]))
    unsaid = rhythm | {"originality": None}
    assert (
        "does not say whether it is original"
        in open_recording(made.dicom_file(tmp_path / "c.dcm", [unsaid])).info.assumed[0]
    )


def test_groups_taken_one_after_the_other_share_one_time_axis(tmp_path: Path):
    parts = [made.digits(3, 250, 12, seed=k).T for k in range(4)]
    strip = made.digits(1, 1000, 12, seed=9).T
    codes = [(1, 2, 61), (62, 63, 64), (3, 4, 5), (6, 7, 8)]
    groups = [
        {"steps": part, "leads": [lead(c) for c in code], "fs_hz": 100.0, "offset_ms": 2500.0 * k}
        for k, (part, code) in enumerate(zip(parts, codes, strict=True))
    ]
    groups.append({"steps": strip, "leads": [lead(2)], "fs_hz": 100.0, "offset_ms": 0.0})
    recording = read_recording(made.dicom_file(tmp_path / "a.dcm", groups))
    assert recording.leads == (*STANDARD_LEADS, "II#2")
    assert recording.n_samples == 1000
    for k, part in enumerate(parts):
        block = recording.signal_mv[3 * k : 3 * k + 3]
        np.testing.assert_allclose(block[:, 250 * k : 250 * (k + 1)], part.T * 0.0025)
        assert np.isfinite(block).sum() == 750
    assert recording.info is not None and "differing times" in recording.info.assumed[0]


def test_a_group_of_another_rate_is_left_out_and_named(tmp_path: Path):
    groups = [
        {"steps": made.digits(2, 1000, 12).T, "leads": [lead(1), lead(2)]},
        {"steps": made.digits(1, 100, 12).T, "leads": [lead(3)], "fs_hz": 50.0},
    ]
    info = open_recording(made.dicom_file(tmp_path / "a.dcm", groups)).info
    assert (info.leads, info.left_out) == (("I", "II"), ("V1 (50 Hz)",))


@pytest.mark.parametrize(
    ("channel", "why"),
    [
        ({"meaning": "Arterial pressure", "unit": "mm[Hg]"}, "mm[Hg]"),
        ({"code": "2:3", "sensitivity": None}, "no sensitivity stated"),
        ({"code": "2:3", "unit": None}, "no unit stated"),
    ],
)
def test_channels_that_cannot_be_used_are_left_out_and_named(channel: dict, why: str, tmp_path: Path):
    steps = made.digits(2, 300, 12).T
    info = open_recording(
        made.dicom_file(tmp_path / "a.dcm", [{"steps": steps, "leads": [lead(), channel]}])
    ).info
    assert info.leads == ("II",) and why in info.left_out[0]
    with pytest.raises(NoECGLead):
        open_recording(made.dicom_file(tmp_path / "b.dcm", [{"steps": steps[:, :1], "leads": [channel]}]))


def test_status_of_a_channel_is_said_and_its_samples_kept(tmp_path: Path):
    steps = made.digits(1, 300, 12).T
    with open_recording(
        made.dicom_file(tmp_path / "a.dcm", [{"steps": steps, "leads": [lead(status="DISCONNECTED")]}])
    ) as opened:
        assert "marks II as DISCONNECTED" in opened.info.assumed[0]
        np.testing.assert_array_equal(opened.read_digital(), steps.T)


def test_names_by_code_then_meaning(tmp_path: Path):
    leads = [lead(k) for k in (1, 64, 65, 11)] + [{"meaning": "Lead V6"}, {"meaning": "Lead I (Einthoven)"}]
    steps = made.digits(len(leads), 300, 12).T
    info = open_recording(made.dicom_file(tmp_path / "a.dcm", [{"steps": steps, "leads": leads}])).info
    assert info.leads == ("I", "aVF", "-aVR", "V3R", "V6", "I#2")


def test_lead_codes_agree_with_the_list_in_pydicom():
    """CID 3001 as pydicom carries it: where a meaning holds the lead's plain name, ours is the same."""
    from pydicom.sr._concepts_dict import concepts

    entries = [(code, *entry) for codes in concepts["MDC"].values() for code, entry in codes.items()]
    meanings = {
        int(code[2:]): text for code, text, lists in entries if code.startswith("2:") and 3001 in lists
    }
    plain = {
        n: re.sub(r"^(Derived )?Lead ", lambda m: "d" if m[1] else "", text) for n, text in meanings.items()
    }
    named = {
        n: text.split(",")[0].replace("\N{MINUS SIGN}", "-") for n, text in plain.items() if n in LEAD_OF_CODE
    }
    compared = {n: text for n, text in named.items() if " " not in text}
    assert len(compared) >= 40
    assert compared == {n: LEAD_OF_CODE[n] for n in compared}
    assert tuple(LEAD_OF_CODE[k] for k in (1, 2, 61, 62, 63, 64, 3, 4, 5, 6, 7, 8)) == STANDARD_LEADS


def test_start_has_its_fraction_and_group_offset(tmp_path: Path):
    group = {"steps": made.digits(1, 300, 12).T, "leads": [lead()], "offset_ms": 500.0}
    info = open_recording(made.dicom_file(tmp_path / "a.dcm", [group])).info
    assert info.start_time == datetime(2020, 1, 2, 3, 4, 5, 750_000)


def test_objects_without_waveform_or_of_unknown_samples(tmp_path: Path):
    group = {"steps": made.digits(1, 300, 12).T, "leads": [lead()]}
    with pytest.raises(ReadError, match="interpretation MB"):
        open_recording(made.dicom_file(tmp_path / "a.dcm", [group | {"interpretation": "MB"}]))
    with pytest.raises(ReadError, match="a start within"):
        late = group | {"offset_ms": 1e12}
        open_recording(made.dicom_file(tmp_path / "b.dcm", [group | {"offset_ms": 0.0}, late]))
    with pytest.raises(ReadError, match="at least two samples"):
        open_recording(made.dicom_file(tmp_path / "c.dcm", [group | {"steps": np.zeros((1, 1))}]))
    image = pydicom.data.get_testdata_file("CT_small.dcm", download=False)
    if image:
        with pytest.raises(ReadError, match="a waveform object"):
            open_recording(image)
        (tmp_path / "images").mkdir()
        (tmp_path / "images" / "ct.dcm").write_bytes(Path(str(image)).read_bytes())
        assert find_recordings(tmp_path / "images") == [tmp_path / "images"]


def test_deflated_objects_are_not_unfolded(tmp_path: Path):
    path = made.dicom_file(tmp_path / "a.dcm", [{"steps": np.zeros((3000, 1)), "leads": [lead()]}])
    data = pydicom.dcmread(path)
    data.file_meta.TransferSyntaxUID = pydicom.uid.DeflatedExplicitVRLittleEndian
    data.save_as(path, enforce_file_format=True)
    with pytest.raises(ReadError, match="deflated"):
        open_recording(path)


def test_named_without_extension(real: Path, tmp_path: Path):
    (tmp_path / "IM0001").write_bytes(real.read_bytes())
    assert find_recordings(tmp_path) == [tmp_path / "IM0001"]
    assert read_recording(tmp_path / "IM0001").leads == STANDARD_LEADS
