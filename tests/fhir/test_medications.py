"""MedicationRequest, -Statement, -Dispense and -Administration, as systems send them."""

from __future__ import annotations

from datetime import UTC

import pytest

from cds.errors import Issue
from cds.fhir.code_matches import DrugComponent
from cds.fhir.codes import CodeBook, CodeTables
from cds.fhir.concept_codes import ConceptCodes, ConceptRow
from cds.fhir.drug_codes import RANKS, DrugCodes, DrugRow
from cds.fhir.drug_text import DrugNames
from cds.fhir.intake import Context, Intake, NotRecognised
from cds.fhir.medications import read_medication
from cds.fhir.words import Phrases

RXNORM = "http://www.nlm.nih.gov/research/umls/rxnorm"
SNOMED = "http://snomed.info/sct"
FUROSEMIDE = DrugComponent(drug="furosemide", drug_class="loop-diuretic")
ARNI = DrugComponent(drug="sacubitril/valsartan", drug_class="arni")
VALSARTAN = DrugComponent(drug="valsartan", drug_class="arb")


def product(*components, systemic=True, route="oral", kind="product", **more):
    by = "product-code" if kind == "product" else "ingredient-code"
    return DrugRow(components=components, matched_by=by, rank=RANKS[kind], is_systemic=systemic, route=route, **more)


def strong(drug, drug_class, mg, unit="MG"):
    return DrugComponent(drug=drug, drug_class=drug_class, strength_mg=mg, strength_unit=unit)


# The numbers are made up, only their meaning matters.
BOOK = CodeBook(
    CodeTables(
        drugs=DrugCodes(
            rxnorm={
                "1001": product(strong("furosemide", "loop-diuretic", 40)),
                "1002": product(strong("sacubitril/valsartan", "arni", 50)),
                "1003": product(strong("perindopril", "ace-inhibitor", 5), strong("amlodipine", "dhp-ccb", 10)),
                "1004": product(
                    DrugComponent(drug="timolol", drug_class="beta-blocker"), systemic=False, route="other"
                ),
                "1005": product(DrugComponent(drug="atorvastatin", drug_class=None)),
                "1006": product(strong("ibuprofen", "nsaid", 400), DrugComponent(drug="famotidine", drug_class=None)),
                "1007": product(strong("furosemide", "loop-diuretic", 40), note="pack: strengths of each item"),
                "1008": product(strong("lisinopril", "ace-inhibitor", 100), note="suspect-strength"),
                "2001": product(FUROSEMIDE, systemic=None, route=None, kind="ingredient"),
                "2002": product(ARNI, systemic=None, route=None, kind="ingredient"),
                "2003": product(VALSARTAN, systemic=None, route=None, kind="ingredient"),
                "2004": product(
                    DrugComponent(
                        drug="diuretics (not named)", drug_class=None, possible_classes=("loop-diuretic", "mra")
                    ),
                    systemic=None,
                    route=None,
                    kind="ingredient",
                ),
            }
        ),
        drug_names=DrugNames([("furosemide", (FUROSEMIDE,), False), ("sacubitril/valsartan", (ARNI,), False)]),
        problems=ConceptCodes(
            [
                ConceptRow(
                    concept="hyperkalaemia",
                    system="snomed",
                    code="14140009",
                    is_prefix=False,
                    role="include",
                    display="",
                )
            ]
        ),
        problem_words=Phrases([("heart failure", ("heart-failure",))]),
        reaction_words=Phrases([("cough", ("cough",))]),
    )
)
DAILY = {"repeat": {"frequency": 1, "period": 1, "periodUnit": "d"}}
ONE_DAILY = {"timing": DAILY, "doseAndRate": [{"doseQuantity": {"value": 1}}]}


def coded(code, text=None):
    concept = {"coding": [{"system": RXNORM, "code": code}]}
    return concept if text is None else {**concept, "text": text}


def order(code="1001", **more):
    return {
        "resourceType": "MedicationRequest",
        "id": "m1",
        "status": "active",
        "intent": "order",
        "medicationCodeableConcept": coded(code),
        "authoredOn": "2025-01-01",
        "dosageInstruction": [ONE_DAILY],
    } | more


def resource(kind, **more):
    return {"resourceType": kind, "id": "m1", "status": "completed", "medicationCodeableConcept": coded("1001")} | more


def read(sent, *, known=None):
    """Entries, others, and the intake; `known` are the resources a reference may name."""
    intake = Intake()

    def resolve(reference, holder):
        name = reference.get("reference") if isinstance(reference, dict) else None
        inside = {f"#{item['id']}": item for item in holder.get("contained", [])}
        return (known or {}).get(name) or inside.get(name)

    entries, others = read_medication(sent, Context(codes=BOOK, zone=UTC, intake=intake), resolve=resolve)
    return entries, others, intake


def entry(sent, **more):
    (only,) = read(sent, **more)[0]
    return only


def issues(sent, **more):
    return [(issue.severity, issue.path) for issue in read(sent, **more)[2].issues]


def test_an_order_of_a_coded_tablet_is_one_entry_with_its_daily_dose():
    found = entry(order())
    assert (found.source, found.kind, found.drug, found.drug_class) == (
        "MedicationRequest/m1",
        "order",
        "furosemide",
        "loop-diuretic",
    )
    assert (found.matched_by, found.status, found.route) == ("product-code", "active", "oral")
    assert (str(found.authored), str(found.starts), found.ends) == ("2025-01-01", "2025-01-01", None)
    assert [line.daily_mg for line in found.lines] == [40]
    assert issues(order()) == []


# resource type | status | other elements | state, "-" for no therapy
STATES = [
    ("MedicationRequest", "active", {"intent": "order"}, "active"),
    ("MedicationRequest", "on-hold", {"intent": "order"}, "on-hold"),
    ("MedicationRequest", "stopped", {"intent": "order"}, "stopped"),
    ("MedicationRequest", "completed", {"intent": "order"}, "completed"),
    ("MedicationRequest", "draft", {"intent": "order"}, "planned"),
    ("MedicationRequest", "unknown", {"intent": "order"}, "unknown"),
    ("MedicationRequest", "cancelled", {"intent": "order"}, "-"),
    ("MedicationRequest", "entered-in-error", {"intent": "order"}, "-"),
    ("MedicationRequest", "active", {"intent": "order", "doNotPerform": True}, "-"),
    ("MedicationRequest", "active", {"intent": "order", "doNotPerform": False}, "active"),
    ("MedicationRequest", "active", {"intent": "proposal"}, "planned"),
    ("MedicationRequest", "active", {"intent": "plan"}, "planned"),
    ("MedicationRequest", "active", {"intent": "option"}, "planned"),
    ("MedicationRequest", "stopped", {"intent": "plan"}, "-"),
    ("MedicationStatement", "active", {}, "active"),
    ("MedicationStatement", "intended", {}, "planned"),
    ("MedicationStatement", "not-taken", {}, "stopped"),
    ("MedicationStatement", "entered-in-error", {}, "-"),
    ("MedicationDispense", "completed", {}, "completed"),
    ("MedicationDispense", "in-progress", {}, "active"),
    ("MedicationDispense", "preparation", {}, "planned"),
    ("MedicationDispense", "declined", {}, "-"),
    ("MedicationDispense", "cancelled", {}, "-"),
    ("MedicationAdministration", "completed", {}, "completed"),
    ("MedicationAdministration", "in-progress", {}, "active"),
    ("MedicationAdministration", "not-done", {}, "-"),
    ("MedicationAdministration", "entered-in-error", {}, "-"),
]


@pytest.mark.parametrize(("kind", "status", "more", "state"), STATES)
def test_the_status_decides_before_anything_else(kind, status, more, state):
    entries, _, intake = read(resource(kind, status=status, **more))
    assert [found.status for found in entries] == ([] if state == "-" else [state])
    assert [issue.severity for issue in intake.issues] == (["information"] if state == "-" else [])


@pytest.mark.parametrize("status", [None, "Active", 7, [], {"active": True}])
def test_a_status_r4_does_not_know_is_unknown_with_a_doubt(status):
    sent = order(status=status)
    assert entry(sent).status == "unknown"
    assert issues(sent) == [("doubtful", "status")]


def test_an_order_that_may_forbid_the_medicine_is_refused():
    sent = order(doNotPerform="true")
    assert read(sent)[0] == ()
    assert issues(sent) == [("refused", "doNotPerform")]


def test_an_unknown_medicine_is_counted_and_listed():
    entries, others, intake = read(order(medicationCodeableConcept=coded("9999", "Moonwort [Brand]")))
    assert entries == ()
    assert [(other.display, other.reason) for other in others] == [("Moonwort", "not recognised")]
    assert intake.not_recognised == {NotRecognised("medicine", RXNORM, "9999", "Moonwort"): 1}


def test_eye_drops_are_no_therapy_here():
    _, others, _ = read(order("1004"))
    assert [other.reason for other in others] == ["not systemic: eye drops, gels and the like"]


def test_an_ingredient_given_into_the_eye_is_not_systemic_either():
    eye = {"coding": [{"system": SNOMED, "code": "54485002"}]}  # FHIR R4, value set route-codes
    entries, others, _ = read(order("2001", dosageInstruction=[{"route": eye}]))
    assert entries == ()
    assert others[0].reason.startswith("not systemic")


def test_a_medicine_of_no_class_used_here_is_listed():
    _, others, _ = read(order("1005", medicationCodeableConcept=coded("1005", "Atorvastatin 20 mg")))
    assert [(other.display, other.reason) for other in others] == [("Atorvastatin 20 mg", "of no class used here")]


def test_a_combination_gives_each_ingredient_its_own_entry_and_mg():
    entries, _, _ = read(order("1003"))
    assert [(e.drug, e.part_of, e.lines[0].daily_mg) for e in entries] == [
        ("perindopril", "perindopril/amlodipine", 5),
        ("amlodipine", "perindopril/amlodipine", 10),
    ]


def test_the_part_of_a_combination_that_we_do_not_use_is_listed_beside_the_other():
    entries, others, _ = read(order("1006"))
    assert [(e.drug, e.part_of) for e in entries] == [("ibuprofen", "ibuprofen/famotidine")]
    assert [other.display for other in others] == ["famotidine"]


def test_sacubitril_valsartan_is_one_drug_and_no_combination():
    found = entry(order("1002"))
    assert (found.drug, found.drug_class, found.part_of, found.lines[0].daily_mg) == (
        "sacubitril/valsartan",
        "arni",
        None,
        50,
    )


def test_a_code_that_leaves_the_class_open_lists_the_classes_it_may_be():
    sent = order("2004")
    assert (entry(sent).drug_class, entry(sent).possible_classes) == (None, ("loop-diuretic", "mra"))
    assert issues(sent) == [("doubtful", "medicationCodeableConcept")]


@pytest.mark.parametrize("code", ["1007", "1008"])
def test_strengths_of_packs_and_suspect_rows_are_never_multiplied(code):
    assert entry(order(code)).lines[0].daily_mg is None


def test_a_text_alone_is_used_and_marked():
    sent = order(medicationCodeableConcept={"text": "Furosemide 40 mg tablet"})
    found = entry(sent)
    assert (found.drug, found.matched_by, found.lines[0].daily_mg, found.lines[0].is_from_text) == (
        "furosemide",
        "text",
        40,
        True,
    )
    assert issues(sent) == [("information", "medicationCodeableConcept")]


def test_a_code_without_strength_takes_it_from_its_display():
    assert entry(order(medicationCodeableConcept=coded("2001", "furosemide 20 mg"))).lines[0].daily_mg == 20


def test_the_two_strengths_of_a_sacubitril_valsartan_text_are_summed():
    sent = order(medicationCodeableConcept={"text": "sacubitril/valsartan 49/51 mg tablet"})
    assert entry(sent).lines[0].daily_mg == 100


MEDICATION = {"resourceType": "Medication", "id": "d1", "code": coded("1001")}


def by_reference(**more):
    sent = order(**more)
    del sent["medicationCodeableConcept"]
    return sent


def test_a_medication_is_found_contained_or_as_an_entry():
    inside = by_reference(medicationReference={"reference": "#d1"}, contained=[MEDICATION])
    beside = by_reference(medicationReference={"reference": "Medication/d1"})
    assert entry(inside).drug == "furosemide"
    assert entry(beside, known={"Medication/d1": MEDICATION}).lines[0].daily_mg == 40


def test_a_medication_entered_in_error_is_refused():
    sent = by_reference(
        medicationReference={"reference": "#d1"}, contained=[MEDICATION | {"status": "entered-in-error"}]
    )
    assert read(sent)[:2] == ((), ())
    assert issues(sent) == [("refused", "medicationReference")]


def test_a_reference_that_leads_nowhere_leaves_its_display():
    sent = by_reference(medicationReference={"reference": "Medication/x", "display": "Furosemide 40 mg"})
    assert (entry(sent).drug, entry(sent).matched_by) == ("furosemide", "text")
    assert ("doubtful", "medicationReference") in issues(sent)


@pytest.mark.parametrize(
    ("more", "path"),
    [
        ({"medicationReference": {"reference": "Medication/x"}}, "medicationReference"),
        ({"medicationReference": "Medication/x"}, "medication"),
        ({"medicationCodeableConcept": ["1001"]}, "medication"),
        ({}, "medication"),
    ],
)
def test_no_medicine_at_all_is_refused(more, path):
    sent = by_reference(**more)
    assert read(sent)[:2] == ((), ())
    assert issues(sent) == [("refused", path)]


def ingredient(code, mg, *, per=None):
    strength = {"numerator": {"value": mg, "code": "mg"}, "denominator": per or {"value": 1, "unit": "tablet"}}
    return {"itemCodeableConcept": coded(code), "strength": strength}


def test_ingredients_with_strengths_stand_in_for_the_code_of_the_medication():
    medication = {"resourceType": "Medication", "id": "d1", "ingredient": [ingredient("2001", 40)]}
    found = entry(by_reference(medicationReference={"reference": "#d1"}, contained=[medication]))
    assert (found.drug, found.matched_by, found.lines[0].daily_mg) == ("furosemide", "ingredient-code", 40)


def test_sacubitril_and_valsartan_listed_apart_are_one_drug_with_the_sum():
    parts = [ingredient("2002", 24), ingredient("2003", 26)]
    medication = {"resourceType": "Medication", "id": "d1", "ingredient": parts}
    found = entry(by_reference(medicationReference={"reference": "#d1"}, contained=[medication]))
    assert (found.drug, found.drug_class, found.part_of, found.lines[0].daily_mg) == (
        "sacubitril/valsartan",
        "arni",
        None,
        50,
    )


def test_an_ingredient_of_a_liquid_has_its_strength_in_one_ml():
    medication = {
        "resourceType": "Medication",
        "id": "d1",
        "ingredient": [ingredient("2001", 50, per={"value": 5, "code": "mL"})],
    }
    line = {"timing": DAILY, "doseAndRate": [{"doseQuantity": {"value": 4, "code": "mL"}}]}
    sent = by_reference(medicationReference={"reference": "#d1"}, contained=[medication], dosageInstruction=[line])
    assert entry(sent).lines[0].daily_mg == 40


def test_the_earliest_bound_starts_an_order_and_the_last_ends_it():
    def bounded(start, end):
        return ONE_DAILY | {"timing": {"repeat": DAILY["repeat"] | {"boundsPeriod": {"start": start, "end": end}}}}

    found = entry(order(dosageInstruction=[bounded("2025-02-08", "2025-02-14"), bounded("2025-02-01", "2025-02-07")]))
    assert (str(found.starts), str(found.ends)) == ("2025-02-01", "2025-02-14")
    assert entry(order(dosageInstruction=[bounded("2025-02-01", "2025-02-07"), ONE_DAILY])).ends is None


def test_a_length_without_a_start_runs_from_the_day_of_the_order():
    repeat = DAILY["repeat"] | {"boundsDuration": {"value": 30, "code": "d"}}
    assert str(entry(order(dosageInstruction=[ONE_DAILY | {"timing": {"repeat": repeat}}])).ends) == "2025-01-30"


def test_the_dispensing_window_is_no_therapy():
    request = {"validityPeriod": {"start": "2025-01-01", "end": "2025-02-01"}}
    assert entry(order(dispenseRequest=request)).ends is None


def test_an_order_whose_date_is_not_understood_still_counts_undated():
    sent = order(authoredOn="last Tuesday")
    assert (entry(sent).authored, entry(sent).starts) == (None, None)
    assert issues(sent) == [("doubtful", "authoredOn")]


def test_a_statement_has_its_period_and_the_day_it_was_asserted():
    sent = resource(
        "MedicationStatement", effectivePeriod={"start": "2024-03", "end": "2025-01-10"}, dateAsserted="2025-02-01"
    )
    found = entry(sent)
    assert (str(found.authored), str(found.starts), str(found.ends)) == ("2025-02-01", "2024-03", "2025-01-10")


def test_a_dispense_begins_when_it_was_handed_over():
    sent = resource("MedicationDispense", whenPrepared="2025-01-01", whenHandedOver="2025-01-03")
    assert (str(entry(sent).authored), str(entry(sent).starts)) == ("2025-01-03", "2025-01-03")
    only_prepared = entry(resource("MedicationDispense", whenPrepared="2025-01-01"))
    assert (str(only_prepared.authored), only_prepared.starts) == ("2025-01-01", None)


def test_an_administration_is_one_dose_at_one_moment():
    sent = resource(
        "MedicationAdministration",
        effectiveDateTime="2025-01-03T08:00:00Z",
        dosage={"dose": {"value": 40, "code": "mg"}},
    )
    found = entry(sent)
    assert str(found.starts) == "2025-01-03"
    assert [(line.daily_mg, line.note) for line in found.lines] == [(None, "a single dose: 40 mg")]


# dispenseRequest | days one fill lasts, one tablet a day
SUPPLIES = [
    ({"expectedSupplyDuration": {"value": 30, "code": "d"}}, 30),
    ({"expectedSupplyDuration": {"value": 4, "code": "wk"}}, 28),
    ({"expectedSupplyDuration": {"value": 90, "unit": "days"}}, 90),
    ({"expectedSupplyDuration": {"value": 30}}, 30),
    ({"quantity": {"value": 90}}, 90),
    ({"quantity": {"value": 30, "unit": "tablets"}}, 30),
    ({"quantity": {"value": 3600, "code": "mg"}}, 90),
    ({"expectedSupplyDuration": {"value": 30, "code": "d"}, "quantity": {"value": 90}}, 30),
    ({}, None),
    ({"quantity": [90]}, None),
]


@pytest.mark.parametrize(("request_", "days"), SUPPLIES)
def test_a_fill_lasts_as_long_as_stated_else_as_the_quantity_does(request_, days):
    assert entry(order(dispenseRequest=request_)).supply_days == days


def test_a_dispense_states_its_days_and_an_order_its_repeats():
    assert entry(resource("MedicationDispense", daysSupply={"value": 30})).supply_days == 30
    assert entry(order(dispenseRequest={"numberOfRepeatsAllowed": 3})).refills == 3
    sent = order(dispenseRequest={"numberOfRepeatsAllowed": -1})
    assert entry(sent).refills == 0
    assert issues(sent) == [("doubtful", "dispenseRequest.numberOfRepeatsAllowed")]


def test_what_is_handed_out_belongs_to_its_order_by_name_or_address():
    reference = {"reference": "MedicationRequest/m0"}
    assert entry(resource("MedicationDispense", authorizingPrescription=[reference])).based_on == "MedicationRequest/m0"
    assert entry(resource("MedicationAdministration", request=reference)).based_on == "MedicationRequest/m0"
    assert entry(order(priorPrescription=reference)).replaces == "MedicationRequest/m0"
    address = resource("MedicationDispense", authorizingPrescription=[{"reference": "urn:uuid:1"}])
    known = {"urn:uuid:1": {"resourceType": "MedicationRequest", "id": "m0"}}
    assert entry(address, known=known).based_on == "MedicationRequest/m0"


def test_the_reason_of_the_status_is_kept_as_concepts():
    coded_reason = {"coding": [{"system": SNOMED, "code": "14140009"}]}  # SNOMED CT: hyperkalaemia
    assert entry(order(status="stopped", statusReason=coded_reason)).reasons == ("hyperkalaemia",)
    assert entry(order(status="on-hold", statusReason={"text": "dry cough"})).reasons == ("cough",)
    assert entry(order(status="on-hold", statusReason={"text": "family wish"})).reasons == ()


def test_the_indication_of_an_active_order_is_no_reason_for_its_status():
    assert entry(order(reasonCode=[{"text": "heart failure"}])).reasons == ()


def test_what_the_patient_reports_is_marked():
    patient = {"reference": "Patient/p1"}
    assert entry(order(reportedBoolean=True)).is_patient_reported
    assert entry(resource("MedicationStatement", informationSource=patient)).is_patient_reported
    assert not entry(
        resource("MedicationStatement", informationSource={"reference": "Practitioner/d"})
    ).is_patient_reported


def test_the_last_update_is_an_instant():
    assert entry(order(meta={"lastUpdated": "2025-01-02T10:00:00Z"})).last_updated.hour == 10
    assert entry(order(meta={"lastUpdated": "yesterday"})).last_updated is None


NONSENSE = [None, 7, True, "x", [], {}, [None], [[]], {"a": []}, [{"coding": 7}], {"coding": [7], "text": []}, -1e308]
ELEMENTS = [
    "id",
    "status",
    "intent",
    "medicationCodeableConcept",
    "medicationReference",
    "authoredOn",
    "dosageInstruction",
    "dosage",
    "dispenseRequest",
    "daysSupply",
    "quantity",
    "statusReason",
    "reasonCode",
    "priorPrescription",
    "authorizingPrescription",
    "basedOn",
    "informationSource",
    "meta",
    "effectivePeriod",
    "effectiveDateTime",
]


@pytest.mark.parametrize(
    "kind", ["MedicationRequest", "MedicationStatement", "MedicationDispense", "MedicationAdministration"]
)
@pytest.mark.parametrize("element", ELEMENTS)
def test_whatever_stands_in_an_element_nothing_breaks(kind, element):
    for nonsense in NONSENSE:
        sent = order(resourceType=kind, status="active" if kind != "MedicationDispense" else "completed")
        sent |= {"effectiveDateTime": "2025-01-01", element: nonsense}
        _, _, intake = read(sent)
        assert all(isinstance(issue, Issue) for issue in intake.issues)


def test_no_issue_repeats_a_value():
    sent = order(
        authoredOn="31.12.1999",
        dosageInstruction=[{"timing": DAILY, "doseAndRate": [{"doseQuantity": {"value": -77, "unit": "furlong"}}]}],
        dispenseRequest={"numberOfRepeatsAllowed": 4711},
    )
    said = " ".join(map(str, read(sent)[2].issues))
    assert not any(value in said for value in ("1999", "77", "furlong", "4711"))
