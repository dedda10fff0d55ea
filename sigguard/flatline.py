"""Where a lead does not move, is cut off at a rail, or holds no samples.

Short stretches without movement are natural: a noise-free recording stands still between T and
P. So a standstill counts when it lasts longer than any pause between waves, or when it is held to
the last bit and begins or ends with a jump away from a beat, as a held or zeroed sample does
(unless the row has as many standstills without a jump: then it has no noise, and pauses so).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sigguard.noise import Mask, Rows

LONG_FLAT_S = 1.5  # longer than the pause from T to P at 35 beats a minute
SHORT_FLAT_S = 0.3  # calibration pulses last 0.1 or 0.2 s
SAME_MV = 1e-9  # two samples closer than this are the same sample
MIN_CLIP_S = 0.006
NOISE_STEPS = 1.2  # mean zigzag: noise-free stairs under 1, white noise of one step 1.24 (by simulation)
PULSE_S = (0.08, 0.25)


@dataclass(frozen=True, slots=True, eq=False)
class Runs:
    """Stretches of True in a mask, in order of row and time; ``end`` is the first sample after."""

    row: NDArray[np.intp]
    start: NDArray[np.intp]
    end: NDArray[np.intp]

    def __len__(self) -> int:
        return len(self.row)

    @property
    def length(self) -> NDArray[np.intp]:
        return self.end - self.start

    def where(self, keep: NDArray[np.bool_]) -> Runs:
        return Runs(self.row[keep], self.start[keep], self.end[keep])


def runs_of(mask: Mask, min_len: int = 1) -> Runs:
    """All stretches of True of at least ``min_len`` samples in a mask (R, N)."""
    n_rows, n = mask.shape
    flat = np.zeros((n_rows, n + 1), dtype=np.int8)  # a False after each row parts the rows
    flat[:, :n] = mask
    step = np.diff(flat.ravel(), prepend=np.int8(0))
    start, end = np.flatnonzero(step == 1), np.flatnonzero(step == -1)
    keep = (end - start) >= min_len
    start, end = start[keep], end[keep]
    row = start // (n + 1)
    return Runs(row, start - row * (n + 1), end - row * (n + 1))


def paint(runs: Runs, shape: tuple[int, int]) -> Mask:
    """The mask (R, N) that is True on the runs (they may overlap)."""
    if not len(runs):
        return np.zeros(shape, dtype=bool)
    delta = np.zeros((shape[0], shape[1] + 1), dtype=np.int32)
    np.add.at(delta, (runs.row, runs.start), 1)
    np.add.at(delta, (runs.row, runs.end), -1)
    return np.cumsum(delta[:, :-1], axis=1) > 0


def longest_s(mask: Mask, fs_hz: float) -> NDArray[np.float64]:
    """Length of the longest stretch of True, seconds, (R,); 0 where there is none."""
    out = np.zeros(mask.shape[0])
    runs = runs_of(mask)
    np.maximum.at(out, runs.row, runs.length / fs_hz)
    return out


def flat_mask(
    filled_mv: Rows,
    move_mv: Rows,
    missing: Mask,
    fs_hz: float,
    *,
    qrs_mask: Mask,
    step_mv: NDArray[np.float64],
) -> Mask:
    """Samples (R, N) on which the lead stands still.

    Either 1.5 s or more within one step of resolution (``step_mv`` (R,); NaN counts as 0), or 0.3 s
    or more held exactly and entered or left by a jump of over 3 steps and 20 µV that is no beat.
    ``move_mv`` (R, N−1) holds the absolute differences of neighbours. Missing samples are missing, not flat. A row that never moves is flat throughout.
    """
    n_rows, n = filled_mv.shape
    still = np.zeros((n_rows, n), dtype=bool)
    if n < 2:
        return ~missing
    same = move_mv <= SAME_MV
    if missing.any():
        same &= ~(missing[:, 1:] | missing[:, :-1])
    held = runs_of(same, max(1, int(round(SHORT_FLAT_S * fs_hz)) - 1))
    held = Runs(held.row, held.start, held.end + 1)  # n equal differences join n + 1 samples
    if len(held):
        long = (held.length >= LONG_FLAT_S * fs_hz) | (held.length == n)
        need = np.maximum(0.02, 3.0 * np.nan_to_num(step_mv))[held.row]
        at_start, at_end = held.start - 1, held.end - 1
        # An end of the row or a gap is no jump: nothing is known of what lies beyond.
        into = np.where(at_start >= 0, move_mv[held.row, np.maximum(at_start, 0)], 0.0)
        out_of = np.where(at_end < n - 1, move_mv[held.row, np.minimum(at_end, n - 2)], 0.0)
        in_beat = qrs_mask[held.row, np.minimum(held.end, n - 1)]
        jump = (into > need) | ((out_of > need) & ~in_beat)
        # Where standing still without a jump is the rule, the recording has no noise and its pauses are natural.
        natural = (
            np.bincount(held.row, weights=np.where(long, 0.0, np.where(jump, -1.0, 1.0)), minlength=n_rows)
            >= 0
        )
        still |= paint(held.where(long | (jump & ~natural[held.row])), (n_rows, n))
    still |= _within_one_step(filled_mv, fs_hz, step_mv)
    return still & ~missing


def _within_one_step(filled_mv: Rows, fs_hz: float, step_mv: NDArray[np.float64]) -> Mask:
    """Stretches of 1.5 s within one step, on a grid of 0.25 s."""
    n_rows, n = filled_mv.shape
    width = max(1, int(round(0.25 * fs_hz)))
    n_win, reach = n // width, int(round(LONG_FLAT_S / 0.25))
    out = np.zeros((n_rows, n), dtype=bool)
    if n_win < reach:
        return out
    blocks = filled_mv[:, : n_win * width].reshape(n_rows, n_win, width)
    allowed = (np.nan_to_num(step_mv) * 1.01 + SAME_MV)[:, None]
    # Most rows move in every block: look closer only at those that do not.
    lazy = np.flatnonzero(
        (np.abs(blocks[:, :, 0] - blocks[:, :, width // 2]) <= allowed).sum(axis=1) >= reach
    )
    if lazy.size == 0:
        return out
    low, high = blocks[lazy].min(axis=2), blocks[lazy].max(axis=2)
    view = np.lib.stride_tricks.sliding_window_view
    calm = view(high, reach, axis=1).max(axis=2) - view(low, reach, axis=1).min(axis=2) <= allowed[lazy]
    row, first = np.nonzero(calm)
    last = np.where(first + reach == n_win, n, (first + reach) * width)
    out[lazy] = paint(Runs(row, first * width, last), (len(lazy), n))
    return out


def clipped_mask(
    filled_mv: Rows,
    missing: Mask,
    fs_hz: float,
    *,
    step_mv: NDArray[np.float64],
    rails_mv: NDArray[np.float64] | None = None,
) -> Mask:
    """Samples (R, N) cut off at a rail.

    With ``rails_mv`` (R, 2), lowest and highest value (NaN unknown), two samples in a row within
    half a step of a rail. Besides, whatever the header says, plateaus at the row's highest and
    lowest value of 6 ms and 3 samples or more, if either
    - both flanks begin with a corner: a smooth top that stays within one step for L samples falls by
      less than step·((L+6)/L)² three samples further out (parabola), and where a pause gives way to a
      steep wave each sample falls further than the one before; or
    - the row's noise is of about one step or more, yet the plateau lasts 5 samples.
    Held P and T tops, coarse steps and small signals pass as smooth, and so do rectangles of 0.08
    to 0.25 s (calibration pulses) and a row that never moves.
    """
    out = np.zeros(filled_mv.shape, dtype=bool)
    if filled_mv.shape[1] < 3:
        return out
    step = np.nan_to_num(step_mv)
    near = np.maximum(0.5 * step, SAME_MV)[:, None]
    for sign in (1.0, -1.0):
        x = filled_mv if sign > 0 else -filled_mv
        top = x.max(axis=1, keepdims=True)
        at_top = x >= top - near
        if missing.any():
            at_top &= ~missing
        level = _cut_rows(x, top[:, 0], at_top, fs_hz, step)
        if rails_mv is not None:
            rail = rails_mv[:, 1] if sign > 0 else -rails_mv[:, 0]
            moves = x.min(axis=1) < top[:, 0] - near[:, 0]
            at_rail = moves & (top[:, 0] >= np.where(np.isfinite(rail), rail, np.inf) - near[:, 0])
            level |= at_rail
        hit = np.flatnonzero(level)
        if hit.size:
            out[hit] |= paint(runs_of(at_top[hit], 2), (hit.size, x.shape[1]))
    return out


def _cut_rows(
    x: Rows, top: NDArray[np.float64], at_top: Mask, fs_hz: float, step: NDArray[np.float64]
) -> NDArray[np.bool_]:
    """Rows (R,) whose top is a cut by the parabola rule."""
    n = x.shape[1]
    found = np.zeros(len(x), dtype=bool)
    # A row with too few samples at its top cannot hold a plateau; most rows end here.
    many = np.flatnonzero(at_top.sum(axis=1) >= 3)
    if many.size == 0:
        return found
    runs = runs_of(at_top[many], max(3, int(round(MIN_CLIP_S * fs_hz))))
    runs = Runs(many[runs.row], runs.start, runs.end)
    runs = runs.where((runs.start >= 3) & (runs.end <= n - 3) & (runs.length < n // 2))
    if not len(runs):
        return found
    height = top[runs.row]
    resolution = np.maximum(step[runs.row], 1e-3)  # finer than 1 µV is not a matter of resolution
    cut = _noise_held_back(x, runs, step, fs_hz) | (
        _is_cut_off(x, runs, height, resolution, -1) & _is_cut_off(x, runs, height, resolution, +1)
    )
    cut &= ~_is_pulse(x, runs, height, fs_hz)
    found[runs.row[cut]] = True
    return found


def _is_cut_off(
    x: Rows, runs: Runs, height: NDArray[np.float64], resolution: NDArray[np.float64], side: int
) -> NDArray[np.bool_]:
    """Plateaus whose flank on one side starts with a corner instead of a bend."""
    edge = runs.start if side < 0 else runs.end - 1
    drop = [height - x[runs.row, edge + side * k] for k in (1, 2, 3)]
    length = runs.length.astype(np.float64)
    smooth = resolution * ((length + 6.0) / length) ** 2
    second, third = drop[1] - drop[0], drop[2] - drop[1]
    return (drop[2] > 6.0 * smooth) & (third <= 1.5 * second + 0.5 * resolution)


def _noise_held_back(x: Rows, runs: Runs, step: NDArray[np.float64], fs_hz: float) -> NDArray[np.bool_]:
    """Plateaus too long for the noise of their row."""
    rows, back = np.unique(runs.row, return_inverse=True)
    bend = x[rows, 2:] - 2 * x[rows, 1:-1] + x[rows, :-2]
    every = max(1, bend.shape[1] // 700)
    one, next_ = bend[:, :-1:every], bend[:, 1::every]
    size = np.minimum(np.abs(one), np.abs(next_))
    # Noise bends to and fro, waves keep bending one way for a while; held stretches tell nothing of either.
    zigzag = np.where(one * next_ < 0, size, 0.0)
    moving = (np.abs(one) > SAME_MV) | (np.abs(next_) > SAME_MV)
    cell = np.maximum(step[rows], 1e-4)[:, None]
    zigzag = np.where(moving, np.minimum(zigzag, 6.0 * cell), 0.0)  # bursts count, but not beyond measure
    in_steps = (zigzag.sum(axis=1) / (np.maximum(moving.sum(axis=1), 1) * cell[:, 0]))[back]
    least = max(5, int(np.ceil(MIN_CLIP_S * fs_hz)))
    return (runs.length >= least) & (in_steps > NOISE_STEPS)


def _is_pulse(x: Rows, runs: Runs, height: NDArray[np.float64], fs_hz: float) -> NDArray[np.bool_]:
    """Rectangles: 0.08–0.25 s long, both flanks within 6 ms, from and to the same level, 0.4 mV or more high."""
    reach = max(1, int(round(0.006 * fs_hz)))
    seconds = runs.length / fs_hz
    before = height - x[runs.row, np.maximum(runs.start - reach, 0)]
    after = height - x[runs.row, np.minimum(runs.end - 1 + reach, x.shape[1] - 1)]
    steep = np.minimum(before, after) > 0.4
    level = np.abs(before - after) < 0.15 * np.maximum(before, after)
    return (seconds >= PULSE_S[0]) & (seconds <= PULSE_S[1]) & steep & level
