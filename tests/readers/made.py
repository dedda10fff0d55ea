"""Recordings of every format, made by hand so that what is in them is known without any reader."""

from __future__ import annotations

from pathlib import Path

import numpy as np


def digits(n_leads: int, n: int, bits: int, seed: int = 1) -> np.ndarray:
    """(n_leads, n) whole numbers over most of what the bits can hold, the missing code left out."""
    half = 1 << (bits - 1)
    return np.random.default_rng(seed).integers(-half + 1, half, size=(n_leads, n))


def encode(frames: np.ndarray, fmt: int) -> bytes:
    """Interleaved samples (1-d) as the bytes of a WFDB signal file of this format (signal(5))."""
    x = np.asarray(frames, dtype=np.int64)
    if fmt == 8:
        raise NotImplementedError("differences: see encode_differences")
    simple = {16: "<i2", 32: "<i4", 61: ">i2"}
    if fmt in simple:
        return x.astype(simple[fmt]).tobytes()
    if fmt == 24:
        return x.astype("<i4").view(np.uint8).reshape(-1, 4)[:, :3].tobytes()
    if fmt == 80:
        return (x + 128).astype(np.uint8).tobytes()
    if fmt == 160:
        return (x + 32768).astype("<u2").tobytes()
    if fmt == 212:
        out = bytearray()
        for k in range(0, len(x), 2):
            a = int(x[k]) & 0xFFF
            b = int(x[k + 1]) & 0xFFF if k + 1 < len(x) else 0
            out += bytes((a & 0xFF, (a >> 8) | ((b >> 8) << 4), b & 0xFF))
        return bytes(out)
    if fmt in (310, 311):
        x = np.append(x, np.zeros(-len(x) % 3, dtype=np.int64)) & 0x3FF
        s0, s1, s2 = x[0::3], x[1::3], x[2::3]
        if fmt == 311:
            return (s0 | (s1 << 10) | (s2 << 20)).astype("<u4").tobytes()
        words = np.stack([(s0 << 1) | ((s2 & 0x1F) << 11), (s1 << 1) | ((s2 >> 5) << 11)], axis=1)
        return words.astype("<u2").tobytes()
    raise ValueError(fmt)


def wfdb_record(
    folder: Path,
    d: np.ndarray,
    *,
    name: str = "rec",
    fmt: int = 16,
    fs: str = "500",
    gains: list[str] | None = None,
    names: list[str] | None = None,
    prefix: bytes = b"",
    tail: str = "",
    suffix: str = ".dat",
) -> Path:
    """A record of one signal file; the path of its header."""
    n_leads, n = d.shape
    gains = gains or ["1000/mV"] * n_leads
    names = names or ["I", "II", "III", "aVR"][:n_leads]
    offset = f"+{len(prefix)}" if prefix else ""
    lines = [f"{name} {n_leads} {fs} {n}{tail}"]
    lines += [
        f"{name}{suffix} {fmt}{offset} {g} 0 0 {int(x[0])} 0 0 {lead}"
        for g, x, lead in zip(gains, d, names, strict=True)
    ]
    (folder / f"{name}.hea").write_text("\n".join(lines) + "\n", encoding="utf-8")
    (folder / f"{name}{suffix}").write_bytes(prefix + encode(d.T.reshape(-1), fmt))
    return folder / f"{name}.hea"


def mat_prefix(n_leads: int, n: int) -> bytes:
    """The 24 bytes that open a MATLAB version 4 matrix ``val`` of int16."""
    return np.array([30, n_leads, n, 0, 4], dtype="<i4").tobytes() + b"val\0"


def dicom_file(path: Path, groups: list[dict], **attributes: object) -> Path:
    """A 12-lead waveform object; each group: steps (n, channels) and what differs from the usual."""
    import pydicom
    from pydicom.dataset import FileMetaDataset
    from pydicom.uid import ExplicitVRLittleEndian, generate_uid

    meta = FileMetaDataset()
    meta.MediaStorageSOPClassUID = "1.2.840.10008.5.1.4.1.1.9.1.1"
    meta.MediaStorageSOPInstanceUID = generate_uid()
    meta.TransferSyntaxUID = ExplicitVRLittleEndian
    data = pydicom.Dataset()
    data.file_meta = meta
    data.SOPClassUID, data.SOPInstanceUID = meta.MediaStorageSOPClassUID, meta.MediaStorageSOPInstanceUID
    data.Modality = "ECG"
    data.AcquisitionDateTime = "20200102030405.250"
    for key, value in attributes.items():
        setattr(data, key, value)
    data.WaveformSequence = pydicom.Sequence([_group(**group) for group in groups])
    data.save_as(path, enforce_file_format=True)
    return path


def _group(
    steps: np.ndarray,
    leads: list[dict],
    *,
    fs_hz: float = 500.0,
    originality: str | None = "ORIGINAL",
    offset_ms: float | None = None,
    padding: int | None = None,
    n_stated: int | None = None,
    interpretation: str = "SS",
):
    import pydicom

    item = pydicom.Dataset()
    if originality is not None:
        item.WaveformOriginality = originality
    if offset_ms is not None:
        item.MultiplexGroupTimeOffset = str(offset_ms)
    item.NumberOfWaveformChannels = steps.shape[1]
    item.NumberOfWaveformSamples = len(steps) if n_stated is None else n_stated
    item.SamplingFrequency = str(fs_hz)
    item.ChannelDefinitionSequence = pydicom.Sequence([_channel(**lead) for lead in leads])
    item.WaveformBitsAllocated = 16
    item.WaveformSampleInterpretation = interpretation
    if padding is not None:
        item.add_new(0x5400100A, "OW", np.array([padding], dtype="<i2").tobytes())
    item.add_new(0x54001010, "OW", np.ascontiguousarray(steps, dtype="<i2").tobytes())
    return item


def _channel(
    meaning: str = "Lead II",
    *,
    code: str | None = None,
    sensitivity: float | None = 2.5,
    unit: str | None = "uV",
    correction: float | None = None,
    baseline: float | None = None,
    sample_skew: float | None = None,
    status: str | None = None,
    band: tuple[float, float] | None = None,
):
    import pydicom

    item, source = pydicom.Dataset(), pydicom.Dataset()
    source.CodeValue, source.CodingSchemeDesignator = code or "x", "MDC" if code else "99LOCAL"
    source.CodeMeaning = meaning
    item.ChannelSourceSequence = pydicom.Sequence([source])
    if sensitivity is not None:
        item.ChannelSensitivity = str(sensitivity)
    if unit is not None:
        units = pydicom.Dataset()
        units.CodeValue, units.CodingSchemeDesignator, units.CodeMeaning = unit, "UCUM", unit
        item.ChannelSensitivityUnitsSequence = pydicom.Sequence([units])
    for key, value in (
        ("ChannelSensitivityCorrectionFactor", correction),
        ("ChannelBaseline", baseline),
        ("ChannelSampleSkew", sample_skew),
    ):
        if value is not None:
            setattr(item, key, str(value))
    if status:
        item.ChannelStatus = status
    if band:
        item.FilterLowFrequency, item.FilterHighFrequency = map(str, band)
    return item


def csv_text(
    mv: np.ndarray, leads: list[str], *, fs_hz: float = 500.0, unit: str = " [mV]", separator: str = ","
) -> str:
    """A table with a column of seconds and one column a lead, 4 decimals."""
    rows = [separator.join(["time_s", *(f"{lead}{unit}" for lead in leads)])]
    for k, values in enumerate(mv.T):
        fields = ["" if np.isnan(v) else f"{v:.4f}" for v in values]
        rows.append(separator.join([f"{k / fs_hz:.4f}", *fields]))
    return "\n".join(rows) + "\n"
