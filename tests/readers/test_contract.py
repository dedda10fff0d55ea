"""One contract for all readers, whatever the format."""

from __future__ import annotations

import hashlib
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from readers import made
from sigguard.errors import UsageError
from sigguard.readers import OpenRecording, open_recording, read_recording

N = 1003


def _fixed_width(fmt: int, bits: int):
    return lambda folder: made.wfdb_record(
        folder, made.digits(3, N, bits), fmt=fmt, gains=["500(3)/mV", "2/uV", "-250"]
    )


def _mat(folder: Path) -> Path:
    return made.wfdb_record(folder, made.digits(1, N, 16), prefix=made.mat_prefix(1, N), suffix=".mat")


def _segments(folder: Path) -> Path:
    for k, n in enumerate((400, 300)):
        made.wfdb_record(folder, made.digits(2, n, 12, seed=k), name=f"s{k}", fmt=212)
    (folder / "whole.hea").write_text("whole/4 2 500 1203\ns0 400\n~ 103\ns1 300\ns0 400\n")
    return folder / "whole.hea"


def _layout(folder: Path) -> Path:
    made.wfdb_record(folder, made.digits(2, 400, 16, seed=1), name="s0", names=["II", "V1"])
    made.wfdb_record(folder, made.digits(1, 300, 16, seed=2), name="s1", names=["II"], gains=["250(7)/mV"])
    (folder / "lay.hea").write_text("lay 2 500 0\n~ 0 1000/mV 0 0 0 0 0 II\n~ 0 1000/mV 0 0 0 0 0 V1\n")
    (folder / "whole.hea").write_text("whole/4 2 500 900\nlay 0\ns0 400\n~ 200\ns1 300\n")
    return folder / "whole.hea"


def _skewed(folder: Path) -> Path:
    path = made.wfdb_record(folder, made.digits(2, N, 16))
    path.write_text(path.read_text().replace("rec.dat 16", "rec.dat 16:7", 1))
    return path


def _rates(folder: Path) -> Path:
    """Two leads of 500 Hz, one of 250, a respiration signal, in frames of 250 Hz."""
    x = made.digits(1, 6 * 500, 16)[0]
    (folder / "rec.dat").write_bytes(made.encode(x, 16))
    lines = ["rec 4 250 500", "rec.dat 16x2 1000/mV 16 0 0 0 0 I", "rec.dat 16x2 1000/mV 16 0 0 0 0 II"]
    lines += ["rec.dat 16x1 1000/mV 16 0 0 0 0 V5", "rec.dat 16x1 10/Ohm 16 0 0 0 0 RESP"]
    (folder / "rec.hea").write_text("\n".join(lines) + "\n")
    return folder / "rec.hea"


def _dicom(folder: Path) -> Path:
    steps = made.digits(2, N, 12).T.copy()
    steps[10:20, 1] = -2048
    rhythm = {"steps": steps, "leads": [{"code": "2:1"}, {"code": "2:2", "unit": "mV", "sensitivity": 0.004}]}
    return made.dicom_file(folder / "a.dcm", [rhythm | {"padding": -2048}])


def _dicom_groups(folder: Path) -> Path:
    pair = [[{"code": "2:1"}, {"code": "2:2", "sample_skew": 3}], [{"code": "2:3"}, {"code": "2:4"}]]
    groups = [
        {"steps": made.digits(2, 500, 12, seed=k).T, "leads": leads, "offset_ms": 1000.0 * k}
        for k, leads in enumerate(pair)
    ]
    return made.dicom_file(folder / "a.dcm", groups)


def _csv(folder: Path) -> Path:
    mv = np.round(made.digits(3, N, 12) / 1000, 4)
    mv[1, 5:9] = np.nan
    (folder / "a.csv").write_text(made.csv_text(mv, ["I", "II", "III"]))
    return folder / "a.csv"


def _edf(folder: Path, **kind) -> Path:
    """Two leads of 500 Hz, one of them upside down and in mV, one slower, a breathing signal between."""
    bits = kind.get("bits", 16)
    half = 1 << (bits - 1)
    one, two, chest = made.digits(3, 1000, bits)
    signals = [
        {"label": "ECG I", "steps": one, "physical": (-3276.8, 3276.7), "prefilter": "HP:0.05Hz LP:150Hz"},
        {"label": "Resp", "steps": chest[:50], "unit": "Ohm", "fs_hz": 25},
        {"label": "ECG V1", "steps": chest[:500], "fs_hz": 250},
        {"label": "ECG II", "steps": two, "unit": "mV", "physical": (5, -4), "digital": (1 - half, half - 1)},
    ]
    return made.edf_file(folder / "a.edf", signals, record_s=0.1, **kind)


def _edf_gaps(folder: Path) -> Path:
    return _edf(
        folder, kind="+D", starts_s=[0.25 + 0.1 * k + 0.3 * (k > 4) + 0.7 * (k > 11) for k in range(20)]
    )


def _ishne(folder: Path) -> Path:
    d = made.digits(3, N, 16)
    d[1, 3:9] = -32768
    return made.ishne_file(folder / "a.ecg", d, codes=[5, 6, 11], nv=[1000, 2500, 40_000], note=b"free text")


def _aecg(folder: Path) -> Path:
    one = made.aecg_set(made.digits(2, 500, 12, seed=1), ["I", "II"], origin='value="0.03" unit="mV"')
    two = made.aecg_set(
        made.digits(2, 400, 20, seed=2),
        ["aVR", "V1"],
        head='<head value="20200102030406.250"/>',
        scale='value="-0.005" unit="mV"',
    )
    return made.aecg_file(folder / "a.xml", [one, two])


MAKERS = {
    f"wfdb-{fmt}": _fixed_width(fmt, bits) for fmt, bits in ((16, 16), (212, 12), (24, 24), (32, 32), (80, 8))
}
MAKERS |= {
    f"wfdb-{fmt}": _fixed_width(fmt, bits) for fmt, bits in ((61, 16), (160, 16), (310, 10), (311, 10))
}
MAKERS |= {"wfdb-mat": _mat, "wfdb-segments": _segments, "wfdb-layout": _layout, "wfdb-skew": _skewed}
MAKERS |= {"wfdb-rates": _rates, "dicom": _dicom, "dicom-groups": _dicom_groups, "csv": _csv}
MAKERS |= {"edf": _edf, "edf+c": partial(_edf, kind="+C"), "edf+d": _edf_gaps, "ishne": _ishne, "aecg": _aecg}
MAKERS |= {"bdf": partial(_edf, bits=24), "bdf+c": partial(_edf, bits=24, kind="+C")}
FORMATS = ("WFDB", "DICOM", "CSV", "EDF", "EDF+C", "EDF+D", "BDF", "BDF+C", "ISHNE", "aECG")


@pytest.fixture(params=MAKERS)
def opened(request: pytest.FixtureRequest, tmp_path: Path):
    with open_recording(MAKERS[request.param](tmp_path)) as recording:
        yield recording


def test_whole_has_the_shape_that_is_promised(opened: OpenRecording):
    info = opened.info
    whole = opened.read()
    assert whole.shape == (info.n_leads, info.n_samples) == (len(info.leads), info.n_samples)
    assert whole.dtype == np.float64
    assert np.isfinite(whole).any()
    assert not np.isinf(whole).any()
    assert len(opened.channels) == info.n_leads <= opened.n_signals


def test_window_equals_the_same_window_of_the_whole(opened: OpenRecording):
    whole = opened.read()
    n = opened.info.n_samples
    rng = np.random.default_rng(4)
    windows = [(0, 1), (n - 1, n), (n // 2, n // 2), (0, n), (n - 7, n)]
    windows += [tuple(sorted(rng.integers(0, n + 1, 2))) for _ in range(12)]
    for start, stop in windows:
        np.testing.assert_array_equal(opened.read(start, stop), whole[:, start:stop])


def test_digits_times_step_are_the_millivolts(opened: OpenRecording):
    if opened.scales is None:
        with pytest.raises(UsageError, match="no digital values"):
            opened.read_digital()
        return
    steps, mv = opened.read_digital(), opened.read()
    for digit, row, scale in zip(steps, mv, opened.scales, strict=True):
        kept = digit != scale.missing
        np.testing.assert_allclose(
            (digit[kept] - scale.zero) * scale.step_mv, row[kept], rtol=1e-12, atol=1e-12
        )
        assert np.isnan(row[~kept]).all()
    np.testing.assert_array_equal(opened.read_digital(5, 77), steps[:, 5:77])


def test_rails_hold_all_samples_and_steps_are_positive(opened: OpenRecording):
    info = opened.info
    assert info.step_mv is not None and (info.step_mv > 0).all()
    if info.rails_mv is not None:
        whole = opened.read()
        assert (info.rails_mv[:, 0] < info.rails_mv[:, 1]).all()
        assert (np.nanmin(whole, axis=1) >= info.rails_mv[:, 0] - 1e-9).all()
        assert (np.nanmax(whole, axis=1) <= info.rails_mv[:, 1] + 1e-9).all()


def test_metadata_is_kept_and_identity_is_not(opened: OpenRecording):
    info = opened.info
    assert info.fs_hz == 500.0
    assert info.format in FORMATS
    assert info.name == Path(str(info.path)).stem
    assert info.sha256 is not None and len(info.sha256) == 64
    assert info.identity == ()
    assert all(sentence.endswith(".") for sentence in info.assumed)


def test_windows_outside_are_refused(opened: OpenRecording):
    n = opened.info.n_samples
    for start, stop in ((-1, 5), (5, 4), (0, n + 1)):
        with pytest.raises(UsageError, match="lies outside"):
            opened.read(start, stop)


def test_read_recording_holds_the_same(opened: OpenRecording):
    whole = read_recording(str(opened.info.path))
    np.testing.assert_array_equal(whole.signal_mv, opened.read())
    assert whole.info is not None and whole.info.sha256 == opened.info.sha256


def test_checksum_covers_header_and_signal_files(tmp_path: Path):
    path = made.wfdb_record(tmp_path, made.digits(2, 100, 16))
    expected = hashlib.sha256(path.read_bytes() + (tmp_path / "rec.dat").read_bytes()).hexdigest()
    assert open_recording(path).info.sha256 == expected
    assert open_recording(path, with_sha256=False).info.sha256 is None
