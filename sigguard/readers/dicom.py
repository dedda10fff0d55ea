"""DICOM waveforms (PS3.3 C.10.9): the original rhythm, never the derived median beat.

Scaled here from the raw steps: pydicom's own scaling converts no units, does not mask the padding
value and ignores skew. Groups recorded one after the other (4 × 3 leads) are put on one time
axis, missing where a group does not reach. Samples are held in memory; windows are cut from them.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import NoECGLead, ReadError, SigguardError
from sigguard.leads import LEAD_OF_CODE, clean_name, normalise_leads
from sigguard.readers import base
from sigguard.readers.base import MAYBE, NO, YES, DigitalScale, OpenRecording, Reader, ReadOptions, read_error
from sigguard.readers.held import OpenHeld
from sigguard.readers.signals import device_stated, given_unit, is_ecg, mv_per_unit
from sigguard.recording import MAX_LEADS, RecordingInfo

_WAVEFORM_CLASSES = b"1.2.840.10008.5.1.4.1.1.9."
_DEFLATED = "1.2.840.10008.1.2.1.99"
_KINDS = {"SB": "i1", "UB": "u1", "SS": "i2", "US": "u2", "SL": "i4", "UL": "u4"}
_DERIVED_WORDS = ("MEDIAN", "AVERAGE", "TEMPLATE", "DERIVED", "REPRESENTATIVE")
_IDENTITY = ("PatientName", "PatientID", "PatientBirthDate", "PatientSex", "AccessionNumber")
MAX_SHIFT_S = 60.0  # a group or channel that starts later than all recorded time plus this is a defect


def sniff(path: Path, head: bytes) -> int:
    """The DICOM mark at byte 128; sure where the class of the object is a waveform."""
    if head[128:132] != b"DICM":
        return NO
    return YES if _WAVEFORM_CLASSES in head[132:1024] else MAYBE


@dataclass(frozen=True, slots=True)
class _Group:
    """One multiplex group: raw steps (n_samples, n_channels), and where it begins, s."""

    item: Any
    steps: NDArray[np.integer]
    fs_hz: float
    start_s: float


@dataclass(frozen=True, slots=True)
class _Channel:
    """One lead: raw steps, the sample of the recording its first one is, its scale and header facts."""

    name: str
    steps: NDArray[np.integer]
    first: int
    scale: DigitalScale
    padding: int | None
    band_hz: tuple[float, float]


def open_dicom(path: Path, options: ReadOptions) -> OpenRecording:
    """Open a DICOM waveform object. Raises ReadError for all that cannot be read."""
    data = _parse(path)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # elements are decoded, and complained of, when first looked at
            return _assemble(path, data, options)
    except SigguardError:
        raise
    except Exception as err:  # an element of the wrong kind may surface as any error
        where, expected = "waveform attributes", "the attributes of a DICOM waveform"
        raise _error(path, where, expected, base.reason(err)) from err


def _parse(path: Path) -> Any:
    import pydicom  # heavy: only once there is such a file
    from pydicom.filereader import read_file_meta_info

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # what matters of the content is checked below
            # a deflated object may unfold to any size, so it is not unfolded at all
            if read_file_meta_info(path).get("TransferSyntaxUID") == _DEFLATED:
                raise _error(
                    path,
                    "transfer syntax",
                    "plain explicit or implicit VR",
                    "a deflated object",
                    "save it uncompressed",
                )
            data = pydicom.dcmread(path)
    except ReadError:
        raise
    except Exception as err:  # damaged objects surface as errors of many kinds
        raise _error(path, "data set", "a sound DICOM object", base.reason(err)) from err
    return data


def _assemble(path: Path, data: Any, options: ReadOptions) -> OpenRecording:
    assumed: list[str] = []
    unit = given_unit(options.units)
    if not data.get("WaveformSequence"):
        modality = str(data.get("Modality") or "unknown modality")[:16]
        raise _error(
            path, "WaveformSequence", "a waveform object", f"none ({modality})", "send the ECG waveform"
        )
    items = _originals(path, data, assumed)
    groups = [_group(path, data, number, item) for number, item in items]
    fs_hz = max(groups, key=lambda g: g.steps.size).fs_hz
    base.check_rate(fs_hz, str(path), "SamplingFrequency")
    assumed += base.stated_rate_wins(fs_hz, options.fs_hz)
    channels: list[_Channel] = []
    left_out: list[str] = []
    numbers: list[int] = []
    count = 0
    zero_s = min(g.start_s for g in groups)
    total_s = sum(len(g.steps) / g.fs_hz for g in groups) + MAX_SHIFT_S
    for group in groups:
        for k, definition in enumerate(group.item.ChannelDefinitionSequence):
            name = _lead_name(definition)
            why = _why_not(definition, name, unit) or (f"{group.fs_hz:g} Hz" if group.fs_hz != fs_hz else "")
            if why:
                left_out.append(f"{name} ({why})")
            else:
                if not 0 <= group.start_s - zero_s <= total_s:
                    raise _error(
                        path,
                        "MultiplexGroupTimeOffset",
                        f"a start within {total_s:g} s",
                        f"{group.start_s:g} s",
                    )
                start = round((group.start_s - zero_s) * fs_hz)
                channels.append(_channel(path, group, k, definition, name, start, unit, assumed))
                numbers.append(count + k)
        count += group.steps.shape[1]
    if not channels:
        raise read_error(
            kind=NoECGLead,
            file=str(path),
            where="channel definitions",
            expected="at least one calibrated ECG channel",
            found=", ".join(left_out)[:200] or "no channel",
            remedy="send the ECG waveform with its calibration",
        )
    if len(channels) > MAX_LEADS:
        raise _error(path, "channel definitions", f"at most {MAX_LEADS} leads", str(len(channels)))
    return _opened(path, data, options, fs_hz, zero_s, channels, tuple(numbers), count, assumed, left_out)


def _opened(
    path: Path,
    data: Any,
    options: ReadOptions,
    fs_hz: float,
    zero_s: float,
    channels: list[_Channel],
    numbers: tuple[int, ...],
    n_signals: int,
    assumed: list[str],
    left_out: list[str],
) -> OpenRecording:
    ends = [c.first + len(c.steps) for c in channels]
    n_samples = base.check_length(max(ends), str(path), "NumberOfWaveformSamples")
    if len(set(ends)) > 1 or any(c.first for c in channels):
        assumed.append(
            "Leads were recorded at differing times; they count as missing where they were not recorded."
        )
    scales = tuple(c.scale for c in channels)
    band = np.array([c.band_hz for c in channels])
    info = RecordingInfo(
        name=path.stem,
        leads=normalise_leads([c.name for c in channels]),
        fs_hz=fs_hz,
        n_samples=n_samples,
        path=str(path),
        format="DICOM",
        sha256=base.sha256_of([path]) if options.with_sha256 else None,
        start_time=_start_time(data, zero_s),
        rails_mv=base.rails_mv(scales),
        step_mv=np.array([abs(s.step_mv) for s in scales]),
        band_hz=band if np.isfinite(band).any() else None,
        assumed=tuple(dict.fromkeys(assumed)),
        left_out=tuple(left_out),
        device=device_stated(
            (key, str(data.get(key) or "")) for key in ("Manufacturer", "ManufacturerModelName")
        ),
        identity=_identity(data) if options.with_identity else (),
    )
    return OpenHeld(info, channels, channels=numbers, n_signals=n_signals)


def _originals(path: Path, data: Any, assumed: list[str]) -> list[tuple[int, Any]]:
    """(number from 1, item) of the groups that hold what was recorded, not what was made of it."""
    out = []
    for number, item in enumerate(data.WaveformSequence, start=1):
        stated = str(item.get("WaveformOriginality") or "").strip().upper()
        label = str(item.get("MultiplexGroupLabel") or "").upper()
        if stated == "ORIGINAL":
            out.append((number, item))
        elif not stated and not any(word in label for word in _DERIVED_WORDS):
            assumed.append(
                f"Group {number} does not say whether it is original; taken as the recorded rhythm."
            )
            out.append((number, item))
    if not out:
        raise read_error(
            kind=NoECGLead,
            file=str(path),
            where="WaveformOriginality",
            expected="an original rhythm",
            found="derived waveforms only (such as a median beat)",
            remedy="send the recorded rhythm",
        )
    return out


def _group(path: Path, data: Any, number: int, item: Any) -> _Group:
    """The group's raw steps as a view of the stored bytes: nothing is allocated by what a count says."""
    where = f"waveform group {number}"
    kind = str(item.get("WaveformSampleInterpretation"))
    if kind not in _KINDS:
        raise _error(
            path,
            where,
            "samples of 8, 16 or 32 bits",
            f"interpretation {base.printable(kind)[:20]}",
            "export it as 16-bit samples",
        )
    little = data.original_encoding[1] is not False
    if not little and _KINDS[kind][1] == "4":
        raise _error(
            path,
            where,
            "32-bit samples in little-endian order",
            "big-endian order",
            "save it as little-endian",
        )
    dtype = np.dtype(_KINDS[kind]).newbyteorder("<" if little else ">")
    bits = item.get("WaveformBitsAllocated")
    if bits is not None and int(bits) != dtype.itemsize * 8:
        raise _error(path, where, f"{dtype.itemsize * 8} bits a sample for {kind}", f"{bits}")
    n_channels, n_samples = int(item.NumberOfWaveformChannels), int(item.NumberOfWaveformSamples)
    definitions = item.get("ChannelDefinitionSequence") or []
    if n_channels < 1 or len(definitions) != n_channels:
        raise _error(path, where, f"{n_channels} channel definitions, at least one", str(len(definitions)))
    stored = bytes(item.WaveformData)
    wanted = n_channels * n_samples * dtype.itemsize
    if n_samples < 0 or wanted > len(stored):
        held = len(stored) // (n_channels * dtype.itemsize)
        raise _error(
            path,
            where,
            f"{n_samples} samples of {n_channels} channels",
            f"{held}",
            "the file is cut short: send it again",
        )
    steps = np.frombuffer(stored, dtype=dtype, count=n_channels * n_samples).reshape(n_samples, n_channels)
    fs_hz = base.check_rate(float(item.SamplingFrequency), str(path), f"{where}, SamplingFrequency")
    return _Group(item, steps, fs_hz, _number(item.get("MultiplexGroupTimeOffset"), 0.0) / 1000.0)


def _lead_name(definition: Any) -> str:
    """By the code of the channel's source, else the meaning of the code, else the label."""
    source = (definition.get("ChannelSourceSequence") or [None])[0]
    if source is not None:
        scheme, value = str(source.get("CodingSchemeDesignator") or ""), str(source.get("CodeValue") or "")
        prefix = {"MDC": "2:", "SCPECG": "5.6.3-9-"}.get(scheme.strip().upper())
        if prefix and value.startswith(prefix) and value[len(prefix) :].isdigit():
            known = LEAD_OF_CODE.get(int(value[len(prefix) :]))
            if known:
                return known
    meaning = str(source.get("CodeMeaning") or "") if source is not None else ""
    return clean_name(meaning) or clean_name(str(definition.get("ChannelLabel") or "")) or "unnamed"


def _unit(definition: Any) -> str | None:
    sequence = definition.get("ChannelSensitivityUnitsSequence") or [None]
    return None if sequence[0] is None else str(sequence[0].get("CodeValue") or "") or None


def _why_not(definition: Any, name: str, unit: str | None) -> str:
    """Why a channel is no ECG lead that can be used; empty where it is one."""
    stated = _unit(definition)
    if not is_ecg(name, stated):
        return base.printable(stated or "no ECG")[:20]
    if not _number(definition.get("ChannelSensitivity"), 0.0):
        return "no sensitivity stated"
    return "" if stated or unit else "no unit stated"


def _channel(
    path: Path,
    group: _Group,
    k: int,
    definition: Any,
    name: str,
    start: int,
    unit: str | None,
    assumed: list[str],
) -> _Channel:
    stated = _unit(definition)
    if stated is None:
        assumed.append(f"No unit is stated for {name}; {unit} was taken, as given.")
    status = [str(s).strip().upper() for s in _several(definition.get("ChannelStatus"))]
    if bad := [s for s in status if s and s != "OK"]:
        marks = base.printable(", ".join(bad))[:60]
        assumed.append(f"The recorder marks {name} as {marks}; its samples were checked all the same.")
    factor = _number(definition.get("ChannelSensitivity"), 0.0) * _number(
        definition.get("ChannelSensitivityCorrectionFactor"), 1.0
    )
    if not np.isfinite(factor) or factor == 0.0:
        raise _error(path, f"sensitivity of {name}", "a number other than 0", f"{factor:g}")
    offset = _number(definition.get("ChannelBaseline"), 0.0)
    padding = _padding(group)
    low, high = _limits(group.steps.dtype, definition)
    if padding is not None and low <= padding <= high:
        low, high = (low + 1, high) if padding == low else (low, high - 1) if padding == high else (low, high)
    missing = padding if padding is not None else int(np.iinfo(group.steps.dtype).min) - 1
    scale = DigitalScale(
        (mv_per_unit(stated or unit or "") or 1.0) * factor, -offset / factor, low, high, missing
    )
    skew = (
        _number(definition.get("ChannelSampleSkew"), 0.0)
        or _number(definition.get("ChannelTimeSkew"), 0.0) * group.fs_hz
    )
    if abs(skew) > MAX_SHIFT_S * group.fs_hz:
        raise _error(path, f"skew of {name}", f"at most {MAX_SHIFT_S:g} s", f"{skew / group.fs_hz:g} s")
    steps, first = group.steps[:, k], start + round(skew)
    if first < 0:  # begins before the recording does: what lies before is cut
        steps, first = steps[-first:], 0
    return _Channel(name, steps, first, scale, padding, _band(definition))


def _limits(dtype: np.dtype, definition: Any) -> tuple[int, int]:
    """Lowest and highest step by the bits stored, else by the bits allocated."""
    bits = int(_number(definition.get("WaveformBitsStored"), 0.0))
    if not 2 <= bits <= dtype.itemsize * 8:
        bits = dtype.itemsize * 8
    return (-(1 << (bits - 1)), (1 << (bits - 1)) - 1) if dtype.kind == "i" else (0, (1 << bits) - 1)


def _band(definition: Any) -> tuple[float, float]:
    """High-pass and low-pass corner, Hz; NaN where not stated."""
    low = _number(definition.get("FilterLowFrequency"), np.nan)
    high = _number(definition.get("FilterHighFrequency"), np.nan)
    return (low if low >= 0 else np.nan), (high if high > 0 else np.nan)


def _padding(group: _Group) -> int | None:
    value = group.item.get("WaveformPaddingValue")
    if value is None or value == b"":
        return None
    if isinstance(value, bytes | bytearray):
        size = group.steps.dtype.itemsize
        return (
            int(np.frombuffer(bytes(value[:size]), dtype=group.steps.dtype)[0])
            if len(value) >= size
            else None
        )
    return int(value)


def _start_time(data: Any, offset_s: float) -> datetime | None:
    """When the first sample was taken: AcquisitionDateTime and the group's offset; None if not stated."""
    text = str(data.get("AcquisitionDateTime") or "").strip()
    digits, _, fraction = text.partition(".")
    try:
        moment = datetime.strptime(digits[:14], "%Y%m%d%H%M%S")
        fraction = fraction.split("+")[0].split("-")[0][:6]
        micro = int(fraction.ljust(6, "0")) if fraction else 0
        return moment.replace(microsecond=micro) + timedelta(seconds=offset_s)
    except (ValueError, OverflowError):
        return None


def _identity(data: Any) -> tuple[tuple[str, str], ...]:
    pairs = ((key, base.printable(str(data.get(key) or "")).strip()) for key in _IDENTITY)
    return tuple((key, value) for key, value in pairs if value)


def _number(value: Any, default: float) -> float:
    """A header number; the default where it is absent or empty."""
    return default if value is None or str(value).strip() == "" else float(value)


def _several(value: Any) -> list[Any]:
    return [] if value is None else [value] if isinstance(value, str) else list(value)


def _error(
    path: Path, where: str, expected: str, found: str, remedy: str = "export the recording again"
) -> ReadError:
    return read_error(str(path), where=where, expected=expected, found=found, remedy=remedy)


READER = Reader("DICOM", sniff, open_dicom)
