"""How senders write units -> UCUM codes. What a unit means for an analyte belongs to `cds.clinical.units`.

Understood are the UCUM codes of the analytes we use, in either spelling of the litre and with any annotation, and the
usual misspellings of ruling 42 in upper or lower case. Other UCUM codes go through `ucum`; a unit that must be guessed is
an issue.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

from cds.clinical.units import UNITS

UCUM_SYSTEMS = frozenset({"http://unitsofmeasure.org", "urn:oid:2.16.840.1.113883.6.8"})
UCUM_CODES = frozenset(unit for row in UNITS.values() for unit in row)

_INDEXED = "mL/min/{1.73_m2}"

# Keys in lower case; the micro sign and the Greek mu are read as "u" before.
MISSPELLINGS: Mapping[str, str] = MappingProxyType(
    {
        "meq/l": "meq/L",
        "mmol/l": "mmol/L",
        "umol/l": "umol/L",
        "mg/dl": "mg/dL",
        "gm/dl": "g/dL",
        "g/dl": "g/dL",
        "ng/ml": "ng/mL",
        "pg/ml": "pg/mL",
        "bpm": "/min",
        "beats/min": "/min",
        "mm hg": "mm[Hg]",
        "mmhg": "mm[Hg]",
        "lb": "[lb_av]",
        "lbs": "[lb_av]",
        "kgs": "kg",
        "percent": "%",
        "ml/min/1.73m2": _INDEXED,
        "ml/min/1.73 m2": _INDEXED,
        "ml/min/1.73m^2": _INDEXED,
        "ml/min/1.73.m2": _INDEXED,
    }
)

# UCUM proper: both letters for the litre, both names of the international unit, "1/min", and the area as an annotation.
UCUM_SPELLINGS: Mapping[str, str] = MappingProxyType(
    {code.replace("L", "l"): code for code in UCUM_CODES if "L" in code}
    | {code.replace("[IU]", "[iU]"): code for code in UCUM_CODES if "[IU]" in code}
    | {"1/min": "/min"}
    | {
        f"{volume}/{time}/{area}": f"mL/{time}/{{1.73_m2}}"
        for volume in ("mL", "ml")
        for time in ("min", "s")
        for area in ("{1.73_m2}", "{1.73m2}", "{1.73.m2}", "{1.73_m^2}")
    }
)

_ANNOTATION = re.compile(r"\{[^{}]*\}")
_LONGEST = 64


@dataclass(frozen=True, slots=True)
class UnitReading:
    """What a Quantity says about its unit, as UCUM codes. At most one of `code` and `problem` is set.

    Neither: the Quantity names no unit at all. `by_text` is what the human-readable `unit` says where it differs from
    `code`; only the analyte can tell whether the two agree. `path` is relative to the Quantity.
    """

    code: str | None = None
    by_text: str | None = None
    problem: str | None = None
    path: str = "code"


def understand_unit(quantity: Mapping[str, Any]) -> UnitReading:
    """Read `system`, `code` and `unit` of a Quantity: the code decides, the text stands in where there is none."""
    system, code, text = (quantity.get(key) for key in ("system", "code", "unit"))
    for path, part in (("system", system), ("code", code), ("unit", text)):
        if part is not None and not isinstance(part, str):
            return UnitReading(problem="is not a text", path=path)
    if system is not None and system not in UCUM_SYSTEMS:
        return UnitReading(problem="is not UCUM, the only system of units read", path="system")
    by_text = None if _is_blank(text) else understand_text(text)
    if _is_blank(code):
        if _is_blank(text):
            return UnitReading()
        if by_text is None:
            return UnitReading(problem="is a unit that is not understood", path="unit")
        return UnitReading(code=by_text, path="unit")
    by_code = understand_text(code)
    if by_code is None:
        return UnitReading(problem="is a unit that is not understood")
    return UnitReading(code=by_code, by_text=by_text if by_text != by_code else None)


def understand_text(text: object) -> str | None:
    """The UCUM code a text means, or None. Only the usual misspellings are read in either case."""
    if not isinstance(text, str) or len(text) > _LONGEST:
        return None
    plain = text.strip().replace("\N{MICRO SIGN}", "u").replace("\N{GREEK SMALL LETTER MU}", "u")
    known = _known_code(plain) or MISSPELLINGS.get(" ".join(plain.lower().split()))
    if known is not None or "{" not in plain or "1.73" in plain:
        return known
    bare = _ANNOTATION.sub("", plain)  # UCUM 2.1 §12: annotations do not change the meaning
    return _known_code(bare) if bare else "1"


def _known_code(text: str) -> str | None:
    return text if text in UCUM_CODES else UCUM_SPELLINGS.get(text)


def _is_blank(text: object) -> bool:
    return text is None or (isinstance(text, str) and not text.strip())
