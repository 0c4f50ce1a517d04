"""Drafts are proposals in FHIR R4: valid, unsigned, for the right patient, and in the doses of the dose table."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import UTC
from functools import cache
from typing import Any

import orjson
import pytest
from builders import (
    Resource,
    bundle,
    creatinine,
    heart_rate,
    lvef,
    nyha,
    order,
    patient,
    potassium,
    pressure,
    problem,
    sodium,
)
from fhir.resources.R4B import get_fhir_model_class
from hypothesis import given
from random_patients import AS_OF, day, patients, written_patients

from cds.assessment import assess
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

CONTENT = load_content()
DOSES = CONTENT.tables.doses
Drafted = tuple[str, dict[str, Any], dict[str, Any]]  # the patient, the card (with the action it asks for), the draft


def drafts_in(answer: dict[str, Any]) -> list[Drafted]:
    found: list[Drafted] = []
    for one in orjson.loads(orjson.dumps(answer))["assessments"]:
        actions = {(finding["rule"], finding["about"]): finding["action"] for finding in one["findings"]}
        for card in one["cards"]:
            asked = {**card, "action": actions[card["rule"], card["about"]]}
            found += [(one["patient"], asked, draft) for draft in card["drafts"]]
    return found


def assessed_drafts(resources: list[Resource]) -> list[Drafted]:
    return drafts_in(assess(bundle(*resources), CONTENT, as_of=AS_OF, trace=True))


@cache
def all_drafts() -> tuple[Drafted, ...]:
    found: list[Drafted] = []
    for data, when in written_patients().values():
        found += drafts_in(assess(data, CONTENT, as_of=parse_as_of(when, UTC), trace=True))
    return tuple(found)


def drug_drafts(drafts: Iterable[Drafted], *, rules: str, action: str) -> list[tuple[str, dict[str, Any]]]:
    """Rule and draft of the drug orders that the rules of this name propose for this action."""
    return [
        (card["rule"], draft)
        for _, card, draft in drafts
        if draft["resourceType"] == "MedicationRequest" and card["rule"].startswith(rules) and card["action"] == action
    ]


def dose_of(draft: dict[str, Any]) -> tuple[float, float] | None:
    """Milligrams and times a day as a machine reads them; None where the prescriber must choose."""
    (line,) = draft["dosageInstruction"]
    if "doseAndRate" not in line:
        return None
    (amount,) = line["doseAndRate"]
    quantity, repeat = amount["doseQuantity"], line["timing"]["repeat"]
    assert (quantity["unit"], quantity["system"], quantity["code"]) == ("mg", "http://unitsofmeasure.org", "mg")
    assert repeat["periodUnit"] == "d"
    return quantity["value"], repeat["frequency"] / repeat["period"]


def drug_of(draft: dict[str, Any]) -> str:
    return str(draft["medicationCodeableConcept"]["text"])


def check_draft(who: str, draft: dict[str, Any]) -> None:
    get_fhir_model_class(draft["resourceType"]).model_validate(draft)
    assert (draft["status"], draft["intent"]) == ("draft", "proposal")
    assert draft["subject"] == {"reference": who}
    assert "id" not in draft  # it becomes a resource only when someone keeps it
    assert "signed" in draft["note"][0]["text"]
    for reason in draft.get("reasonReference", ()):
        assert reason["reference"].startswith("Condition/")


def test_the_written_patients_lead_to_drafts_of_drugs_and_of_tests():
    assert {draft["resourceType"] for _, _, draft in all_drafts()} == {"MedicationRequest", "ServiceRequest"}


def test_every_draft_of_a_written_patient_is_a_valid_unsigned_proposal_for_that_patient():
    for who, _, draft in all_drafts():
        check_draft(who, draft)


@given(resources=patients())
def test_every_draft_of_a_random_patient_is_a_valid_unsigned_proposal_for_that_patient(resources):
    for who, _, draft in assessed_drafts(resources):
        check_draft(who, draft)


def check_start_doses(drafts: Iterable[Drafted]) -> int:
    drafted = drug_drafts(drafts, rules="start-", action="start")
    for rule, draft in drafted:
        starts = {(row.start_dose_mg, row.start_times_per_day) for row in DOSES if row.drug == drug_of(draft)}
        assert starts, f"{drug_of(draft)} is in no row of the dose table"
        assert dose_of(draft) in starts, f"{rule}: {drug_of(draft)} {dose_of(draft)}"
    return len(drafted)


def test_a_start_proposed_to_a_written_patient_has_a_start_dose_of_the_dose_table():
    assert check_start_doses(all_drafts()) > 20


@given(resources=patients())
def test_a_start_proposed_to_a_random_patient_has_a_start_dose_of_the_dose_table(resources):
    check_start_doses(assessed_drafts(resources))


def ready(**more: list[Resource]) -> list[Resource]:
    return [
        patient(),
        problem("heart failure", "2024-01-15"),
        lvef(32, "2025-12-01"),
        nyha(2, day(1)),
        pressure(118, 70, day(1)),
        heart_rate(72, day(1)),
        potassium(4.4, day(1)),
        sodium(139, day(1)),
        creatinine(1.0, day(1)),
        *more.get("drugs", []),
    ]


@pytest.mark.parametrize(
    ("rule", "drug", "expected"),
    [
        # 2017 drug table: spironolactone 12.5 to 25 mg once daily; the row proposed for a good kidney is in doses.toml.
        ("start-mra", "spironolactone", "standard"),
        ("start-beta-blocker", "bisoprolol", "standard"),
        ("start-sglt2-inhibitor", "dapagliflozin", "standard"),
        ("start-ras-inhibitor", "sacubitril/valsartan", "low"),  # nothing of the class was taken before
    ],
)
def test_the_first_dose_for_a_patient_with_nothing_against_it_is_that_of_the_first_row_that_fits(rule, drug, expected):
    started = drug_drafts(assessed_drafts(ready()), rules=rule, action="start")
    doses = [dose_of(draft) for _, draft in started if drug_of(draft) == drug]
    rows = [row for row in DOSES if row.drug == drug and row.start_kind in (None, expected)]
    assert doses == [(rows[0].start_dose_mg, rows[0].start_times_per_day)]


def test_a_raised_dose_is_the_next_step_of_the_dose_table():
    drugs = [
        order("bisoprolol", 2.5, since="2025-09-01"),
        order("enalapril", 5, 2, since="2025-09-01"),
        order("spironolactone", 25, since="2025-06-01"),
        order("dapagliflozin", 10, since="2025-06-01"),
    ]
    proposed = drug_drafts(assessed_drafts(ready(drugs=drugs)), rules="raise-dose", action="raise")
    raised = {drug_of(draft): dose_of(draft) for _, draft in proposed}
    assert raised
    for drug, dose in raised.items():
        assert dose is not None
        (row,) = [row for row in DOSES if row.drug == drug]
        before = {"bisoprolol": 2.5, "enalapril": 5.0}[drug]
        assert dose[0] == min(step for step in row.steps_mg if step > before)


def test_a_change_to_the_other_metoprolol_keeps_the_daily_dose():
    """The 2017 drug table doses the succinate once a day; going over at the same daily dose is common practice."""
    drugs = [order("metoprolol tartrate", 50, 2, since="2025-06-01")]
    proposed = drug_drafts(assessed_drafts(ready(drugs=drugs)), rules="start-beta-blocker", action="switch")
    doses = {drug_of(draft): dose_of(draft) for _, draft in proposed}
    assert doses["metoprolol succinate"] == (100, 1)


def test_a_test_that_is_ordered_already_is_not_drafted_again():
    data, when = written_patients()["test-due-and-already-ordered"]
    answer = assess(data, CONTENT, as_of=parse_as_of(when, UTC))
    ordered = [
        card for one in answer["assessments"] for card in one["cards"] if (card["due"] or {}).get("already_ordered")
    ]
    assert ordered
    assert all(draft["resourceType"] != "ServiceRequest" for card in ordered for draft in card["drafts"])


def test_no_card_drafts_the_same_order_twice():
    for data, when in written_patients().values():
        for one in assess(data, CONTENT, as_of=parse_as_of(when, UTC))["assessments"]:
            drafts = [orjson.dumps(draft) for card in one["cards"] for draft in card["drafts"]]
            assert len(set(drafts)) == len(drafts), one["patient"]
