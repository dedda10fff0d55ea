"""The body picture: shape and words beside colour, escaped, accessible."""

from __future__ import annotations

from defusedxml import ElementTree

from sigguard.electrode_algebra import LEADS_12
from sigguard.findings import CommonNoise, ElectrodeNoise, KindNoise
from sigguard.report.body import body_svg, common_words, electrode_rows

LOUD = ElectrodeNoise("C3", 132.0, 0.8, 0.97, (KindNoise("motion", 132.0, 0.9, 0.99),))
MAYBE = ElectrodeNoise("RA", 50.0, 0.18, 0.3)
QUIET = ElectrodeNoise("LL", 4.0, 0.002, 0.01)
SVG = "{http://www.w3.org/2000/svg}"


def drawn(leads, electrodes=(), common=()) -> tuple[ElementTree, dict[str, list[str]]]:
    """The picture, and for each electrode the classes of its marks."""
    text = body_svg(leads, electrodes, common).replace("<svg ", '<svg xmlns="http://www.w3.org/2000/svg" ', 1)
    root = ElementTree.fromstring(text)
    marks = {}
    for group in root.iter(f"{SVG}g"):
        name = group.find(f"{SVG}title").text.split(",")[0]
        marks[name] = [part.get("class") for part in group if part.get("class", "").startswith("e-")]
    return root, marks


def test_state_shows_in_shape_and_words():
    root, marks = drawn(LEADS_12, (LOUD, MAYBE, QUIET))
    assert {"e-loud", "e-ring", "e-cross"} <= set(marks["C3"])
    assert "e-maybe" in marks["RA"] and "e-quiet" in marks["LL"] and "e-absent" in marks["RL"]
    assert len(marks) == 10
    described = root.find(f"{SVG}desc").text
    assert "C3 (chest 3) stands out, 80 %" in described and "RA (right arm) perhaps" in described
    assert root.get("role") == "img" and root.get("aria-labelledby") == "body-title body-desc"


def test_size_grows_with_the_share():
    def radius(share: float) -> float:
        root, _ = drawn(LEADS_12, (ElectrodeNoise("C3", 10.0, share, 0.9),))
        return next(float(c.get("r")) for c in root.iter(f"{SVG}circle") if c.get("class") == "e-loud")

    assert radius(0.1) < radius(0.4) < radius(0.9)


def test_electrodes_that_are_not_there_are_dotted():
    _, marks = drawn(("I", "II", "III", "V2"))
    assert all("e-quiet" in marks[name] for name in ("RA", "LA", "LL", "C2"))
    assert all("e-absent" in marks[name] for name in ("RL", "C1", "C3", "C4", "C5", "C6"))
    _, marks = drawn(("I", "II", "V"))
    assert set(marks) == {"RA", "LA", "RL", "LL", "C"}
    _, marks = drawn(("MLII",))
    assert "e-absent" in marks["C1"]


def test_text_is_escaped_and_nothing_is_loaded():
    bad = ElectrodeNoise("<b>&", 5.0, 0.5, 0.9)
    text = body_svg((*LEADS_12, "<script>"), (bad,))
    assert "<b>" not in text and "<script" not in text and "href" not in text and "style=" not in text


def test_rows_and_common_words():
    rows = electrode_rows((LOUD, MAYBE, QUIET))
    assert [r.state for r in rows] == ["stands out", "perhaps", "quiet"]
    assert rows[0].kinds.startswith("movement 132") and rows[2].share == "under 1 %"
    (text,) = common_words((CommonNoise("mains", 28.0, 0.5),))
    assert "several electrodes" in text and "28\N{NO-BREAK SPACE}µV" in text and "right-leg" in text
    assert "No electrode stands out." in body_svg(LEADS_12)
