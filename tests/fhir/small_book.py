"""A code book with a handful of codes, and a context to read with: what the tests of single readers need."""

from __future__ import annotations

from datetime import UTC, tzinfo
from typing import Any

from cds.fhir.code_matches import AnalyteMatch
from cds.fhir.codes import CodeBook, CodeTables
from cds.fhir.intake import Context, Intake

LOINC = "http://loinc.org"
UCUM = "http://unitsofmeasure.org"

# As in our table of LOINC codes: code, analyte, use, method, usual unit.
_ANALYTES = (
    ("2823-3", "potassium", "accept", None, "mmol/L"),
    ("22760-3", "potassium", "convert", None, "mg/dL"),
    ("51618-7", "potassium", "caution", None, "mmol/L"),
    ("29349-8", "potassium", "exclude", None, "mmol/L"),
    ("2951-2", "sodium", "accept", None, "mmol/L"),
    ("2160-0", "creatinine", "accept", None, "mg/dL"),
    ("14682-9", "creatinine", "accept", None, "umol/L"),
    ("98979-8", "egfr", "prefer", "ckd-epi-2021", "mL/min/{1.73_m2}"),
    ("33914-3", "egfr", "legacy", "mdrd", "mL/min/{1.73_m2}"),
    ("10230-1", "lvef", "accept", None, "%"),
    ("88020-3", "nyha-class", "accept", None, None),
    ("93124-6", "nyha-class", "container", None, None),
    ("85354-9", "blood-pressure", "container", None, None),
    ("8480-6", "systolic-bp", "accept", None, "mm[Hg]"),
    ("8462-4", "diastolic-bp", "accept", None, "mm[Hg]"),
    ("8867-4", "heart-rate", "accept", None, "/min"),
    ("29463-7", "body-weight", "accept", None, "kg"),
    ("2502-3", "tsat", "accept", None, "%"),
    ("718-7", "haemoglobin", "accept", None, "g/dL"),
    ("33762-6", "nt-probnp", "accept", None, "pg/mL"),
    ("4548-4", "hba1c", "accept", None, "%"),
    ("6301-6", "inr", "accept", None, None),
)


def small_book() -> CodeBook:
    """Build the book; the site code "K" of the system "urn:example:lab" means potassium."""
    rows = {
        code: AnalyteMatch(analyte=analyte, use=use, matched_by="loinc", method=method, unit=unit)
        for code, analyte, use, method, unit in _ANALYTES
    }
    return CodeBook(CodeTables(analytes=rows)).with_site_codes(analytes={("urn:example:lab", "K"): "potassium"})


def small_context(zone: tzinfo = UTC) -> Context:
    """Build a context with the small book and nothing taken in yet."""
    return Context(codes=small_book(), zone=zone, intake=Intake())


def concept(*codes: str, system: str = LOINC, text: str | None = None) -> dict[str, Any]:
    """A CodeableConcept with these codes of one system."""
    coded = {"coding": [{"system": system, "code": code} for code in codes]}
    return coded if text is None else {**coded, "text": text}


def quantity(value: Any, unit: str | None = None, **more: Any) -> dict[str, Any]:
    """A Quantity in a UCUM unit, or without any unit."""
    coded = {} if unit is None else {"system": UCUM, "code": unit, "unit": unit}
    return {"value": value, **coded, **more}


def observation(loinc: str, value: Any = None, /, **more: Any) -> dict[str, Any]:
    """A final Observation of 1 June 2025; `value` is a Quantity, other forms of value[x] come by name."""
    resource = {
        "resourceType": "Observation",
        "id": "o1",
        "status": "final",
        "code": concept(loinc),
        "subject": {"reference": "Patient/p1"},
        "effectiveDateTime": "2025-06-01",
        **({} if value is None else {"valueQuantity": value}),
        **more,
    }
    return {key: part for key, part in resource.items() if part is not None}
