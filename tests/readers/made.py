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


def field(value: object, width: int, encoding: str = "latin-1") -> bytes:
    """A header field of EDF: characters, padded with blanks."""
    raw = str(value).encode(encoding)
    assert len(raw) <= width, value
    return raw.ljust(width)


def edf_file(
    path: Path,
    signals: list[dict],
    *,
    record_s: float = 1.0,
    bits: int = 16,
    kind: str = "",
    starts_s: list[float] | None = None,
    texts: dict[int, bytes] | None = None,
    n_stated: int | None = None,
    start: str = "02.01.2003.04.05",
    patient: str = "X X X X",
    recording: str = "X",
    encoding: str = "latin-1",
) -> Path:
    """An EDF (``bits`` 16) or BDF (24) file; of each signal its steps and what differs from the usual.

    ``kind`` is ``+C`` or ``+D``: an annotation signal is then put behind the others; ``starts_s`` says when each
    record begins, ``texts`` holds further annotation lists of a record, by its number.
    """
    magic, name = (b"0       ", "EDF") if bits == 16 else (b"\xffBIOSEMI", "BDF")
    half = 1 << (bits - 1)
    usual = {"unit": "uV", "physical": (-half, half - 1), "digital": (-half, half - 1), "prefilter": ""}
    table = [usual | s for s in signals]
    counts = [round(s.get("fs_hz", 500) * record_s) for s in table]
    n_records = len(table[0]["steps"]) // counts[0]
    if kind:
        notes = {"label": f"{name} Annotations", "unit": "", "physical": (-1, 1), "steps": None}
        table.append(usual | notes)
        counts.append(120 // (bits // 8))
    columns = [
        [field(s["label"], 16, encoding) for s in table],
        [field("", 80) for _ in table],
        [field(s["unit"], 8, encoding) for s in table],
        [field(s["physical"][0], 8) for s in table],
        [field(s["physical"][1], 8) for s in table],
        [field(s["digital"][0], 8) for s in table],
        [field(s["digital"][1], 8) for s in table],
        [field(s["prefilter"], 80) for s in table],
        [field(n, 8) for n in counts],
        [field("", 32) for _ in table],
    ]
    head = [magic, field(patient, 80), field(recording, 80), field(start, 16)]
    head += [field(256 * (len(table) + 1), 8), field(f"{name}{kind}" if kind else "", 44)]
    head += [field(n_records if n_stated is None else n_stated, 8), field(f"{record_s:g}", 8)]
    head += [field(len(table), 4)]
    body = []
    for r in range(n_records):
        for s, n in zip(table, counts, strict=True):
            if s["steps"] is None:
                at = r * record_s if starts_s is None else starts_s[r]
                lists = b"%+.6f\x14\x14\0" % at + (texts or {}).get(r, b"")
                body.append(lists.ljust(n * bits // 8, b"\0"))
            else:
                body.append(encode(np.asarray(s["steps"])[r * n : (r + 1) * n], bits))
    path.write_bytes(b"".join(head) + b"".join(b"".join(c) for c in columns) + b"".join(body))
    return path


def crc_ccitt(data: bytes) -> int:
    """CCITT polynomial 0x1021 from 0xFFFF, bit by bit."""
    crc = 0xFFFF
    for byte in data:
        crc ^= byte << 8
        for _ in range(8):
            crc = ((crc << 1) ^ 0x1021 if crc & 0x8000 else crc << 1) & 0xFFFF
    return crc


def ishne_file(
    path: Path,
    d: np.ndarray,
    *,
    codes: list[int],
    nv: list[int] | int = 1000,
    fs_hz: int = 500,
    note: bytes = b"",
    n_stated: int | None = None,
    date: tuple[int, int, int] = (2, 1, 2020),
    time: tuple[int, int, int] = (3, 4, 5),
    crc: int | None = None,
) -> Path:
    """A Holter file of (n_leads, n) steps."""
    n_leads, n = d.shape
    steps = [nv] * n_leads if isinstance(nv, int) else nv
    slots = {158: (codes, "<i2"), 182: ([1] * n_leads, "<i2"), 206: (steps, "<u2")}
    fixed = bytearray(522)
    counts = np.array([len(note), n if n_stated is None else n_stated, 522, 522 + len(note)], dtype="<i4")
    fixed[10:26] = counts.tobytes()
    fixed[28:36], fixed[68:75], fixed[108:112] = b"Somebody", b"Unnamed", b"S-17"
    for at, values in ((128, (2, 1, 7, 6, 1950)), (138, date), (144, date), (150, time), (156, (n_leads,))):
        fixed[at : at + 2 * len(values)] = np.array(values, dtype="<i2").tobytes()
    for at, (values, dtype) in slots.items():
        fill = 0 if at == 206 else -9
        fixed[at : at + 24] = np.array([*values, *[fill] * (12 - n_leads)]).astype(dtype).tobytes()
    fixed[272:274] = np.array([fs_hz], dtype="<u2").tobytes()
    checked = bytes(fixed[10:]) + note
    fixed[:10] = b"ISHNE1.0" + int(crc_ccitt(checked) if crc is None else crc).to_bytes(2, "little")
    path.write_bytes(bytes(fixed) + note + d.T.astype("<i2").tobytes())
    return path


_XSI = 'xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance"'
SUBJECT = (
    "<componentOf><timepointEvent><componentOf><subjectAssignment><subject><trialSubject>"
    '<id root="1.2.3" extension="S-17"/><subjectDemographicPerson><name><given>Some</given>'
    '<family>Body</family></name><administrativeGenderCode code="F"/><birthTime value="19500607"/>'
    "</subjectDemographicPerson></trialSubject></subject></subjectAssignment></componentOf></timepointEvent>"
    "</componentOf>"
)


def aecg_set(
    d: np.ndarray,
    leads: list[str],
    *,
    head: str = '<head value="20200102030405.250"/>',
    time: str = "TIME_ABSOLUTE",
    increment: str = 'value="0.002" unit="s"',
    origin: str = 'value="0" unit="uV"',
    scale: str = 'value="1" unit="uV"',
) -> str:
    """A sequence set of (n_leads, n) steps: its time, then each lead."""
    kind = "GLIST_TS" if time == "TIME_ABSOLUTE" else "GLIST_PQ"
    out = [
        f'<component><sequenceSet><component><sequence><code code="{time}" codeSystem="2.16.840.1.113883.5.4"/>'
        f'<value xsi:type="{kind}">{head}<increment {increment}/></value></sequence></component>'
    ]
    for lead, x in zip(leads, d, strict=True):
        text = "\n".join(" ".join(map(str, x[k : k + 20])) for k in range(0, len(x), 20))
        out.append(
            f'<component><sequence><code code="MDC_ECG_LEAD_{lead.upper()}" codeSystem="2.16.840.1.113883.6.24"/>'
            f'<value xsi:type="SLIST_PQ"><origin {origin}/><scale {scale}/><digits>{text}</digits></value>'
            "</sequence></component>"
        )
    return "".join(out) + "</sequenceSet></component>"


def aecg_file(
    path: Path,
    sets: list[str],
    *,
    code: str = "RHYTHM",
    extra: str = "",
    more: str = "",
    encoding: str = "utf-8",
    before: str = "",
) -> Path:
    """A document of one series of sets; ``extra`` stands within the series, ``more`` behind it."""
    text = (
        f'<?xml version="1.0" encoding="{encoding}"?>{before}<AnnotatedECG xmlns="urn:hl7-org:v3" {_XSI}>'
        f'<id root="1.2"/><code code="93000"/>{SUBJECT}<component><series><code code="{code}"/>'
        f"{''.join(sets)}{extra}</series></component>{more}</AnnotatedECG>"
    )
    path.write_bytes(text.encode(encoding))
    return path
