"""Any other UCUM unit -> one our table of usual units knows, through the library. Slow to load, so only asked when needed.

What the library cannot know (molar masses, the area in a filtration rate) stays with the table: only a change of scale
within one dimension is read here.
"""

from __future__ import annotations

import re
from functools import cache, lru_cache
from typing import Any

from cds.clinical.units import UNITS

_CODE = re.compile(r"[A-Za-z0-9\[\]_./*+-]{1,24}")
_NOT_BY_DIMENSION = frozenset({"egfr", "urine-acr", "hba1c"})  # their units mean more than their dimension says


@lru_cache(maxsize=1024)
def scale_to_known(code: str, analyte: str) -> tuple[str, float] | None:
    """A unit the analyte is known in and the factor to it ("mmol/dL" of potassium: "mmol/L", 10); None if there is none."""
    if analyte in _NOT_BY_DIMENSION or _CODE.fullmatch(code) is None:
        return None
    sent = _parsed(code)
    if sent is None:
        return None
    for known in UNITS.get(analyte, {}):
        target = _parsed(known)
        if target is not None and sent.dimensionality == target.dimensionality:
            return known, float(sent.to(target.units).magnitude / target.magnitude)
    return None


@lru_cache(maxsize=1024)
def _parsed(code: str) -> Any:
    """The unit as a pint quantity, or None where it is no UCUM or has no plain scale (logarithms, temperatures)."""
    from pint.errors import PintError
    from ucumvert import InvalidUcumError

    try:
        return 1.0 * _registry().from_ucum(code)
    except (InvalidUcumError, PintError, ValueError, TypeError, ArithmeticError, RecursionError, NotImplementedError):
        return None


@cache
def _registry() -> Any:
    from ucumvert import PintUcumRegistry

    return PintUcumRegistry()
