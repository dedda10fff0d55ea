"""Lead names: one spelling for each lead, whatever the file calls it.

Names that are known are brought to their usual form (``avr``, ``MDC_ECG_LEAD_AVR`` and ``ECG aVR``
are all ``aVR``); names that are not known are kept as they stand, cleaned of control characters.
A modified lead stays what it is: ``MLII`` is no ``II``.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Sequence

from sigguard.recording import unique_names

LIMB_LEADS = ("I", "II", "III", "aVR", "aVL", "aVF")
CHEST_LEADS = ("V1", "V2", "V3", "V4", "V5", "V6")
STANDARD_LEADS = LIMB_LEADS + CHEST_LEADS
MAX_NAME = 40

# Lead numbers that the MDC vocabulary (codes 2:N) and SCP-ECG (5.6.3-9-N) share; DICOM CID 3001.
LEAD_OF_CODE: dict[int, str] = {
    **{1: "I", 2: "II", 61: "III", 62: "aVR", 63: "aVL", 64: "aVF", 65: "-aVR"},
    **{2 + k: f"V{k}" for k in range(1, 7)},
    **{9: "V7", 66: "V8", 67: "V9", 68: "V8R", 69: "V9R", 10: "V2R", 11: "V3R", 12: "V4R", 13: "V5R"},
    **{14: "V6R", 15: "V7R", 16: "X", 17: "Y", 18: "Z", 19: "CC5", 20: "CM5"},
    **{88: "VR", 89: "VL", 90: "VF", 91: "MCL"},
    **{91 + k: f"MCL{k}" for k in range(1, 7)},
    **{31: "dI", 32: "dII", 111: "dIII", 112: "daVR", 113: "daVL", 114: "daVF"},
    **{32 + k: f"dV{k}" for k in range(1, 7)},
    **{122: "CH5", 123: "CS5", 124: "CB5", 125: "CR5", 131: "ES", 132: "AS", 133: "AI"},
}

_PREFIX = re.compile(
    r"^(mdc[ _]ecg[ _]lead|mdc[ _]ecg[ _]elec[ _]potl|ecg|ekg|lead|ableitung|dérivation|derivación|channel)[ _.:]*"
)
_UNIT_TAIL = re.compile(r"\s*[\[(][^\[\]()]*[\])]\s*$")
_EXACT = {name: name for name in LEAD_OF_CODE.values() if name.startswith("d")}


def _aliases() -> dict[str, str]:
    known = {name.casefold(): name for name in LEAD_OF_CODE.values() if name[0] not in "-d"}
    known |= {f"{c}{k}".casefold(): f"{c}{k}" for c in ("CC", "CM") for k in range(1, 8)}
    known |= {"di": "I", "dii": "II", "diii": "III", "mli": "MLI", "mlii": "MLII", "mliii": "MLIII"}
    known |= {"ml1": "MLI", "ml2": "MLII", "ml3": "MLIII", "modifiedi": "MLI", "modifiedii": "MLII"}
    known |= {"vx": "X", "vy": "Y", "vz": "Z", "frankx": "X", "franky": "Y", "frankz": "Z"}
    known |= {"einthoveni": "I", "einthovenii": "II", "einthoveniii": "III"}
    known |= {f"v0{k}": f"V{k}" for k in range(1, 10)}
    known |= {f"rv{k}": f"V{k}R" for k in range(3, 10)}
    known |= {"v1r": "V1R"}
    return known


_KNOWN = _aliases()


def clean_name(text: str) -> str:
    """The text as a name: one line, single blanks, no control characters, at most 40 characters."""
    kept = "".join(c if c.isprintable() else " " for c in unicodedata.normalize("NFKC", text))
    kept = kept.replace("\N{MINUS SIGN}", "-")
    return " ".join(kept.split())[:MAX_NAME].strip()


def normalise_lead(name: str) -> str:
    """The usual name of a lead where it can be told from this name alone, else the name, cleaned."""
    cleaned = clean_name(name)
    tail = re.sub(r"^MDC_ECG_(LEAD|ELEC_POTL)_", "", cleaned)
    if tail in _EXACT:  # derived leads differ from DI, DII only by case
        return tail
    key = _UNIT_TAIL.sub("", cleaned).casefold()
    while (shorter := _PREFIX.sub("", key, count=1)) != key and shorter:
        key = shorter
    negative = key.startswith("-") or (key.endswith("neg") and len(key) > 3)
    key = re.sub(r"[ _.:\-]", "", key.removesuffix("neg") if negative else key)
    if key not in _KNOWN:
        bare = _UNIT_TAIL.sub("", cleaned)
        return bare or cleaned
    return f"-{_KNOWN[key]}" if negative else _KNOWN[key]


def normalise_leads(names: Sequence[str]) -> tuple[str, ...]:
    """The usual names of leads recorded together, made unique (a second ``II`` is ``II#2``).

    ``D1 D2 D3`` or ``L1 L2 L3`` are the limb leads only where all three stand together, and
    ``C1`` to ``C6`` the chest leads only beside other leads that show it: the same names mean
    other sites elsewhere.
    """
    out = [normalise_lead(name) for name in names]
    upper = [name.upper() for name in out]
    for letter in "DL":
        trio = {f"{letter}1": "I", f"{letter}2": "II", f"{letter}3": "III"}
        if set(trio) <= set(upper):
            out = [trio.get(u, name) for u, name in zip(upper, out, strict=True)]
    chest = [u for u in upper if re.fullmatch(r"C[1-6]", u)]
    if len(chest) >= 3 or (chest and set(out) & set(LIMB_LEADS)):
        out = [f"V{u[1]}" if u in chest else name for u, name in zip(upper, out, strict=True)]
    return unique_names(out)
