"""HL7 aECG: documents written by hand from the published outline, sound and unsound."""

from __future__ import annotations

import re
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from readers import made
from sigguard.errors import NoECGLead, ReadError
from sigguard.readers import find_recordings, open_recording, read_recording
from sigguard.readers.aecg_xml import Node, whole_numbers

D = made.digits(2, 1000, 12)
SET = made.aecg_set(D, ["I", "II"])


def refused(path: Path, **options) -> str:
    with pytest.raises(ReadError) as caught:
        read_recording(path, **options)
    assert "\n" not in str(caught.value)
    return str(caught.value)


def test_value_is_origin_and_scale_times_digit(tmp_path: Path):
    one = made.aecg_set(D, ["I", "II"], origin='value="0.5" unit="mV"', scale='value="4.88" unit="uV"')
    recording = read_recording(made.aecg_file(tmp_path / "a.xml", [one]))
    np.testing.assert_allclose(recording.signal_mv, 0.5 + D * 0.00488, rtol=1e-12, atol=1e-12)
    assert recording.leads == ("I", "II") and recording.fs_hz == 500
    assert recording.info is not None and recording.info.assumed == ()
    assert recording.info.start_time == datetime(2020, 1, 2, 3, 4, 5, 250_000)


@pytest.mark.parametrize(("unit", "mv"), [("uV", 1e-3), ("mV", 1.0), ("V", 1e3), ("nV", 1e-6)])
def test_units(unit: str, mv: float, tmp_path: Path):
    one = made.aecg_set(D, ["I", "II"], origin="", scale=f'value="2" unit="{unit}"')
    signal = read_recording(made.aecg_file(tmp_path / "a.xml", [one])).signal_mv
    np.testing.assert_allclose(signal, D * 2 * mv, rtol=1e-12)


def test_no_unit_is_refused_unless_given(tmp_path: Path):
    path = made.aecg_file(tmp_path / "a.xml", [made.aecg_set(D, ["I", "II"], scale='value="1"')])
    assert "no unit stated" in refused(path)
    info = read_recording(path, units="uV").info
    assert info is not None and "uV was taken, as given" in info.assumed[0]
    path = made.aecg_file(tmp_path / "b.xml", [made.aecg_set(D, ["I", "II"], scale='value="1" unit="mmHg"')])
    with pytest.raises(NoECGLead, match="mmHg"):
        read_recording(path)


@pytest.mark.parametrize("encoding", ["utf-8", "utf-16", "iso-8859-1"])
def test_encodings_prefixes_and_names(encoding: str, tmp_path: Path):
    path = made.aecg_file(tmp_path / "anything.bin", [SET], encoding=encoding)
    assert find_recordings(tmp_path) == [path]
    np.testing.assert_allclose(read_recording(path).signal_mv, D / 1000, rtol=1e-12)
    text = path.read_text(encoding=encoding).replace('xmlns="urn', 'xmlns:v="urn')
    text = re.sub(r"<(/?)(?=[A-Za-z])", r"<\1v:", text)
    path.write_bytes(text.encode(encoding))
    assert read_recording(path).leads == ("I", "II")


@pytest.mark.parametrize(
    ("written", "unit", "fs_hz", "assumed"),
    [
        ("0.002", "s", 500.0, 0),
        ("2", "ms", 500.0, 0),
        ("1000", "us", 1000.0, 0),
        ("0.00278", "s", 360.0, 1),
        ("0.0039", "s", 256.0, 1),
        ("0.00390625", "s", 256.0, 0),
        ("0.0027", "s", 1 / 0.0027, 0),
        ("2e-3", "s", 500.0, 0),
    ],
)
def test_rate_by_the_increment(written: str, unit: str, fs_hz: float, assumed: int, tmp_path: Path):
    one = made.aecg_set(D, ["I", "II"], increment=f'value="{written}" unit="{unit}"')
    info = open_recording(made.aecg_file(tmp_path / "a.xml", [one])).info
    assert info.fs_hz == pytest.approx(fs_hz, rel=1e-8) and len(info.assumed) == assumed


@pytest.mark.parametrize(
    "increment",
    ["", 'value="0" unit="s"', 'value="-1" unit="s"', 'value="1e999" unit="s"', 'value="1e-320" unit="s"'],
)
def test_rates_that_cannot_be(increment: str, tmp_path: Path):
    refused(made.aecg_file(tmp_path / "a.xml", [made.aecg_set(D, ["I", "II"], increment=increment)]))


@pytest.mark.parametrize("relative", [True, False])
def test_sets_one_after_the_other_are_put_on_one_time_axis(relative: bool, tmp_path: Path):
    heads = ['<head value="0" unit="s"/>', '<head value="2500" unit="ms"/>']
    if not relative:
        heads = ['<head value="20200102235958.500+0100"/>', '<head value="20200103000001.000+0100"/>']
    time = "TIME_RELATIVE" if relative else "TIME_ABSOLUTE"
    sets = [
        made.aecg_set(D, leads, head=head, time=time)
        for leads, head in zip((["I", "II"], ["V1", "V2"]), heads, strict=True)
    ]
    recording = read_recording(made.aecg_file(tmp_path / "a.xml", sets))
    expected = np.full((4, 2250), np.nan)
    expected[:2, :1000], expected[2:, 1250:] = D / 1000, D / 1000
    np.testing.assert_allclose(recording.signal_mv, expected, rtol=1e-12)
    assert recording.info is not None
    assert recording.info.start_time == (None if relative else datetime(2020, 1, 2, 23, 59, 58, 500_000))


@pytest.mark.parametrize("head", ["", '<head value="20200102"/>', '<head nullFlavor="UNK"/>'])
def test_a_head_that_says_no_time_invents_none(head: str, tmp_path: Path):
    sets = [made.aecg_set(D, ["I", "II"], head=head), made.aecg_set(D, ["V1", "V2"], head=head)]
    info = open_recording(made.aecg_file(tmp_path / "a.xml", sets)).info
    assert info.start_time is None and info.n_samples == 1000
    assert "same time" in info.assumed[0]


def test_derived_beats_are_left_out(tmp_path: Path):
    beat = made.aecg_set(D[:, :300], ["I", "II"])
    derived = (
        f'<derivation><derivedSeries><code code="REPRESENTATIVE_BEAT"/>{beat}</derivedSeries></derivation>'
    )
    own = f'<component><series><code code="REPRESENTATIVE_BEAT"/>{beat}</series></component>'
    short = f'<component><series><code code="RHYTHM"/>{beat}</series></component>'
    path = made.aecg_file(tmp_path / "a.xml", [SET], extra=derived, more=own + short)
    with open_recording(path) as opened:
        assert opened.info.n_samples == 1000 and opened.n_signals == 2
        assert opened.info.left_out == ("series REPRESENTATIVE_BEAT", "another rhythm series, recorded apart")
    with pytest.raises(NoECGLead, match="REPRESENTATIVE_BEAT"):
        read_recording(made.aecg_file(tmp_path / "b.xml", [SET], code="REPRESENTATIVE_BEAT"))


def test_filters_and_identity(tmp_path: Path):
    def corner(kind: str, hz: float) -> str:
        prefix = "MDC_ECG_CTL_VBL_ATTR_FILTER_"
        return (
            f'<controlVariable><controlVariable><code code="{prefix}{kind}"/><component><controlVariable>'
            f'<code code="{prefix}CUTOFF_FREQ"/><value xsi:type="PQ" value="{hz}" unit="Hz"/>'
            "</controlVariable></component></controlVariable></controlVariable>"
        )

    path = made.aecg_file(
        tmp_path / "a.xml", [SET], extra=corner("LOW_PASS", 150) + corner("HIGH_PASS", 0.05)
    )
    info = open_recording(path).info
    np.testing.assert_array_equal(info.band_hz, [[0.05, 150.0]] * 2)
    assert info.identity == () and "S-17" not in repr(info)
    known = dict(open_recording(path, with_identity=True).info.identity)
    assert known == {"subject": "S-17", "name": "Some Body", "sex": "F", "birth date": "19500607"}


BOMB = '<!DOCTYPE r [<!ENTITY a "lol">' + "".join(
    f'<!ENTITY {b} "{f"&{a};" * 10}">' for a, b in zip("abcdefgh", "bcdefghi", strict=True)
)


@pytest.mark.parametrize(
    "before",
    [
        BOMB + "]>",
        '<!DOCTYPE r [<!ENTITY x SYSTEM "file:///etc/passwd">]>',
        '<!DOCTYPE r SYSTEM "http://example.org/r.dtd">',
        '<!DOCTYPE r [<!ENTITY % p SYSTEM "http://example.org/p"> %p;]>',
        "<!DOCTYPE AnnotatedECG>",
    ],
)
def test_document_types_and_entities_are_refused(before: str, tmp_path: Path):
    text = refused(made.aecg_file(tmp_path / "a.xml", [SET], before=before))
    assert "without a document type or entities" in text


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("</AnnotatedECG>", "", "sound XML"),
        ("<digits>", "<digits>&x;", "sound XML"),
        ("<digits>", "<digits>1 two 3 ", "digits of I: expected whole numbers"),
        ("<digits>", "<digits>1 nan 3 ", "digits of I"),
        ("<digits>", "<digits>1e30 ", "digits of I"),
        ("<digits>", "<digits>0.5 ", "no whole number"),
        ("<digits>", "<digits>7 ", "as many digits for each lead"),
        ('scale value="1"', 'scale value="0"', "scale of I"),
        ('scale value="1"', 'scale value="1e999"', "scale of I"),
        ('scale value="1"', 'scale value="one"', "scale of I"),
        ('origin value="0"', 'origin value="one"', "origin of I"),
        ('code="TIME_ABSOLUTE"', 'code="WHEN"', "an increment of time"),
        ("AnnotatedECG", "AnnotatedEEG", "AnnotatedECG"),
        ('encoding="utf-8"', 'encoding="utf-7"', "sound XML"),
        ('encoding="utf-8"', 'encoding="no-such"', "sound XML"),
    ],
)
def test_documents_that_cannot_be(old: str, new: str, words: str, tmp_path: Path):
    path = made.aecg_file(tmp_path / "a.xml", [SET])
    count = -1 if old == "AnnotatedECG" else 1
    path.write_text(path.read_text().replace(old, new, count))
    assert words in refused(path)


def test_no_waveform_in_the_document(tmp_path: Path):
    path = made.aecg_file(tmp_path / "a.xml", [])
    assert "no waveform" in refused(path)
    path = made.aecg_file(tmp_path / "b.xml", [made.aecg_set(D[:, :0], ["I", "II"])])
    assert "no digits" in refused(path)


def test_depth_and_number_of_elements_are_bounded(tmp_path: Path):
    for extra in ("<a>" * 5000 + "</a>" * 5000, "<a/>" * 300_000):
        text = refused(made.aecg_file(tmp_path / "a.xml", [SET], extra=extra))
        assert "more than" in text


def test_sets_decades_apart_are_refused(tmp_path: Path):
    late = made.aecg_set(D, ["V1", "V2"], head='<head value="20500102030405"/>')
    assert "split the document" in refused(made.aecg_file(tmp_path / "a.xml", [SET, late]))


def test_numbers_over_the_seams_of_blocks(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("sigguard.readers.aecg_xml._DIGIT_BLOCK", 7)
    x = made.digits(1, 200, 20)[0]
    for separator in (" ", "\n", " \n\t "):
        np.testing.assert_array_equal(whole_numbers(Node("digits", {}, [], [separator.join(map(str, x))])), x)
    assert whole_numbers(Node("digits", {}, [], [" \n "])).size == 0
    for junk in ("1 2 3x 4 5 6", "1" * 500, "1,2,3,4,5,6,7", "0x10 12 13 14", "1_000 17 18"):
        with pytest.raises(ValueError):
            whole_numbers(Node("digits", {}, [], [junk]))
