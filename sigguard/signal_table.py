"""All features that need the samples and the places of the beats, but not the shapes of the beats."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sigguard import adequacy, flatline, mains, motion, noise, spectrum
from sigguard.noise import Mask, Rows

SIGNAL_FEATURES: tuple[str, ...] = (
    "wander_rms_uv", "wander_range_uv", "wander_slope_uv_s", "wander_fast_rms_uv",
    "muscle_rms_uv", "muscle_steady_uv", "muscle_burst_uv",
    "mains_uv", "mains_harmonics_uv", "mains_hz",
    "flat_s", "longest_flat_s", "clipped_s", "missing_s",
    "tremor_uv", "tremor_peakedness",
    "motion_rms_uv", "motion_peak_uv", "step_change_uv", "motion_crest",
    "qrs_height_uv", "excursion_ratio", "residual_excursion_ratio",
    "p_sqi", "bas_sqi", "k_sqi", "s_sqi", "spectral_entropy", "spectral_edge_hz",
    *spectrum.BAND_NAMES,
    "resolution_uv", "effective_bits", "low_pass_hz_est",
)  # fmt: skip
ALWAYS_GIVEN = ("flat_s", "longest_flat_s", "clipped_s", "missing_s")
MIN_PRESENT_S = 1.0


def signal_features(
    x_mv: Rows,
    fs_hz: float,
    *,
    qrs_mask: Mask,
    residual_mv: Rows,
    fs_res_hz: float,
    rails_mv: NDArray[np.float64] | None = None,
    step_mv: NDArray[np.float64] | None = None,
    mains_among_hz: tuple[float, ...] = noise.MAINS_HZ,
) -> tuple[NDArray[np.float32], dict[str, Mask]]:
    """Features of rows of equal length.

    ``x_mv`` (R, N), NaN where missing; ``qrs_mask`` (R, N), True within 80 ms of a beat;
    ``residual_mv`` (R, M) at ``fs_res_hz``, the row less its averaged beats; ``rails_mv`` (R, 2) and
    ``step_mv`` (R,) where known, NaN where not; ``mains_among_hz`` the mains frequencies to choose from. Returns a matrix (R, F) in the order of
    SIGNAL_FEATURES and the masks ``flat``, ``clipped``, ``missing``, each (R, N). With less than 1 s of
    samples a row has only flat, clipped and missing; everything else is NaN.
    """
    filled, missing = noise.fill_gaps(np.asarray(x_mv, dtype=np.float64))
    move = np.abs(np.diff(filled, axis=1))
    own_step = adequacy.step_mv_of(move, missing)
    step = own_step if step_mv is None else np.where(np.isfinite(step_mv), step_mv, own_step)
    flat = flatline.flat_mask(filled, move, missing, fs_hz, qrs_mask=qrs_mask, step_mv=step)
    clipped = flatline.clipped_mask(filled, missing, fs_hz, step_mv=step, rails_mv=rails_mv)
    found: dict[str, NDArray] = {
        "flat_s": flat.sum(axis=1) / fs_hz,
        "longest_flat_s": flatline.longest_s(flat, fs_hz),
        "clipped_s": clipped.sum(axis=1) / fs_hz,
        "missing_s": missing.sum(axis=1) / fs_hz,
    }
    found |= _native(filled, missing, fs_hz, qrs_mask, step, mains_among_hz)
    found |= _residual(filled, qrs_mask, residual_mv, fs_res_hz)
    found["resolution_uv"] = step * 1e3
    found["effective_bits"] = adequacy.effective_bits(found["qrs_height_uv"] * 1e-3, step)
    matrix = np.column_stack([found[name] for name in SIGNAL_FEATURES]).astype(np.float32)
    scarce = (~missing).sum(axis=1) < MIN_PRESENT_S * fs_hz
    if scarce.any():
        hide = np.array([name not in ALWAYS_GIVEN for name in SIGNAL_FEATURES])
        matrix[np.ix_(scarce, hide)] = np.nan
    return matrix, {"flat": flat, "clipped": clipped, "missing": missing}


def _native(
    filled: Rows,
    missing: Mask,
    fs_hz: float,
    qrs_mask: Mask,
    step: NDArray[np.float64],
    mains_among_hz: tuple[float, ...],
) -> dict[str, NDArray]:
    """Everything from the samples at their own rate."""
    found: dict[str, NDArray] = {}
    plain = noise.plain_transform(filled, fs_hz)
    keep = noise.between_beats(qrs_mask, missing, fs_hz)
    found["wander_rms_uv"], found["wander_range_uv"], found["wander_slope_uv_s"] = noise.wander(plain)
    between = mains.open_spectrum(plain, keep)
    found["mains_uv"], found["mains_harmonics_uv"], found["mains_hz"] = mains.mains(
        between, among_hz=mains_among_hz
    )
    found["muscle_rms_uv"], found["muscle_steady_uv"], found["muscle_burst_uv"] = noise.muscle(
        noise.muscle_band(plain, found["mains_hz"]), keep, fs_hz
    )
    found["low_pass_hz_est"] = adequacy.low_pass_hz_est(between, step)
    spec = spectrum.row_spectrum(filled, fs_hz)
    found["wander_fast_rms_uv"] = np.sqrt(spec.band_uv2(0.5, 1.0))
    found["p_sqi"], found["bas_sqi"] = spectrum.p_sqi(spec), spectrum.bas_sqi(spec)
    found["k_sqi"], found["s_sqi"] = spectrum.shape_moments(filled, missing)
    found["spectral_entropy"] = spectrum.spectral_entropy(spec)
    found["spectral_edge_hz"] = spectrum.spectral_edge_hz(spec)
    found |= dict(zip(spectrum.BAND_NAMES, spectrum.band_powers(spec).T, strict=True))
    return found


def _residual(filled: Rows, qrs_mask: Mask, residual_mv: Rows, fs_res_hz: float) -> dict[str, NDArray]:
    """Everything from what does not recur with the beats."""
    found: dict[str, NDArray] = {}
    res = motion.residual_of(residual_mv, fs_res_hz)
    n, m = filled.shape[1], res.thin_len
    place = np.minimum((np.arange(m) * (n / max(m, 1))).astype(np.intp), n - 1)
    open_mask = ~qrs_mask[:, place]
    open_mask[open_mask.mean(axis=1) < 0.3] = True
    found["tremor_uv"], found["tremor_peakedness"] = motion.tremor(res, open_mask)
    (found["motion_rms_uv"], found["motion_peak_uv"], found["step_change_uv"], found["motion_crest"]) = (
        motion.motion(res)
    )
    height = motion.qrs_height_mv(filled, qrs_mask)
    found["qrs_height_uv"] = height * 1e3
    found["excursion_ratio"], found["residual_excursion_ratio"] = motion.excursion_ratio(filled, res, height)
    return found
