"""Proposals -> draft FHIR resources for a human to check and sign. A draft orders nothing."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import date
from typing import Any

from cds.clinical.findings import DrugProposal, TestProposal
from cds.clinical.readings import show
from cds.errors import ContentError
from cds.fhir.validate import refusal

_UCUM = "http://unitsofmeasure.org"
_UNSIGNED = "Proposal: it orders nothing until a prescriber has checked and signed it."
_TIMES = {
    1.0: "once daily",
    2.0: "twice daily",
    3.0: "three times daily",
    4.0: "four times daily",
    0.5: "every other day",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderCode:
    """The coding a draft carries for a drug or test."""

    system: str
    code: str
    display: str


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderCodes:
    """Codings by analyte and by drug. What has none is named by text alone."""

    tests: Mapping[str, OrderCode]
    drugs: Mapping[str, OrderCode]


def draft_drug_order(
    proposal: DrugProposal, codes: OrderCodes, *, patient: str, authored_on: date, reasons: Iterable[str] = ()
) -> dict[str, Any]:
    """Build a MedicationRequest, status draft, intent proposal. Without a dose the prescriber must choose it.

    `reasons` are "Condition/id" references. Raises ContentError if what our tables say makes no valid R4 resource.
    """
    draft: dict[str, Any] = {
        "resourceType": "MedicationRequest",
        "status": "draft",
        "intent": "proposal",
        "medicationCodeableConcept": _concept(codes.drugs.get(proposal.drug), proposal.drug),
        "subject": {"reference": patient},
        "authoredOn": authored_on.isoformat(),
        **_replaced(proposal.replaces),
        **_reasons(reasons),
        "note": [{"text": _note(proposal)}],
        "dosageInstruction": [_dosage(proposal)],
    }
    return _checked(draft)


def draft_test_order(
    proposal: TestProposal,
    test: str,
    name: str,
    codes: OrderCodes,
    *,
    patient: str,
    authored_on: date,
    reasons: Iterable[str] = (),
) -> dict[str, Any]:
    """Build a ServiceRequest for one test, status draft, intent proposal, wanted between the proposal's days."""
    start = (
        proposal.not_before if proposal.not_before is not None and proposal.not_before > authored_on else authored_on
    )
    draft: dict[str, Any] = {
        "resourceType": "ServiceRequest",
        "status": "draft",
        "intent": "proposal",
        "code": _concept(codes.tests.get(test), name),
        "subject": {"reference": patient},
        "occurrencePeriod": {"start": start.isoformat(), "end": max(start, proposal.due_by).isoformat()},
        "authoredOn": authored_on.isoformat(),
        **_reasons(reasons),
        "note": [{"text": _UNSIGNED}],
    }
    return _checked(draft)


def dose_words(proposal: DrugProposal) -> str:
    """The dose as a prescriber writes it: "25 mg once daily"."""
    if proposal.dose_mg is None:
        return "dose to be chosen by the prescriber"
    amount = proposal.dose_name or f"{show(proposal.dose_mg)} mg"
    times = proposal.times_per_day or 1.0
    return f"{amount} {_TIMES.get(times, f'{show(times)} times a day')}"


def _dosage(proposal: DrugProposal) -> dict[str, Any]:
    dosage: dict[str, Any] = {"text": dose_words(proposal)}
    if proposal.dose_mg is None:
        return dosage
    times = proposal.times_per_day or 1.0
    often = {"frequency": int(times), "period": 1} if times >= 1 else {"frequency": 1, "period": round(1 / times)}
    dosage["timing"] = {"repeat": {**often, "periodUnit": "d"}}
    quantity = {"value": proposal.dose_mg, "unit": "mg", "system": _UCUM, "code": "mg"}
    dosage["doseAndRate"] = [{"doseQuantity": quantity}]
    return dosage


def _concept(code: OrderCode | None, text: str) -> dict[str, Any]:
    if code is None:
        return {"text": text}
    return {"coding": [{"system": code.system, "code": code.code, "display": code.display}], "text": text}


def _note(proposal: DrugProposal) -> str:
    note = _UNSIGNED
    if proposal.alternatives:
        note += f" Sign only one of the alternatives; otherwise: {' or '.join(proposal.alternatives)}."
    return f"{note} {proposal.note[0].upper()}{proposal.note[1:]}." if proposal.note else note


def _replaced(source: str | None) -> dict[str, Any]:
    if source is None or not source.startswith("MedicationRequest/"):
        return {}
    return {"priorPrescription": {"reference": source}}


def _reasons(reasons: Iterable[str]) -> dict[str, Any]:
    references = [{"reference": reason} for reason in dict.fromkeys(reasons) if reason.startswith("Condition/")]
    return {"reasonReference": references} if references else {}


def _checked(draft: dict[str, Any]) -> dict[str, Any]:
    issue = refusal(draft)
    if issue is not None:
        raise ContentError(
            "drafts", draft["resourceType"], f"{issue.path} {issue.problem}", "Correct the tables it is made from."
        )
    return draft
