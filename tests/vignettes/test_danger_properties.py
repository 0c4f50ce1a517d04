"""What holds of dangers and doses for every patient: the fixtures, and many made ones."""

from __future__ import annotations

from datetime import UTC
from functools import cache
from pathlib import Path
from statistics import median

import orjson
import pytest
from builders import bundle, lvef, named, order, patient, problem, visit
from hypothesis import given
from hypothesis import strategies as st

from cds.assessment import assess
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

PATIENTS = Path(__file__).parents[2] / "fixtures" / "patients"
FIXTURES = sorted(folder.name for folder in PATIENTS.iterdir())
AS_OF = "2026-03-01"
ON_ONE_DRUG = ("stop-harmful-drug", "lower-dose", "raise-dose")
SAFETY = ("stop-harmful-drug", "interaction", "lab-out-of-range", "lower-dose")
HARMFUL = ("ibuprofen", "verapamil", "flecainide", "pioglitazone", "saxagliptin", "potassium chloride", "aliskiren")
RUNNING = {
    "enalapril": 5,
    "losartan": 50,
    "sacubitril/valsartan": 100,
    "bisoprolol": 5,
    "carvedilol": 12.5,
    "spironolactone": 25,
    "eplerenone": 25,
    "dapagliflozin": 10,
    "digoxin": 0.125,
    "furosemide": 40,
    "amiodarone": 200,
    "isosorbide mononitrate": 30,
    "tadalafil": 5,
}


def answers(data):
    whole = assess(data, load_content(), as_of=parse_as_of(AS_OF, UTC), trace=True)
    return list(orjson.loads(orjson.dumps(whole))["assessments"])


@cache
def fixture(name):
    return answers((PATIENTS / name / "bundle.json").read_bytes())


def stops(answer):
    return {(f["rule"], f["about"]) for f in answer["findings"] if (f["outcome"], f["action"]) == ("open", "stop")}


def danger_cards(answer):
    return {(c["rule"], c["about"]) for c in answer["cards"] if c["tier"] == "danger"}


def in_a_danger_card(answer):
    """Rule and subject of every safety finding that a danger card speaks for."""
    ids = {c["card_id"] for c in answer["cards"] if c["tier"] == "danger"}
    folded = {(i["rule"], i["about"]) for i in answer["held_back"] if i.get("into") in ids}
    return {(rule, about) for rule, about in danger_cards(answer) | folded if rule in SAFETY}


def doses(answer):
    """What is open to be done with the dose of each drug."""
    found = {}
    for f in answer["findings"]:
        if f["rule"] in ON_ONE_DRUG and f["outcome"] == "open" and f["action"] in ("stop", "lower", "raise"):
            found.setdefault(f["about"], set()).add(f["action"])
    return found


def check_cards(answer):
    """No two cards about the same thing, and no drug on two urgent cards that say what to do with it."""
    same = [(c["rule"], c["about"]) for c in answer["cards"]]
    assert len(same) == len(set(same)), same
    homes = {}
    for c in (c for c in answer["cards"] if c["tier"] in ("danger", "act")):
        inside = {i["about"] for i in answer["held_back"] if i.get("into") == c["card_id"] and i["rule"] in ON_ONE_DRUG}
        for drug in inside | ({c["about"]} if c["rule"] in ON_ONE_DRUG else set()):
            homes.setdefault(drug, []).append(c["headline"])
    assert {drug: cards for drug, cards in homes.items() if len(cards) > 1} == {}
    for drug, actions in doses(answer).items():
        assert len(actions) == 1, f"{drug}: {sorted(actions)}"


@pytest.mark.parametrize("name", FIXTURES)
def test_no_two_cards_of_a_fixture_say_the_same_and_no_drug_is_stopped_and_dosed(name):
    for answer in fixture(name):
        check_cards(answer)


def test_the_fixtures_have_few_cards():
    # a burden of our own choosing: half of the patients at most 6 cards, nobody more than 12
    counts = [len(answer["cards"]) for name in FIXTURES for answer in fixture(name)]
    assert median(counts) <= 6
    assert max(counts) <= 12


@pytest.mark.parametrize("drug", ["ibuprofen", "verapamil"])
@pytest.mark.parametrize("name", FIXTURES)
def test_one_more_harmful_drug_never_takes_a_danger_away(name, drug):
    before = fixture(name)
    data = orjson.loads((PATIENTS / name / "bundle.json").read_bytes())
    for answer in before:
        more = named(drug, 10, since="2026-01-05", id=f"added-{drug.replace(' ', '-')}")
        more["subject"] = {"reference": answer["patient"]}
        after = answers(orjson.dumps({**data, "entry": [*data["entry"], {"resource": more}]}))
        (one,) = [a for a in after if a["patient"] == answer["patient"]]
        assert stops(answer) <= stops(one)
        assert in_a_danger_card(answer) <= in_a_danger_card(one)


@st.composite
def treated_patients(draw):
    """A patient with heart failure, some of the drugs above at some dose, and values on both sides of the limits."""
    kind = draw(st.sampled_from([25, 38, 45, 58]))
    drugs = draw(st.lists(st.sampled_from(sorted(RUNNING)), unique=True, max_size=7))
    since = draw(st.sampled_from(["2025-06-01", "2026-02-20"]))
    day = draw(st.sampled_from(["2026-02-25", "2026-01-10"]))
    values = visit(
        day,
        bp=(draw(st.sampled_from([88, 93, 104, 130])), 70),
        pulse=draw(st.sampled_from([46, 53, 66, 84])),
        k=draw(st.sampled_from([2.8, 3.9, 4.6, 5.0, 5.2, 5.5, 5.7, 6.1, 6.6])),
        crea=draw(st.sampled_from([0.9, 1.6, 2.4, 3.2, 4.0])),
        nyha_class=draw(st.sampled_from([1, 2, 3, 4])),
        kg=80,
    )
    earlier = visit("2025-12-15", bp=(120, 70), pulse=64, k=draw(st.sampled_from([4.4, 5.6])), crea=1.0)
    known = [patient(), problem("heart failure", "2024-05-01"), lvef(kind, "2025-11-01"), *earlier, *values]
    return [*known, *(named(drug, RUNNING[drug], since=since) for drug in drugs)]


@given(resources=treated_patients())
def test_no_two_cards_say_the_same_and_no_drug_is_stopped_and_dosed(resources):
    (answer,) = answers(bundle(*resources))
    check_cards(answer)


@given(resources=treated_patients(), drug=st.sampled_from(HARMFUL))
def test_a_harmful_drug_never_takes_a_danger_away(resources, drug):
    (before,) = answers(bundle(*resources))
    (after,) = answers(bundle(*resources, named(drug, 10, since="2026-01-05")))
    assert stops(before) <= stops(after)
    assert in_a_danger_card(before) <= in_a_danger_card(after)


@given(resources=treated_patients())
def test_nothing_contraindicated_is_ever_proposed(resources):
    """A drug that is to be stopped, and a class of which one is to be stopped for the patient, is not drafted."""
    (answer,) = answers(bundle(*resources))
    stopped = {f["about"] for f in answer["findings"] if f["rule"] == "stop-harmful-drug" and f["action"] == "stop"}
    drafted = {
        d["medicationCodeableConcept"]["text"]
        for c in answer["cards"]
        for d in c["drafts"]
        if d["resourceType"] == "MedicationRequest"
    }
    assert stopped.isdisjoint(drafted)


def test_an_order_of_a_drug_already_stopped_brings_no_danger():
    ended = order("verapamil", 120, since="2025-06-01", status="stopped")
    (answer,) = answers(bundle(patient(), problem("heart failure", "2024-05-01"), lvef(30, "2025-11-01"), ended))
    assert stops(answer) == set()
