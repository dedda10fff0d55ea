"""Marks on averaged beats whose waves were put there: places known to the sample, laws of scale, sign and shift.

Marks on the simulator's beats against its truth are in test_measure.py; against hand marks in
external/test_waves_ludb.py. The bias named beside each margin was measured on these beats.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.ndimage import uniform_filter1d

from sigguard import waves
from sigguard.waves import FS, LENGTH, ZERO

U_MS = (np.arange(LENGTH) - ZERO) * 1000 / FS


def hump(on_ms: float, off_ms: float, *, shift_ms: float = 0.0) -> np.ndarray:
    """A raised cosine of height 1 from onset to end."""
    u = np.clip((U_MS - shift_ms - on_ms) / (off_ms - on_ms), 0, 1)
    return 0.5 - 0.5 * np.cos(2 * np.pi * u)


@dataclass(frozen=True)
class Beat:
    p: tuple[float, float, float] | None = (-180.0, -80.0, 0.15)  # onset, end, height; biphasic: see make
    biphasic: bool = False
    qrs: tuple[float, float] = (-44.0, 48.0)
    qrs_mv: float = 1.0
    t: tuple[float, float, float] | None = (140.0, 340.0, 0.3)
    shift_ms: float = 0.0

    def make(self) -> np.ndarray:
        s = self.shift_ms
        on, off = self.qrs
        third = (off - on) / 3
        x = -0.15 * hump(on, on + third, shift_ms=s)
        x += hump(on + 0.6 * third, on + 2.2 * third, shift_ms=s) - 0.3 * hump(
            on + 2 * third, off, shift_ms=s
        )
        x *= self.qrs_mv
        if self.p is not None:
            first, last, height = self.p
            middle = 0.5 * (first + last)
            if self.biphasic:
                x += height * (hump(first, middle, shift_ms=s) - hump(middle, last, shift_ms=s))
            else:
                x += height * hump(first, last, shift_ms=s)
        if self.t is not None:
            first, last, height = self.t
            # The limb that falls is the steeper one, as in life.
            top = first + 0.6 * (last - first)
            rise = np.clip((U_MS - s - first) / (top - first), 0, 1)
            fall = np.clip((last - U_MS + s) / (last - top), 0, 1)
            x += height * np.minimum(0.5 - 0.5 * np.cos(np.pi * rise), 0.5 - 0.5 * np.cos(np.pi * fall))
        return x


def edges(*beats: np.ndarray, noise: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    stack = np.stack(beats)
    return waves.qrs_edges(waves.slope_uv_ms(stack), np.full(len(stack), noise))


def p_of(*beats: np.ndarray, on_ms: float = -44.0, rr_ms: float = 900.0) -> waves.PWave:
    on = np.full(len(beats), on_ms)
    # No T wave known before this one: how far back a P wave may lie follows from the rate.
    reach = waves.p_reach_ms(np.full(len(beats), rr_ms), on, np.full(len(beats), np.nan))
    project, energy = waves.p_projections(np.stack(beats), on, reach)
    return waves.p_wave(project, energy, on, reach)


def t_of(*beats: np.ndarray, limit_ms: float = 600.0, rr_ms: float = 900.0) -> waves.TWave:
    stack = np.stack(beats)
    smooth = uniform_filter1d(uniform_filter1d(stack, waves.T_SMOOTH, axis=1), waves.T_SMOOTH, axis=1)
    n = len(stack)
    return waves.t_wave(smooth, np.full(n, 48.0), np.full(n, limit_ms), np.zeros(n), np.full(n, rr_ms))


# ── QRS ──


@pytest.mark.parametrize("qrs", [(-36.0, 36.0), (-44.0, 48.0), (-60.0, 60.0), (-80.0, 80.0)])
def test_qrs_edges_lie_where_the_complex_was_put(qrs):
    """Measured: both edges within 10 ms; a raised cosine leaves the line without a corner."""
    on, off = edges(Beat(qrs=qrs, p=None, t=None).make())
    assert abs(on[0] - qrs[0]) <= 10 and abs(off[0] - qrs[1]) <= 10


def test_a_wider_complex_is_measured_wider():
    beats = [Beat(qrs=(-half, half), p=None, t=None).make() for half in (34.0, 44.0, 54.0, 66.0, 80.0)]
    on, off = edges(*beats)
    assert np.all(np.diff(off - on) > 8)


@pytest.mark.parametrize("factor", [-1.0, 0.2, 3.0])
def test_qrs_edges_know_neither_size_nor_sign(factor):
    x = Beat().make()
    np.testing.assert_allclose(edges(x), edges(factor * x), atol=1e-9)


@pytest.mark.parametrize("shift_ms", [-6.0, -1.0, 1.5, 2.0, 7.0])
def test_all_marks_move_with_the_beat(shift_ms):
    still, moved = Beat().make(), Beat(shift_ms=shift_ms).make()
    on, off = edges(still, moved)
    assert on[1] - on[0] == pytest.approx(shift_ms, abs=1.5)
    assert off[1] - off[0] == pytest.approx(shift_ms, abs=1.5)
    t = t_of(still, moved)
    assert t.off_ms[1] - t.off_ms[0] == pytest.approx(shift_ms, abs=1.5)
    p = p_of(still, moved)
    assert p.on_ms[1] - p.on_ms[0] == pytest.approx(shift_ms, abs=2.5)


def test_noise_of_known_slope_draws_the_edges_inward():
    x = Beat().make()
    quiet, loud = edges(x), edges(x, noise=0.05)
    assert loud[0][0] >= quiet[0][0] and loud[1][0] <= quiet[1][0]


def test_slope_is_zero_on_a_level_and_constant_on_a_line():
    rows = np.stack([np.full(LENGTH, 2.0), 0.01 * np.arange(LENGTH)])
    slope = waves.slope_uv_ms(rows)
    np.testing.assert_allclose(slope[0], 0.0, atol=1e-15)
    np.testing.assert_allclose(slope[1, 3:-3], 0.01, rtol=1e-9)


# ── P ──


@pytest.mark.parametrize("p", [(-180.0, -80.0, 0.15), (-220.0, -120.0, 0.1), (-150.0, -70.0, 0.2), (-260.0, -130.0, 0.08)])  # fmt: skip
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_p_is_found_upright_and_inverted(p, sign):
    """Measured: onset and end within 7 ms, height within 2 %."""
    first, last, height = p
    found = p_of(Beat(p=(first, last, sign * height)).make())
    assert abs(found.on_ms[0] - first) <= 10 and abs(found.off_ms[0] - last) <= 10
    assert found.amp_mv[0] == pytest.approx(sign * height, rel=0.1)
    assert found.explained[0] > 0.95


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_p_is_found_biphasic(sign):
    found = p_of(Beat(p=(-190.0, -80.0, sign * 0.1), biphasic=True).make())
    assert abs(found.on_ms[0] + 190) <= 14 and abs(found.off_ms[0] + 80) <= 14
    assert found.explained[0] > 0.9


def test_a_sloping_base_moves_no_p():
    x = Beat().make()
    plain = p_of(x)
    sloped = p_of(x + 0.3 + 0.002 * np.arange(LENGTH))
    assert sloped.on_ms[0] == pytest.approx(plain.on_ms[0], abs=0.5)
    assert sloped.amp_mv[0] == pytest.approx(plain.amp_mv[0], rel=1e-3)


def test_without_p_nothing_of_height_is_found():
    found = p_of(Beat(p=None).make())
    assert abs(found.amp_mv[0]) < 0.01


def test_a_t_wave_at_a_fast_rate_is_no_p():
    """At 150/min the window ends within the T wave before it; the search stops short of that."""
    x = Beat(p=None, t=None).make() + 0.4 * hump(-390.0, -250.0)
    found = p_of(x, rr_ms=400.0)
    assert found.on_ms[0] >= -44.0 - (0.45 * 400 + 20) - 8


def test_a_second_p_is_named_as_a_rival():
    """The nearer the second comes to the first in height, the closer the rivalry; who is higher wins."""
    found = p_of(*(Beat().make() + height * hump(-330.0, -240.0) for height in (0.0, 0.05, 0.1, 0.14, 0.2)))
    assert np.all(np.diff(found.rival[:4]) > 0.03) and found.rival[3] > 0.85
    assert np.all(np.abs(found.on_ms[:4] + 180) < 10)
    assert abs(found.on_ms[4] + 330) < 10


# ── T ──


@pytest.mark.parametrize("t", [(140.0, 340.0, 0.3), (160.0, 400.0, 0.2), (110.0, 290.0, 0.5)])
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_t_end_is_found_upright_and_inverted(t, sign):
    """Measured: end within 7 ms of where the cosine comes to rest; the smoothing lowers it by 5 to 9 %."""
    first, last, height = t
    found = t_of(Beat(t=(first, last, sign * height)).make())
    assert abs(found.off_ms[0] - last) <= 16
    assert abs(found.peak_ms[0] - (first + 0.6 * (last - first))) <= 12
    assert found.height_mv[0] == pytest.approx(sign * height, rel=0.12)
    assert found.fall_mv[0] == pytest.approx(height, rel=0.15)


def test_t_marks_know_neither_size_nor_sign():
    x = Beat().make()
    a, b, c = t_of(x), t_of(-x), t_of(2.5 * x)
    for other in (b, c):
        np.testing.assert_allclose(other.off_ms, a.off_ms, atol=1e-6)
        np.testing.assert_allclose(other.peak_ms, a.peak_ms, atol=1e-6)
    np.testing.assert_allclose(b.height_mv, -a.height_mv, atol=1e-9)
    np.testing.assert_allclose(c.fall_mv, 2.5 * a.fall_mv, rtol=1e-9)


def test_no_room_for_a_t_wave_gives_none():
    found = t_of(Beat().make(), limit_ms=190.0)
    assert np.isnan(found.off_ms[0]) and np.isnan(found.fall_mv[0])


def test_a_limb_cut_off_by_the_limit_has_no_end():
    """The next beat comes while the line still steepens: no trapezium under it, so no end, and never one before the QRS."""
    still_falling = 0.3 * (U_MS > 100) * ((U_MS - 100) / 100) ** 2
    found = t_of(-still_falling, still_falling, limit_ms=300.0)
    assert np.isnan(found.off_ms).all()


def test_flat_beats_give_no_waves_and_no_error():
    flat = np.zeros(LENGTH)
    on, off = edges(flat, flat)
    assert np.isfinite(on).all() and np.isfinite(off).all()
    assert p_of(flat).amp_mv[0] == 0.0 and p_of(flat).explained[0] == 0.0
    assert not abs(t_of(flat).fall_mv[0]) > 1e-9  # none or nothing


def test_rows_do_not_know_of_each_other():
    kinds = [
        Beat().make(),
        Beat(p=(-220.0, -120.0, -0.1)).make(),
        Beat(t=(160.0, 400.0, -0.3)).make(),
        np.zeros(LENGTH),
    ]
    together = edges(*kinds)
    p, t = p_of(*kinds), t_of(*kinds)
    for k, x in enumerate(kinds):
        np.testing.assert_allclose([e[0] for e in edges(x)], [e[k] for e in together], atol=1e-9)
        assert p_of(x).on_ms[0] == pytest.approx(p.on_ms[k], abs=1e-3)
        assert t_of(x).off_ms[0] == pytest.approx(t.off_ms[k], abs=1e-9, nan_ok=True)
