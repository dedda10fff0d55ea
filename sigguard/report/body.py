"""The body with its electrodes: which of them to see to, as a picture and in words.

Our own schematic, seen from the front: the patient's right is on the left. An electrode that stands out has a ring
and a cross, one that may be meant a broken ring; its disc grows with its share. So it reads without colour. What is
not in the lead set is a dotted circle.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from html import escape
from math import isfinite, sqrt

from sigguard.electrode_algebra import algebra_of
from sigguard.findings import CommonNoise, ElectrodeNoise
from sigguard.report.words import FAULT_WORDS, clean, listing

# where each electrode sits in the picture, and on which side of its mark the name stands, so that neighbours stay apart
PLACES: dict[str, tuple[float, float]] = {
    "RA": (38, 268),
    "LA": (382, 268),
    "RL": (164, 392),
    "LL": (256, 392),
    "C1": (190, 170),
    "C2": (230, 170),
    "C3": (241, 206),
    "C4": (252, 242),
    "C5": (280, 252),
    "C6": (306, 242),
}
NAME_SIDE = {"C1": "left", "C2": "right", "C3": "right", "C4": "left", "C6": "right"}  # the others: below
ANYWHERE_ON_CHEST = (210.0, 218.0)  # the one chest electrode of a five-wire set
PLACE_WORDS = {
    "RA": "right arm",
    "LA": "left arm",
    "RL": "right leg",
    "LL": "left leg",
    "C": "chest",
    **{f"C{k}": f"chest {k}" for k in range(1, 7)},
}
OUTLINE = (
    "M188 76 Q186 100 150 106 Q104 112 94 142 L62 216 L28 270 Q26 286 38 288 Q48 288 54 276 L92 226 L120 178 "
    "L124 256 Q120 296 118 326 L134 404 L190 404 L205 334 L215 334 L230 404 L286 404 L302 326 Q300 296 296 256 "
    "L300 178 L328 226 L366 276 Q372 288 382 288 Q394 286 392 270 L358 216 L326 142 Q316 112 270 106 Q234 100 232 76"
)
SURE, PERHAPS = 0.5, 0.1
LEAST_R, GROWTH = 7.0, 9.0


@dataclass(frozen=True, slots=True)
class ElectrodeRow:
    """One line of the list beside the picture."""

    name: str
    place: str
    state: str  # "stands out", "perhaps", "quiet"
    noise: str
    share: str
    kinds: str


def electrode_rows(electrodes: Sequence[ElectrodeNoise]) -> list[ElectrodeRow]:
    """The electrodes in words, in the order given (the worst first)."""
    return [
        ElectrodeRow(
            e.electrode,
            PLACE_WORDS.get(e.electrode, "chest" if e.electrode.startswith("C") else ""),
            _state_words(e),
            _microvolts(e.noise_uv),
            _percent(e.share),
            listing(f"{FAULT_WORDS[k.kind]} {_microvolts(k.noise_uv)}" for k in e.kinds),
        )
        for e in electrodes
    ]


def _microvolts(x: float) -> str:
    return f"{x:.0f}\N{NO-BREAK SPACE}µV" if isfinite(x) else "—"


def _percent(share: float) -> str:
    if not isfinite(share):
        return "—"
    return "under 1 %" if 0 < share < 0.005 else f"{100 * share:.0f} %"


def common_words(common: Sequence[CommonNoise]) -> list[str]:
    """A sentence for each kind of disturbance that moves several electrodes together."""
    why = {
        "mains": "it comes through the cable or the right-leg electrode, not from one contact",
        "wander": "breathing or a movement of the body, not one contact",
    }
    return [
        f"{FAULT_WORDS[c.kind].capitalize()} moves several electrodes together, {_microvolts(c.noise_uv)} rms: "
        f"{why.get(c.kind, 'the patient, not one contact')}."
        for c in common
    ]


def body_svg(
    leads: Sequence[str], electrodes: Sequence[ElectrodeNoise] = (), common: Sequence[CommonNoise] = ()
) -> str:
    """The picture as inline SVG, classes only (colours stand in the style sheet).

    ``leads`` say which electrodes there are; the right leg shows in no lead and is always dotted. Electrodes of
    unusual places (C7, C3R) are not drawn; the list has them.
    """
    present = algebra_of(tuple(leads)).electrodes
    found = {e.electrode: e for e in electrodes if isfinite(e.share) and isfinite(e.noise_uv)}
    places = dict(PLACES)
    if "C" in present:
        places = {k: at for k, at in places.items() if len(k) != 2 or k[0] != "C"}
        places["C"] = ANYWHERE_ON_CHEST
    # small marks last, so that a large one does not hide them
    order = sorted(places, key=lambda name: -found[name].share if name in found else 0.0)
    marks = "".join(_mark(name, *places[name], found.get(name), name in present) for name in order)
    return (
        '<svg class="body" viewBox="0 0 420 420" width="420" height="420" role="img" '
        'aria-labelledby="body-title body-desc">'
        '<title id="body-title">Where the disturbance comes from</title>'
        f'<desc id="body-desc">{escape(clean(_described(electrodes, common)))}</desc>'
        f'<path class="figure" d="{OUTLINE}"/><circle class="figure" cx="210" cy="46" r="34"/>'
        '<text class="side" x="6" y="20">patient’s right</text>'
        '<text class="side" x="414" y="20" text-anchor="end">patient’s left</text>'
        f"{marks}</svg>"
    )


def _state_words(e: ElectrodeNoise) -> str:
    confidence = e.confidence or 0.0
    return "stands out" if confidence >= SURE else "perhaps" if confidence >= PERHAPS else "quiet"


def _described(electrodes: Sequence[ElectrodeNoise], common: Sequence[CommonNoise]) -> str:
    named = [r for r in electrode_rows(electrodes) if r.state != "quiet"]
    words = [f"{r.name} ({r.place}) {r.state}, {r.share} of the disturbance" for r in named]
    text = f"{'; '.join(words)}." if words else "No electrode stands out."
    return " ".join([text, *common_words(common)])


def _mark(name: str, x: float, y: float, e: ElectrodeNoise | None, present: bool) -> str:
    place = PLACE_WORDS[name]
    if not present:
        why = "shows in no lead" if name == "RL" else "not in this recording"
        inside = f'<circle class="e-absent" cx="{x:g}" cy="{y:g}" r="{LEAST_R:g}"/>'
        return _group(f"{name}, {place}: {why}", inside + _label(name, name, x, y, LEAST_R, soft=True))
    if e is None:
        inside = f'<circle class="e-quiet" cx="{x:g}" cy="{y:g}" r="{LEAST_R:g}"/>'
        return _group(f"{name}, {place}: does not stand out", inside + _label(name, name, x, y, LEAST_R))
    state = _state_words(e)
    r = LEAST_R + (GROWTH * sqrt(min(max(e.share, 0.0), 1.0)) if state != "quiet" else 0.0)
    kind = {"stands out": "e-loud", "perhaps": "e-maybe", "quiet": "e-quiet"}[state]
    inside = f'<circle class="{kind}" cx="{x:g}" cy="{y:g}" r="{r:.1f}"/>'
    if state == "stands out":
        d = 0.55 * r
        inside += (
            f'<circle class="e-ring" cx="{x:g}" cy="{y:g}" r="{r + 4:.1f}"/>'
            f'<path class="e-cross" d="M{x - d:.1f} {y - d:.1f}l{2 * d:.1f} {2 * d:.1f}m0 {-2 * d:.1f}l{-2 * d:.1f} {2 * d:.1f}"/>'
        )
        r += 4
    row = electrode_rows([e])[0]
    text = f"{name}, {place}: {state}, {row.share} of the disturbance, {row.noise}"
    label = f"{name} {row.share}" if state != "quiet" else name
    return _group(text, inside + _label(name, label, x, y, r))


def _group(title: str, inside: str) -> str:
    return f"<g><title>{escape(clean(title))}</title>{inside}</g>"


def _label(name: str, text: str, x: float, y: float, r: float, *, soft: bool = False) -> str:
    """The name beside or below its mark."""
    side = NAME_SIDE.get(name, "below")
    at, down, anchor = {
        "left": (x - r - 4, y + 5, "end"),
        "right": (x + r + 4, y + 5, "start"),
        "below": (x, y + r + 14, "middle"),
    }[side]
    kind = "e-name soft" if soft else "e-name"
    return f'<text class="{kind}" x="{at:.1f}" y="{down:.1f}" text-anchor="{anchor}">{escape(clean(text))}</text>'
