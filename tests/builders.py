"""FHIR R4 resources from plain literals: what the tests and the fixtures are made of. Every id tells what it is."""

from __future__ import annotations

import json
from typing import Any

Resource = dict[str, Any]

PATIENT = "p1"
LOINC = "http://loinc.org"
SNOMED = "http://snomed.info/sct"
RXNORM = "http://www.nlm.nih.gov/research/umls/rxnorm"
ATC = "http://www.whocc.no/atc"
ICD = "http://hl7.org/fhir/sid/icd-10-cm"
UCUM = "http://unitsofmeasure.org"

# RxNorm ingredient (or salt) codes.
INGREDIENTS = {
    "amlodipine": "17767",
    "atenolol": "1202",
    "bisoprolol": "19484",
    "bumetanide": "1808",
    "captopril": "1998",
    "candesartan": "214354",
    "carvedilol": "20352",
    "dapagliflozin": "1488564",
    "digoxin": "3407",
    "empagliflozin": "1545653",
    "enalapril": "3827",
    "eplerenone": "298869",
    "finerenone": "2562811",
    "furosemide": "4603",
    "ibuprofen": "5640",
    "lisinopril": "29046",
    "losartan": "52175",
    "metformin": "6809",
    "metoprolol": "6918",
    "metoprolol succinate": "221124",
    "metoprolol tartrate": "203191",
    "nebivolol": "31555",
    "potassium chloride": "8591",
    "propranolol": "8787",
    "ramipril": "35296",
    "sacubitril/valsartan": "1656339",
    "spironolactone": "9997",
    "tadalafil": "358263",
    "telmisartan": "73494",
    "torasemide": "38413",
    "valsartan": "69749",
    "verapamil": "11170",
}
# SNOMED CT concepts.
PROBLEMS = {
    "heart failure": "84114007",
    "hypertension": "38341003",
    "type 1 diabetes": "46635009",
    "type 2 diabetes": "44054006",
    "pregnancy": "77386006",
    "asthma": "195967001",
    "hyperkalaemia": "14140009",
    "obstructive cardiomyopathy": "45227007",
    "senile cardiac amyloidosis": "16573007",
    "dependence on dialysis": "105502003",
    "hospice care": "305336008",
}
REACTIONS = {"angioedema": "41291007", "cough": "49727002"}
NYHA = {1: "LA28404-4", 2: "LA28405-1", 3: "LA28406-9", 4: "LA28407-7"}


def bundle(*resources: Resource, kind: str = "collection") -> bytes:
    """The resources as the bytes of a Bundle."""
    entries = [{"resource": resource} for resource in resources]
    return json.dumps({"resourceType": "Bundle", "type": kind, "entry": entries}).encode()


def patient(*, born: str | None = "1967-05-04", sex: str | None = "male", id: str = PATIENT, **more: Any) -> Resource:  # noqa: A002
    """A Patient; `born` and `sex` None leave the element out."""
    facts = {"gender": sex, "birthDate": born, **more}
    return {"resourceType": "Patient", "id": id, **{key: value for key, value in facts.items() if value is not None}}


def subject(of: str = PATIENT) -> Resource:
    return {"reference": f"Patient/{of}"}


def observation(name: str, code: str, value: float | None, unit: str, when: str, **more: Any) -> Resource:
    """A laboratory or vital-sign result with a UCUM unit."""
    resource: Resource = {
        "resourceType": "Observation",
        "id": f"{name}-{when}".replace(":", "").replace("+", "p"),
        "status": "final",
        "code": {"coding": [{"system": LOINC, "code": code}]},
        "subject": subject(),
        "effectiveDateTime": when,
    }
    if value is not None:
        resource["valueQuantity"] = {"value": value, "unit": unit, "system": UCUM, "code": unit}
    return {**resource, **more}


def potassium(value: float, when: str, unit: str = "mmol/L", **more: Any) -> Resource:
    return observation("potassium", "2823-3", value, unit, when, **more)


def creatinine(value: float, when: str, unit: str = "mg/dL", **more: Any) -> Resource:
    return observation("creatinine", "2160-0" if unit == "mg/dL" else "14682-9", value, unit, when, **more)


def sodium(value: float, when: str, **more: Any) -> Resource:
    return observation("sodium", "2951-2", value, "mmol/L", when, **more)


def egfr(value: float, when: str, code: str = "98979-8", **more: Any) -> Resource:
    return observation("egfr", code, value, "mL/min/{1.73_m2}", when, **more)


def lvef(value: float, when: str, **more: Any) -> Resource:
    return observation("lvef", "10230-1", value, "%", when, **more)


def heart_rate(value: float, when: str, **more: Any) -> Resource:
    return observation("heart-rate", "8867-4", value, "/min", when, **more)


def pr_interval(value: float, when: str, **more: Any) -> Resource:
    return observation("pr", "8625-6", value, "ms", when, **more)


def weight(value: float, when: str, unit: str = "kg", **more: Any) -> Resource:
    return observation("weight", "29463-7", value, unit, when, **more)


def nt_probnp(value: float, when: str, **more: Any) -> Resource:
    return observation("nt-probnp", "33762-6", value, "pg/mL", when, **more)


def pressure(systolic: float, diastolic: float, when: str, **more: Any) -> Resource:
    """A blood pressure panel with its two components."""
    parts = [
        {
            "code": {"coding": [{"system": LOINC, "code": code}]},
            "valueQuantity": {"value": value, "unit": "mmHg", "system": UCUM, "code": "mm[Hg]"},
        }
        for code, value in (("8480-6", systolic), ("8462-4", diastolic))
    ]
    return observation("pressure", "85354-9", None, "", when, component=parts, **more)


def nyha(grade: int, when: str, **more: Any) -> Resource:
    """NYHA class 1 to 4 as a coded answer."""
    answer = {
        "coding": [{"system": LOINC, "code": NYHA[grade], "display": f"Class {'I' * grade if grade < 4 else 'IV'}"}]
    }
    return observation("nyha", "88020-3", None, "", when, valueCodeableConcept=answer, **more)


def visit(
    day: str,
    *,
    bp: tuple[int, int],
    pulse: int,
    k: float | None = None,
    crea: float | None = None,
    nyha_class: int | None = None,
    kg: float | None = None,
) -> list[Resource]:
    """Vital signs of a day, with potassium (mmol/L), creatinine (mg/dL), NYHA class and weight where given."""
    found = [pressure(*bp, day), heart_rate(pulse, day)]
    found += [potassium(k, day)] if k is not None else []
    found += [creatinine(crea, day)] if crea is not None else []
    found += [nyha(nyha_class, day)] if nyha_class is not None else []
    return found + ([weight(kg, day)] if kg is not None else [])


def dosage(dose_mg: float, times_per_day: float) -> Resource:
    """So many milligrams so often a day; 0.5 is every other day."""
    often = {"frequency": 1, "period": 2} if times_per_day == 0.5 else {"frequency": int(times_per_day), "period": 1}
    quantity = {"value": dose_mg, "unit": "mg", "system": UCUM, "code": "mg"}
    return {"timing": {"repeat": {**often, "periodUnit": "d"}}, "doseAndRate": [{"doseQuantity": quantity}]}


def order(
    drug: str,
    dose_mg: float | None,
    times_per_day: float = 1,
    *,
    since: str | None,
    status: str = "active",
    concept: Resource | None = None,
    **more: Any,
) -> Resource:
    """A MedicationRequest by RxNorm ingredient, unless `concept` says otherwise."""
    coded = concept or {"coding": [{"system": RXNORM, "code": INGREDIENTS[drug], "display": drug}]}
    resource: Resource = {
        "resourceType": "MedicationRequest",
        "id": f"{drug.replace('/', '-').replace(' ', '-')}-{since or 'undated'}".replace(":", "").replace("+", "p"),
        "status": status,
        "intent": "order",
        "medicationCodeableConcept": coded,
        "subject": subject(),
    }
    if since is not None:
        resource["authoredOn"] = since
    if dose_mg is not None:
        resource["dosageInstruction"] = [dosage(dose_mg, times_per_day)]
    return {**resource, **more}


def until(medication: Resource, end: str, status: str = "stopped", **more: Any) -> Resource:
    """The same order, which ended on a day or at an instant."""
    line = medication["dosageInstruction"][0]
    repeat = {**line["timing"]["repeat"], "boundsPeriod": {"end": end}}
    ended = {**line, "timing": {"repeat": repeat}}
    return {**medication, "status": status, "dosageInstruction": [ended], **more}


def statement(drug: str, dose_mg: float, times_per_day: float = 1, *, since: str, **more: Any) -> Resource:
    """A MedicationStatement: what is taken, since when."""
    return {
        "resourceType": "MedicationStatement",
        "id": f"statement-{drug.replace('/', '-').replace(' ', '-')}-{since}",
        "status": "active",
        "medicationCodeableConcept": {"coding": [{"system": RXNORM, "code": INGREDIENTS[drug], "display": drug}]},
        "subject": subject(),
        "effectivePeriod": {"start": since},
        "dosage": [dosage(dose_mg, times_per_day)],
        **more,
    }


def dispense(drug: str, when: str, *, days: int = 30, **more: Any) -> Resource:
    """A MedicationDispense handed over on a day."""
    return {
        "resourceType": "MedicationDispense",
        "id": f"dispense-{drug.replace('/', '-').replace(' ', '-')}-{when}",
        "status": "completed",
        "medicationCodeableConcept": {"coding": [{"system": RXNORM, "code": INGREDIENTS[drug], "display": drug}]},
        "subject": subject(),
        "whenHandedOver": when,
        "daysSupply": {"value": days, "unit": "d", "system": UCUM, "code": "d"},
        **more,
    }


def administration(drug: str, when: str, dose_mg: float = 25, **more: Any) -> Resource:
    """A MedicationAdministration: one dose given at a moment."""
    return {
        "resourceType": "MedicationAdministration",
        "id": f"given-{drug.replace('/', '-').replace(' ', '-')}-{when}".replace(":", "").replace("+", "p"),
        "status": "completed",
        "medicationCodeableConcept": {"coding": [{"system": RXNORM, "code": INGREDIENTS[drug], "display": drug}]},
        "subject": subject(),
        "effectiveDateTime": when,
        "dosage": {"dose": {"value": dose_mg, "unit": "mg", "system": UCUM, "code": "mg"}},
        **more,
    }


def problem(
    name: str, since: str | None = None, *, status: str = "active", code: Resource | None = None, **more: Any
) -> Resource:
    """A Condition by SNOMED CT, unless `code` says otherwise."""
    coded = code or {"coding": [{"system": SNOMED, "code": PROBLEMS[name], "display": name}]}
    resource: Resource = {
        "resourceType": "Condition",
        "id": name.replace(" ", "-"),
        "clinicalStatus": {
            "coding": [{"system": "http://terminology.hl7.org/CodeSystem/condition-clinical", "code": status}]
        },
        "verificationStatus": {
            "coding": [{"system": "http://terminology.hl7.org/CodeSystem/condition-ver-status", "code": "confirmed"}]
        },
        "code": coded,
        "subject": subject(),
    }
    if since is not None:
        resource["onsetDateTime"] = since
    return {**resource, **more}


def icd(code: str, display: str) -> Resource:
    return {"coding": [{"system": ICD, "code": code, "display": display}]}


def allergy(
    drug: str, reaction: str | None = None, *, recorded: str = "2023-04-02", kind: str = "allergy", **more: Any
) -> Resource:
    """An AllergyIntolerance to a drug, with a coded reaction."""
    resource: Resource = {
        "resourceType": "AllergyIntolerance",
        "id": f"allergy-{drug.replace('/', '-').replace(' ', '-')}",
        "clinicalStatus": {
            "coding": [
                {"system": "http://terminology.hl7.org/CodeSystem/allergyintolerance-clinical", "code": "active"}
            ]
        },
        "verificationStatus": {
            "coding": [
                {"system": "http://terminology.hl7.org/CodeSystem/allergyintolerance-verification", "code": "confirmed"}
            ]
        },
        "type": kind,
        "code": {"coding": [{"system": RXNORM, "code": INGREDIENTS[drug], "display": drug}]},
        "patient": subject(),
        "recordedDate": recorded,
    }
    if reaction is not None:
        manifestation = {"coding": [{"system": SNOMED, "code": REACTIONS[reaction]}], "text": reaction}
        resource["reaction"] = [{"manifestation": [manifestation]}]
    return {**resource, **more}


def admission(start: str, end: str, *, reason: str = "heart failure", **more: Any) -> Resource:
    """An inpatient stay for a problem."""
    return {
        "resourceType": "Encounter",
        "id": f"stay-{start}",
        "status": "finished",
        "class": {"system": "http://terminology.hl7.org/CodeSystem/v3-ActCode", "code": "IMP"},
        "subject": subject(),
        "period": {"start": start, "end": end},
        "reasonCode": [{"coding": [{"system": SNOMED, "code": PROBLEMS[reason]}]}],
        **more,
    }


def test_order(code: str, ordered: str, *, display: str = "", **more: Any) -> Resource:
    """A ServiceRequest for a laboratory test by LOINC."""
    return {
        "resourceType": "ServiceRequest",
        "id": f"order-{code}-{ordered}",
        "status": "active",
        "intent": "order",
        "code": {"coding": [{"system": LOINC, "code": code, **({"display": display} if display else {})}]},
        "subject": subject(),
        "authoredOn": ordered,
        **more,
    }


test_order.__test__ = False  # type: ignore[attr-defined]  # a builder, not a test


def named(drug: str, dose_mg: float | None = None, times_per_day: float = 1, **more: Any) -> Resource:
    """An order that says the drug by its name only, without a code; since March 2025 unless told otherwise."""
    return order(drug, dose_mg, times_per_day, **{"since": "2025-03-01", "concept": {"text": drug}, **more})
