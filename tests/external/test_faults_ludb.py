"""Is the right fault named first? Real clean ECG, one or two disturbances, named by us.

Carriers: the open hand-marked 12-lead records (LUDB) that the model did not learn from. On four leads of
each lies a disturbance each, recorded (test part of the noise-stress records: bw is wander, ma muscle, em
motion) or simulated; the other leads stay clean. Only what costs counts: a measurement that is reliable on
the clean lead and afterwards is not, or has moved beyond its tolerance. With two at once, each alone must
cost one. em holds wander and muscle beside the motion: motion is to be named first, what else is named
is not counted against it. Leads under a patient-first stretch are left out: no fault may be named there.

    python -m tests.external.test_faults_ludb DATA_FOLDER [--rounds 8] [--develop] [--list]

``--develop`` uses the records and the noise that development may look at (1, 5, 9 …; calibrate part).
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from sigguard import Recording, check
from sigguard.electrodes import LEADS_12
from sigguard.recording import RecordingInfo
from sigguard.reliability import TOLERANCE
from sigguard.report.document import Report
from sigguard.simulate.disturbance import (
    apply_clipping,
    apply_dropouts,
    apply_lead_off,
    apply_quantisation,
    draw_disturbance,
)
from sigguard.simulate.recorded import NoiseBank, qrs_peak_to_peak_mv, snr_gain
from sigguard.training.carriers import real_carrier

FS_HZ, N = 500.0, 5000
RAIL_MV = 10.0
LEAD_SETS = ((0, 4, 7, 10), (1, 3, 6, 11), (2, 5, 8, 9))

# kind: (faults that may be named first, lowest and highest ratio in dB; None: not additive)
KINDS: dict[str, tuple[tuple[str, ...], tuple[float, float] | None]] = {
    "bw": (("wander",), (-12, 18)),
    "ma": (("muscle",), (-6, 24)),
    "em": (("motion",), (-6, 24)),
    "wander": (("wander",), (-16, 18)),
    "muscle": (("muscle",), (-6, 24)),
    "tremor": (("muscle",), (-6, 24)),
    "mains": (("mains",), (-24, 12)),
    "motion": (("motion",), (-6, 24)),
    "pops": (("motion",), (-6, 24)),
    "excursion": (("motion",), (-6, 24)),
    "clipping, rails known": (("clipped",), None),
    "clipping, rails unknown": (("clipped",), None),
    "lead-off, flat": (("flat",), None),
    "lead-off, at a rail": (("flat", "clipped"), None),
    "dropout": (("missing",), None),
    "dropout, held": (("flat",), None),
    "weak": (("weak",), None),
}
ADDITIVE = tuple(kind for kind, (_, db) in KINDS.items() if db)
PAIRED = tuple(kind for kind in KINDS if kind not in ("weak", "lead-off, at a rail"))


@dataclass(frozen=True, slots=True)
class Trial:
    """What was laid on one lead, whether it cost a measurement, and what the report names there, in order."""

    record: str
    lead: str
    kinds: tuple[str, ...]
    db: tuple[float, ...]
    costs: bool  # of two: each alone
    alarmed: bool
    named: tuple[str, ...]
    harms: tuple[tuple[str, ...], ...] = ()
    taken: tuple[str, ...] = ()  # measurements lost or moved


@dataclass(frozen=True, slots=True, eq=False)
class Laid:
    """One disturbance with its drawn size, ready to be laid on a lead."""

    kind: str
    db: float
    lay: Callable[[NDArray[np.float64]], NDArray[np.float64]]
    rails_mv: tuple[float, float] | None = None


def draw(
    rng: np.random.Generator, bank: NoiseBank, kind: str, x_mv: NDArray[np.float64], qrs_mv: float
) -> Laid:
    """A disturbance of a kind at a random size for a lead ``x_mv`` (n,)."""
    limits = KINDS[kind][1]
    if limits is not None:
        db = float(rng.uniform(*limits))
        if kind in ("bw", "ma", "em"):
            noise = bank.draw(rng, kind, n_samples=len(x_mv), fs_hz=FS_HZ)
        else:
            noise = draw_disturbance(rng, kind, n_samples=len(x_mv), fs_hz=FS_HZ, envelope="random")
        noise = noise * snr_gain(qrs_mv, noise, db, FS_HZ)
        return Laid(kind, db, lambda x: x + noise)
    seed = int(rng.integers(2**31))
    if kind.startswith("clipping"):
        middle = float(np.median(x_mv))
        low, high = (
            middle - float(qrs_mv * rng.uniform(0.1, 0.9)),
            middle + float(qrs_mv * rng.uniform(0.1, 0.9)),
        )
        return Laid(
            kind,
            np.nan,
            lambda x: apply_clipping(x, low_mv=low, high_mv=high),
            (low, high) if kind.endswith("rails known") else None,
        )
    if kind.startswith("lead-off"):
        mode, share = ("flat" if kind.endswith("flat") else "rail"), float(rng.uniform(0.1, 1.0))
        return Laid(
            kind,
            np.nan,
            lambda x: apply_lead_off(
                x, np.random.default_rng(seed), fs_hz=FS_HZ, mode=mode, share=share, rail_mv=RAIL_MV / 2
            ),
        )
    if kind.startswith("dropout"):
        share, held = float(rng.uniform(0.05, 0.7)), kind.endswith("held")
        return Laid(
            kind, np.nan, lambda x: apply_dropouts(x, np.random.default_rng(seed), share=share, held=held)
        )
    scale = float(rng.uniform(0.03, 0.14)) / qrs_mv
    return Laid(kind, np.nan, lambda x: x * min(scale, 1.0))


def checked(signal_mv: NDArray[np.float64], step_mv: float, rails: dict[int, tuple[float, float]]) -> Report:
    """The report of 12 leads (12, n) under ``resting``; ``rails`` by lead, the converter's own elsewhere."""
    rails_mv = np.tile([-RAIL_MV, RAIL_MV], (12, 1))
    for lead, (low, high) in rails.items():
        rails_mv[lead] = (low, high)
    info = RecordingInfo(
        name="trial",
        leads=LEADS_12,
        fs_hz=FS_HZ,
        n_samples=signal_mv.shape[1],
        rails_mv=rails_mv,
        step_mv=np.full(12, step_mv),
    )
    return check(Recording(signal_mv, FS_HZ, LEADS_12, info=info), profile="resting")


def taken_from(clean: Report, spoilt: Report, lead: int) -> tuple[str, ...]:
    """The measurements that were reliable on the clean lead and are lost, or moved beyond their tolerance."""
    a, b = clean.segments, spoilt.segments
    move = np.abs(b.value[lead] - a.value[lead])
    moved = np.isfinite(move) & (
        move > np.array([6.0, *TOLERANCE[1:]]) * (1 + 1e-9)
    )  # rate: 10 s, a beat is 6 per min
    gone = ~b.reliable[lead] | moved
    hit = a.reliable[lead] & gone
    return tuple(name for name, x in zip(("rate", "pr", "qrs", "qt", "st"), hit, strict=True) if x)


def run(
    folder: Path, records: list[str], plan: list[tuple[str, ...]], *, rounds: int, part: str, seed: int = 5
) -> list[Trial]:
    """Each round lays the next four entries of ``plan`` (one or two kinds each) on the next record."""
    rng = np.random.default_rng(seed)
    bank = NoiseBank(folder / "nstdb", part)
    order = [plan[k] for k in rng.permutation(len(plan))]
    out: list[Trial] = []
    turn = 0
    for name in records:
        carrier = real_carrier(folder / "ludb", name)
        base = carrier.signal_mv[:, :N]
        clean = checked(base, carrier.step_mv, {})
        for k in range(rounds):
            leads = LEAD_SETS[(turn // 4 + k) % 3]
            kinds = [order[(turn + i) % len(order)] for i in range(4)]
            turn += 4
            out += _round(rng, bank, name, base, carrier.step_mv, clean, leads, kinds)
    return out


def _round(rng, bank, name, base, step_mv, clean, leads, kinds) -> list[Trial]:  # type: ignore[no-untyped-def]
    laid: dict[int, list[Laid]] = {}
    for lead, names in zip(leads, kinds, strict=True):
        beats = clean.lead_beats[LEADS_12[lead]] / FS_HZ
        qrs_mv = qrs_peak_to_peak_mv(base[lead], beats, FS_HZ)
        if np.isfinite(qrs_mv) and qrs_mv > 0.1:
            # Additive noise first: what is cut off or lost is cut off or lost with it.
            laid[lead] = sorted(
                (draw(rng, bank, kind, base[lead], qrs_mv) for kind in names),
                key=lambda d: not np.isfinite(d.db),
            )
    together = _spoilt(base, step_mv, laid)
    alone = [together]
    if any(len(found) > 1 for found in laid.values()):
        alone = [_spoilt(base, step_mv, {lead: [found[i]] for lead, found in laid.items()}) for i in (0, 1)]
    out = []
    for lead, found in laid.items():
        summary = together.lead_summaries[lead]
        costs = all(taken_from(clean, report, lead) for report in alone)
        out.append(
            Trial(
                record=name,
                lead=LEADS_12[lead],
                kinds=tuple(d.kind for d in found),
                db=tuple(round(d.db, 1) for d in found),
                costs=costs,
                alarmed=bool(together.patient_first),
                named=tuple(f.kind for f in summary.faults),
                harms=tuple(f.harms for f in summary.faults),
                taken=taken_from(clean, together, lead),
            )
        )
    return out


def _spoilt(base, step_mv, laid) -> Report:  # type: ignore[no-untyped-def]
    x_mv, rails = np.array(base), {}
    for lead, found in laid.items():
        for d in found:
            x_mv[lead] = d.lay(x_mv[lead])
            if d.rails_mv:
                rails[lead] = d.rails_mv
        x_mv[lead] = apply_quantisation(x_mv[lead], step_mv=step_mv)
    return checked(x_mv, step_mv, rails)


def single_plan() -> list[tuple[str, ...]]:
    return [(kind,) for kind in KINDS]


def pair_plan() -> list[tuple[str, ...]]:
    """Every pair of kinds whose faults differ."""
    return [
        (a, b)
        for i, a in enumerate(PAIRED)
        for b in PAIRED[i + 1 :]
        if not set(KINDS[a][0]) & set(KINDS[b][0]) and (a in ADDITIVE or b in ADDITIVE)
    ]


def first_right(trials: list[Trial]) -> tuple[int, int]:
    """(trials of one disturbance that count, those where the right fault is named first)."""
    count = [t for t in trials if len(t.kinds) == 1 and t.costs and not t.alarmed]
    return len(count), sum(bool(t.named) and t.named[0] in KINDS[t.kinds[0]][0] for t in count)


def both_named(trials: list[Trial]) -> tuple[int, int]:
    """(trials of two disturbances that count, those where both are named)."""
    count = [t for t in trials if len(t.kinds) == 2 and t.costs and not t.alarmed]
    return len(count), sum(all(set(KINDS[k][0]) & set(t.named) for k in t.kinds) for t in count)


def confusion(trials: list[Trial]) -> dict[str, Counter[str]]:
    """By kind: how often each fault (or nothing) is named first."""
    table: dict[str, Counter[str]] = {}
    for t in trials:
        if len(t.kinds) == 1 and t.costs and not t.alarmed:
            table.setdefault(t.kinds[0], Counter())[t.named[0] if t.named else "nothing"] += 1
    return table


def harms_right(trials: list[Trial]) -> tuple[float, float]:
    """Of one disturbance named first: share of what it took that its harms name, and of its harms that it took.

    What was not reliable on the clean lead counts as not taken, though it may be laid to the fault.
    """
    took = hit = said = 0
    for t in trials:
        if len(t.kinds) == 1 and t.costs and not t.alarmed and t.named and t.named[0] in KINDS[t.kinds[0]][0]:
            took, said = took + len(t.taken), said + len(t.harms[0])
            hit += len(set(t.taken) & set(t.harms[0]))
    return hit / max(took, 1), hit / max(said, 1)


def burst_seconds(folder: Path, records: list[str], *, seed: int = 8) -> dict[str, list[float]]:
    """Seconds shown for a burst of 2 s of 3 dB on lead V2, where its fault is named."""
    rng = np.random.default_rng(seed)
    out: dict[str, list[float]] = {}
    for name in records:
        carrier = real_carrier(folder / "ludb", name)
        base = carrier.signal_mv[:, :N]
        for kind in ("muscle", "tremor", "mains", "motion"):
            x_mv, n = np.array(base), int(2 * FS_HZ)
            noise = draw_disturbance(rng, kind, n_samples=n, fs_hz=FS_HZ) * np.hanning(n) ** 0.25
            start = int(rng.uniform(1.0, 7.0) * FS_HZ)
            x_mv[7, start : start + n] += noise * np.ptp(base[7]) / np.sqrt(8) * 10 ** (-3 / 20)
            report = checked(apply_quantisation(x_mv, step_mv=carrier.step_mv), carrier.step_mv, {})
            shown = [f.when for f in report.lead_summaries[7].faults if f.kind in KINDS[kind][0]]
            out.setdefault(kind, []).append(sum(b - a for a, b in shown[0]) if shown else np.nan)
    return out


def records_of(folder: Path, *, develop: bool) -> list[str]:
    wanted = 1 if develop else 3
    return sorted((p.stem for p in (folder / "ludb").glob("*.hea") if int(p.stem) % 4 == wanted), key=int)


def test_the_right_fault_is_named_first(open_data: Path) -> None:
    names = records_of(open_data, develop=False)[::6]
    if not names or not (open_data / "nstdb" / "em.hea").is_file():
        pytest.skip("no hand-marked records or no recorded noise in the open data")
    singles = run(open_data, names, single_plan(), rounds=2, part="test")
    n, right = first_right(singles)
    assert n >= 40
    assert right / n >= 0.85  # the goal is 0.92, met on the whole set (README); this is a small sample
    pairs = run(open_data, names, pair_plan(), rounds=2, part="test")
    n, right = both_named(pairs)
    assert n >= 15
    assert right / n >= 0.65  # the goal is 0.80


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("folder", type=Path)
    parser.add_argument("--rounds", type=int, default=8)
    parser.add_argument("--every", type=int, default=1)
    parser.add_argument("--develop", action="store_true")
    parser.add_argument("--list", action="store_true")
    asked = parser.parse_args()
    names = records_of(asked.folder, develop=asked.develop)[:: asked.every]
    part = "calibrate" if asked.develop else "test"
    singles = run(asked.folder, names, single_plan(), rounds=asked.rounds, part=part)
    say = sys.stdout.write
    n, right = first_right(singles)
    say(
        f"one disturbance: {len(singles)} laid, {n} cost a measurement; named first {right} = {100 * right / n:.1f} %\n"
    )
    for kind, row in confusion(singles).items():
        hit = sum(v for k, v in row.items() if k in KINDS[kind][0])
        say(
            f"  {kind:26s} {sum(row.values()):4d}  {100 * hit / sum(row.values()):5.1f} %  {dict(row.most_common())}\n"
        )
    found, taken = harms_right(singles)
    say(f"harms: {100 * found:.1f} % of what it took, {100 * taken:.1f} % of them taken\n")
    for kind, shown in burst_seconds(asked.folder, names[::3]).items():
        x = np.array(shown)
        say(f"  burst of 2 s of {kind}: named on {np.isfinite(x).sum()} of {len(x)}, seconds shown, quartiles "
            f"{np.round(np.nanquantile(x, (0.25, 0.5, 0.75)), 1).tolist()}\n")  # fmt: skip
    pairs = run(asked.folder, names, pair_plan(), rounds=asked.rounds, part=part)
    n, right = both_named(pairs)
    say(
        f"two at once: {len(pairs)} laid, of {n} each alone costs one; both named {right} = {100 * right / n:.1f} %\n"
    )
    missed: Counter[str] = Counter()
    asked_of: Counter[str] = Counter()
    for t in pairs:
        if t.costs and not t.alarmed:
            asked_of.update(t.kinds)
            missed.update(k for k in t.kinds if not set(KINDS[k][0]) & set(t.named))
    for kind, count in asked_of.items():
        say(f"  {kind:26s} not named in {missed[kind]} of {count}\n")
    silent = [t for t in singles if not t.costs and not t.alarmed]
    say(
        f"of {len(silent)} that cost nothing, {sum(bool(t.named) for t in silent)} are named; alarmed {sum(t.alarmed for t in singles)} and {sum(t.alarmed for t in pairs)}\n"
    )
    if asked.list:
        for t in singles:
            if t.costs and not t.alarmed and not (t.named and t.named[0] in KINDS[t.kinds[0]][0]):
                say(f"{t}\n")
        for t in pairs:
            if t.costs and not t.alarmed and not all(set(KINDS[k][0]) & set(t.named) for k in t.kinds):
                say(f"{t}\n")


if __name__ == "__main__":
    main()
