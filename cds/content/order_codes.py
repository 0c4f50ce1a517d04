"""The codes that draft orders carry: LOINC for tests (tests.toml), RxNorm ingredients for drugs (the code tables)."""

from __future__ import annotations

import csv
from collections.abc import Mapping
from importlib.resources import files
from typing import Any

from cds.errors import ContentError
from cds.fhir.drafts import OrderCode, OrderCodes

_RXNORM = "http://www.nlm.nih.gov/research/umls/rxnorm"
_KINDS = ("combination", "ingredient", "precise")


def order_codes(tests: Mapping[str, Any]) -> OrderCodes:
    """Read the table of test codes, and look up each drug's ingredient code. Raises ContentError for an incomplete row."""
    return OrderCodes(tests={analyte: _test(analyte, row) for analyte, row in tests.items()}, drugs=_drugs())


def _test(analyte: str, row: Any) -> OrderCode:
    try:
        return OrderCode(system=row["system"], code=row["code"], display=row["display"])
    except (KeyError, TypeError):
        raise ContentError("tests.toml", analyte, "lacks system, code or display", "Add it.") from None


def _drugs() -> dict[str, OrderCode]:
    """One code for each drug: the ingredient, else the salt; for a pair sold as one drug the code of the pair."""
    found: dict[str, tuple[int, str]] = {}
    text = files("cds.content").joinpath("codes/rxnorm_ingredients.csv").read_text(encoding="utf-8")
    for row in csv.DictReader(text.splitlines()):
        drug, kind = row["drugs"], row["kind"]
        if ";" in drug or kind not in _KINDS or row["checked"] != "read" or row["systemic"] == "no":
            continue
        rank = 0 if (kind == "combination") == ("/" in drug) and kind != "precise" else 1
        if drug not in found or rank < found[drug][0]:
            found[drug] = rank, row["rxcui"]
    return {drug: OrderCode(system=_RXNORM, code=code, display=drug) for drug, (_, code) in found.items()}
