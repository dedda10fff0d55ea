"""From features to what the table of segments says: scores, bounds, absences, faults."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sigguard.beats import MATCH_S
from sigguard.features import FEATURE_NAMES
from sigguard.measure import SEEN_MV, Analysis
from sigguard.reliability import LEARNED_FAULTS, ReliabilityModel
from sigguard.segments import ABSENT, FAULTS, MEASUREMENTS

RATE, PR, QRS, QT, ST = range(len(MEASUREMENTS))
NO_WAVE, TOO_SMALL_HERE = ABSENT.index("no-wave"), ABSENT.index("too-small-here")
AGREEING = 4  # leads that come to the same beats by themselves; any limb lead follows from two others
MIN_CLIPPED_S, MIN_FLAT_S = 0.05, 0.3
MAINS_UV = 25.0  # peak; the hum of the stability clause of IEC 60601-2-51
WANDER_UV = 1000.0  # range of the baseline, 10 mm; twice the drift of the stability clause of IEC 60601-2-51
SMALL_UV = 50.0  # half a millimetre: nobody reads an interval off such a wave (common practice)
WEAK_UV = 150.0  # QRS peak to peak; 5 mm is the usual lower end (common practice), this is 1.5 mm
HIGH_PASS_TAKES_ST_HZ = (
    0.1  # a 0.5 Hz analogue high-pass distorts ST, 0.05 Hz is asked for (Kligfield et al. 2007)
)
LOW_PASS_TAKES_QRS_HZ = 30.0
LOWEST_FS_HZ = {PR: 100.0, QRS: 100.0, QT: 80.0, ST: 80.0}


def judge_rows(
    model: ReliabilityModel,
    analysis: Analysis,
    tolerance: NDArray[np.float64],
    agree: NDArray[np.bool_] | None = None,
) -> tuple[NDArray, NDArray, NDArray, NDArray, NDArray]:
    """(scores, bounds, reliable, absent, fault probabilities) of the (R,) rows of an analysis.

    ``agree`` (n_strips, n_leads): see ``agreeing_leads``. A bound that the calibration cannot give is NaN. A named absence stands only where the calibration
    says that such names hold.
    """
    scores, fault_p = model.judge(analysis.features)
    if agree is not None:
        scores = lift_agreed_rate(model, scores, agree)
    has = np.isfinite(analysis.value)
    bound = model.bound(scores)
    bound = np.where(np.isfinite(bound) & has, bound, np.nan)
    reliable = model.reliable(scores, tolerance.tolist()) & has
    absent = np.where(model.absence_holds(scores) & ~has, analysis.absent, 0).astype(np.int8)
    return scores, bound, reliable, absent, fault_p


def agreeing_leads(
    analysis: Analysis,
    common_strip: NDArray[np.intp],
    common_s: NDArray[np.float64],
    n_leads: int,
    duration_s: float,
) -> NDArray[np.bool_]:
    """(n_strips, n_leads): the leads whose own beats are the common ones, each within 150 ms, edges aside.

    A lead's own beats and the common ones are found apart; where several leads come to the same
    list by themselves, that is evidence no single lead can give.
    """
    n_rows = len(analysis.value)
    out = np.zeros(n_rows, dtype=bool)
    for row in range(n_rows):
        own = analysis.beat_s[analysis.beat_row == row]
        common = common_s[common_strip == row // n_leads]
        out[row] = same_beats(own, common, duration_s)
    return out.reshape(-1, n_leads)


def same_beats(own_s: NDArray[np.float64], common_s: NDArray[np.float64], duration_s: float) -> bool:
    """Whether two sorted lists hold the same beats, each within 150 ms, edges aside; no for fewer than two."""
    return (
        len(own_s) > 1 and _all_near(own_s, common_s, duration_s) and _all_near(common_s, own_s, duration_s)
    )


def _all_near(some_s: NDArray[np.float64], others_s: NDArray[np.float64], duration_s: float) -> bool:
    some_s = some_s[(some_s > MATCH_S) & (some_s < duration_s - MATCH_S)]
    if not len(some_s):
        return True
    if not len(others_s):
        return False
    place = np.clip(np.searchsorted(others_s, some_s), 1, max(len(others_s) - 1, 1))
    near = np.minimum(
        np.abs(others_s[np.minimum(place, len(others_s) - 1)] - some_s), np.abs(others_s[place - 1] - some_s)
    )
    return bool(np.all(near <= MATCH_S))


def lift_agreed_rate(
    model: ReliabilityModel, scores: NDArray[np.float64], agree: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """Scores (R, 5) in which the rate of agreeing leads is at least the least score that counts as reliable.

    ``agree`` (n_strips, n_leads); lifted only where AGREEING or more leads of the strip agree.
    """
    least = model.least_reliable_rate()
    lifted = agree & (agree.sum(axis=1, keepdims=True) >= AGREEING)
    out = scores.copy()
    out[:, RATE] = np.where(lifted.ravel(), np.maximum(out[:, RATE], least), out[:, RATE])
    return out


def small_here(
    absent: NDArray[np.int8], reliable: NDArray[np.bool_], value: NDArray[np.float64], n_leads: int
) -> NDArray[np.int8]:
    """A wave missing in one lead but measured in another at the same time is too small there, not absent.

    Rows run by time and then lead, (n_times * n_leads, 5).
    """
    seen = (reliable & np.isfinite(value)).reshape(-1, n_leads, len(MEASUREMENTS)).any(axis=1)
    elsewhere = np.repeat(seen, n_leads, axis=0)
    return np.where((absent == NO_WAVE) & elsewhere, TOO_SMALL_HERE, absent).astype(np.int8)


def hardly_there(features: NDArray[np.float32], reliable: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """(R, 5): PR and QT that cannot be trusted because the wave is under half a millimetre, though it is quiet.

    Quiet enough that three standard errors of the wave's height stay below SEEN_MV: a wave of usual
    size would have been seen.
    """
    out = np.zeros(reliable.shape, dtype=bool)
    for k, height, error in ((PR, "p_height_uv", "p_error_uv"), (QT, "t_fall_uv", "t_error_uv")):
        size = features[:, FEATURE_NAMES.index(height)].astype(np.float64)
        unsure = 3 * features[:, FEATURE_NAMES.index(error)].astype(np.float64)
        out[:, k] = ~reliable[:, k] & (size < SMALL_UV) & (unsure < SEEN_MV * 1e3)
    return out


def limit_by_recording(
    reliable: NDArray[np.bool_],
    lead_index: NDArray[np.intp],
    fs_hz: float,
    band_hz: NDArray[np.float64] | None,
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """(reliable without what sampling rate or recorded bandwidth take away, rows so limited)."""
    allowed = np.ones_like(reliable)
    for column, least in LOWEST_FS_HZ.items():
        allowed[:, column] &= fs_hz >= least
    if band_hz is not None:
        low, high = band_hz[lead_index, 0], band_hz[lead_index, 1]
        allowed[:, ST] &= ~(low > HIGH_PASS_TAKES_ST_HZ)
        allowed[:, QRS] &= ~(high < LOW_PASS_TAKES_QRS_HZ)
    limited: NDArray[np.bool_] = ~np.all(allowed, axis=1)
    return reliable & allowed, limited


def fault_rows(
    model: ReliabilityModel,
    features: NDArray[np.float32],
    fault_p: NDArray[np.float64],
    limited: NDArray[np.bool_],
    length_s: float,
) -> NDArray[np.float32]:
    """(R, 9) fractions of the segment on which each fault lies, in the order of FAULTS; 0 where not called.

    Wander, muscle, mains and motion are called by the classifiers for the segment as a whole; flat,
    clipped and missing are measured.
    """
    out = np.zeros((len(features), len(FAULTS)), dtype=np.float32)

    def column(name: str) -> NDArray[np.float64]:
        return np.nan_to_num(features[:, FEATURE_NAMES.index(name)].astype(np.float64))

    for k, name in enumerate(LEARNED_FAULTS):
        out[:, FAULTS.index(name)] = fault_p[:, k] >= model.fault_threshold[k]
    for name, least in (("flat", MIN_FLAT_S), ("clipped", MIN_CLIPPED_S), ("missing", 1e-9)):
        seconds = column(f"{name}_s")
        out[:, FAULTS.index(name)] = np.where(seconds >= least, np.minimum(seconds / length_s, 1.0), 0.0)
    # Hum is measured outright: what a recorder must put up with in a stability test is called by name.
    hum = np.hypot(column("mains_uv"), column("mains_harmonics_uv")) >= MAINS_UV
    out[:, FAULTS.index("mains")] = np.maximum(out[:, FAULTS.index("mains")], hum)
    drift = column("wander_range_uv") >= WANDER_UV
    out[:, FAULTS.index("wander")] = np.maximum(out[:, FAULTS.index("wander")], drift)
    height = column("qrs_pp_uv")
    out[:, FAULTS.index("weak")] = (height > 0) & (height < WEAK_UV)
    out[:, FAULTS.index("narrow-band")] = limited
    return out


def silence_under(
    reliable: NDArray[np.bool_], start_s: NDArray, end_s: NDArray, alarms: list[tuple[float, float, str]]
) -> NDArray[np.bool_]:
    """``reliable`` without the rows a fibrillation or standstill touches: there is nothing to measure."""
    out = reliable.copy()
    for first, last, pattern in alarms:
        if pattern != "wide-fast":
            out[(start_s < last) & (end_s > first)] = False
    return out
