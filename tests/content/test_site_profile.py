"""What a health system may change by its profile, what it may not, and how it is told.

Profiles and patients are invented. A schedule, limit or tier written here shows the form and is no recommendation.
"""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC
from functools import cache
from pathlib import Path
from typing import Any

import orjson
import pytest
from asking import card, finding, order_check_of, said
from builders import (
    ATC,
    LOINC,
    bundle,
    creatinine,
    egfr,
    heart_rate,
    lvef,
    nyha,
    order,
    patient,
    potassium,
    pressure,
    problem,
    subject,
)
from jsonschema import Draft202012Validator
from random_patients import written_patients
from referencing import Registry, Resource

from cds.assessment import assess, check_orders, describe_records
from cds.content import load
from cds.content.catalogue import catalogue
from cds.content.load import Content, load_content
from cds.content.published import published
from cds.content.site import SCHEMA, SiteProfile, SiteProfileError, as_json, read_site
from cds.content.site_overlay import with_site
from cds.errors import CdsError
from cds.fhir.dates import parse_as_of

CONTENT = load_content()
TARNWICK = Path(__file__).parents[2] / "fixtures" / "site" / "tarnwick.toml"
HEAD = '[site]\nname = "Tarnwick Lakes Health Network"\nversion = "7"\n'
FORMULARY = "https://codes.tarnwick.example/formulary"
LABORATORY = "https://codes.tarnwick.example/laboratory"
TODAY = "2026-03-01"
DAY = "2026-02-20"


def profile(text: str) -> SiteProfile:
    """A profile of these tables; the keys of [site] stand first."""
    return read_site((HEAD + text).encode(), name="profile.toml")


def content_of(text: str) -> Content:
    return with_site(CONTENT, profile(text))


def assessed(content: Content, *resources: dict[str, Any], as_of: str = TODAY) -> dict[str, Any]:
    """The one patient's assessment with its trace, as a receiver would parse it."""
    whole = assess(bundle(*resources), content, as_of=parse_as_of(as_of, UTC), trace=True)
    (only,) = orjson.loads(orjson.dumps(whole))["assessments"]
    return dict(only)


def record_of(content: Content, *resources: dict[str, Any]) -> dict[str, Any]:
    whole = describe_records(bundle(*resources), content, as_of=parse_as_of(TODAY, UTC))
    (only,) = orjson.loads(orjson.dumps(whole))["records"]
    return dict(only)


def without_an_mra(k: float) -> list[dict[str, Any]]:
    """HFrEF in NYHA class II on the other three pillars at target, with a potassium (mmol/L)."""
    return [
        patient(),
        problem("heart failure", "2024-01-10"),
        lvef(30, "2025-10-01"),
        nyha(2, DAY),
        pressure(124, 76, DAY),
        heart_rate(66, DAY),
        creatinine(1.0, DAY),
        potassium(k, DAY),
        order("sacubitril/valsartan", 200, 2, since="2025-06-01"),
        order("bisoprolol", 10, since="2025-06-01"),
        order("dapagliflozin", 10, since="2025-06-01"),
    ]


def local_order(code: str, tablets: float = 1) -> dict[str, Any]:
    """An order in tablets under a code of the network's own formulary, and under no other code or name."""
    line = {
        "timing": {"repeat": {"frequency": 1, "period": 1, "periodUnit": "d"}},
        "doseAndRate": [{"doseQuantity": {"value": tablets, "unit": "tablet"}}],
    }
    concept = {"coding": [{"system": FORMULARY, "code": code}]}
    return order("local", None, since="2025-11-01", concept=concept, dosageInstruction=[line])


def drug(more: str) -> str:
    return f'[[code.drug]]\nsystem = "{FORMULARY}"\ncode = "T1"\n{more}\n'


# Every part of a profile takes effect.


def test_a_local_drug_code_is_recognised_with_its_dose_in_tablets():
    content = content_of(drug('drug = "spironolactone"\nstrength_mg = 25'))
    (course,) = record_of(content, patient(), local_order("T1", tablets=2))["courses"]
    assert (course["drug"], course["drug_class"], course["daily_dose_mg"]) == ("spironolactone", "mra", 50)
    assert course["matched_by"] == "site"
    (unknown,) = record_of(CONTENT, patient(), local_order("T1"))["not_recognised"]
    assert unknown["code"] == "T1"


def test_a_local_drug_code_closes_the_gap_it_closes_under_a_standard_code():
    content = content_of(drug('drug = "spironolactone"\nstrength_mg = 25\nclass = "mra"'))
    resources = [*without_an_mra(4.5), local_order("T1")]
    assert said(assessed(CONTENT, *resources), "start-mra") == "open/start"
    assert said(assessed(content, *resources), "start-mra") == "met"


def test_a_local_drug_code_without_a_strength_leaves_a_dose_in_tablets_unknown():
    (course,) = record_of(content_of(drug('drug = "spironolactone"')), patient(), local_order("T1"))["courses"]
    assert (course["drug"], course["daily_dose_mg"]) == ("spironolactone", None)


def test_a_local_code_of_a_combination_gives_a_course_for_each_part():
    parts = 'parts = [{ drug = "lisinopril", strength_mg = 20 }, { drug = "hydrochlorothiazide", strength_mg = 12.5 }]'
    courses = record_of(content_of(drug(parts)), patient(), local_order("T1"))["courses"]
    assert {(c["drug"], c["daily_dose_mg"]) for c in courses} == {("lisinopril", 20), ("hydrochlorothiazide", 12.5)}
    assert {c["part_of"] for c in courses} == {"lisinopril/hydrochlorothiazide"}


def test_the_lowest_tablet_of_the_arni_is_50_mg_of_both_parts():
    """Sacubitril 24 mg and valsartan 26 mg (US label)."""
    content = content_of(drug('drug = "sacubitril/valsartan"\nstrength_mg = 50'))
    (course,) = record_of(content, patient(), local_order("T1"))["courses"]
    assert (course["drug_class"], course["daily_dose_mg"]) == ("arni", 50)


def test_a_standard_code_the_content_does_not_know_may_be_given_under_any_address_of_its_system():
    text = '[[code.drug]]\nsystem = "urn:oid:2.16.840.1.113883.6.88"\ncode = "99999999"\ndrug = "eplerenone"\n'
    concept = {"coding": [{"system": "http://www.nlm.nih.gov/research/umls/rxnorm", "code": "99999999"}]}
    (course,) = record_of(content_of(text), patient(), order("x", 25, since="2025-11-01", concept=concept))["courses"]
    assert course["drug"] == "eplerenone"


def in_house_potassium(value: float, *, unit: str | None) -> dict[str, Any]:
    code = {"coding": [{"system": LABORATORY, "code": "KPL"}]}
    quantity = {"value": value, **({"unit": unit} if unit else {})}
    return potassium(value, DAY, code=code, valueQuantity=quantity)


ANALYTE = f'[[code.analyte]]\nsystem = "{LABORATORY}"\ncode = "KPL"\nanalyte = "potassium"\n'


def test_a_local_observation_code_is_recognised():
    resources = patient(), in_house_potassium(4.7, unit="mmol/L")
    assert record_of(CONTENT, *resources)["measurements"] == []
    (measured,) = record_of(content_of(ANALYTE), *resources)["measurements"]
    assert (measured["analyte"], measured["value"]) == ("potassium", 4.7)


def test_a_value_without_unit_counts_in_the_unit_the_site_says_its_system_leaves_out():
    resources = patient(), in_house_potassium(4.7, unit=None)
    assert record_of(content_of(ANALYTE), *resources)["measurements"] == []
    (measured,) = record_of(content_of(ANALYTE + '[units]\npotassium = "mmol/L"\n'), *resources)["measurements"]
    assert (measured["value"], measured["unit"]) == (4.7, "mmol/L")
    assert "site profile" in measured["note"]


def test_a_unit_that_is_sent_beats_the_one_the_site_says_is_left_out():
    content = content_of(ANALYTE + '[units]\npotassium = "mmol/L"\n')
    (measured,) = record_of(content, patient(), in_house_potassium(18.0, unit="mg/dL"))["measurements"]
    assert (measured["value"], measured["reported"]["unit"]) == (4.6, "mg/dL")


@pytest.mark.parametrize(("k", "outcome"), [(4.8, "open/start"), (4.9, "blocked")])
def test_a_stricter_potassium_limit_blocks_an_mra_on_its_own_two_sides(k, outcome):
    content = content_of("[limits]\nmra-potassium-block = 4.8\n")
    assert said(assessed(CONTENT, *without_an_mra(k)), "start-mra") == "open/start"
    assert said(assessed(content, *without_an_mra(k)), "start-mra") == outcome


def test_a_card_that_rests_on_a_changed_limit_cites_the_profile_and_the_number_it_replaced():
    content = content_of("[limits]\nmra-potassium-block = 4.8\n")
    (basis,) = [b for b in card(assessed(content, *without_an_mra(4.9)), "start-mra")["basis"] if b["source"] == "site"]
    assert basis["title"] == "Site profile of Tarnwick Lakes Health Network, version 7"
    assert basis["locator"] == "limit mra-potassium-block: 4.8 mmol/L in place of 5"
    assert (basis["checked"], basis["kind"]) == ("read", "policy")


def test_a_looser_limit_with_a_reason_holds_and_the_reason_is_cited():
    """Systolic pressure 97: between the site's 95 and the content's 100 mmHg."""
    text = '[limits]\nace-inhibitor-arb-systolic-review = { value = 95, reason = "nurse-led visits" }\n'
    content = content_of(text)
    resources = [r for r in without_an_mra(4.5) if "sacubitril" not in r["id"] and r["id"] != f"pressure-{DAY}"]
    resources.append(pressure(97, 60, DAY))
    key = "ace-inhibitor-arb-systolic-review"
    assert key in finding(assessed(CONTENT, *resources), "start-ras-inhibitor")["limits"]
    assert key not in finding(assessed(content, *resources), "start-ras-inhibitor")["limits"]
    locator = content.wording.limit_bases[key].locator
    assert locator == f"limit {key}: 95 mm[Hg] in place of 100 (nurse-led visits)"


def test_a_changed_limit_under_treatment_lowers_the_drug_sooner():
    content = content_of("[limits]\nmra-potassium-lower = 5.3\n")
    resources = [*without_an_mra(5.3), order("spironolactone", 25, since="2025-06-01")]
    assert said(assessed(CONTENT, *resources), "lower-dose", "spironolactone") == "met"
    assert said(assessed(content, *resources), "lower-dose", "spironolactone") == "open/lower"


def test_a_creatinine_limit_given_in_one_unit_is_compared_in_that_unit_only():
    """The content prints 266 umol/L and 3.0 mg/dL; of a site that says 250, the old 3.0 must not stay behind.

    2.9 mg/dL x 88.4 = 256 umol/L: above 250, below 266.
    """
    content = content_of("[limits]\nace-inhibitor-arb-creatinine-lower = 250\n")
    resources = [patient(), problem("heart failure", "2024-01-10"), lvef(30, "2025-10-01"), egfr(24, DAY)]
    resources += [creatinine(2.9, DAY), potassium(4.4, DAY), order("enalapril", 10, 2, since="2024-06-01")]
    assert said(assessed(CONTENT, *resources), "lower-dose", "enalapril") == "met"
    assert said(assessed(content, *resources), "lower-dose", "enalapril") == "open/lower"


def test_a_changed_value_out_of_range_asks_for_attention_sooner():
    content = content_of("[limits]\negfr-low = 45\n")
    resources = patient(), problem("heart failure", "2024-01-10"), egfr(40, DAY)
    assert said(assessed(CONTENT, *resources), "lab-out-of-range", "egfr") == "met"
    assert said(assessed(content, *resources), "lab-out-of-range", "egfr").startswith("open/")


def test_a_limit_that_repeats_the_number_of_the_content_still_rests_on_its_source():
    content = content_of("[limits]\nmra-potassium-block = 5.0\n")
    assert content.tables.limits == CONTENT.tables.limits
    assert content.wording.limit_bases == CONTENT.wording.limit_bases


def test_an_earlier_repeat_makes_the_blood_test_of_a_steady_mra_due():
    """Last test 1 December, steady since June: half a year in the content, 91 days (2 March) in the profile."""
    text = "[schedule]\nmra-steady = { opens_after_days = 75, due_after_days = 91, grace_days = 14 }\n"
    resources = [r for r in without_an_mra(4.5) if r["resourceType"] != "Observation" or "nyha" in r["id"]]
    resources = [r for r in resources if "sacubitril" not in r["id"]]
    resources += [lvef(30, "2025-10-01"), potassium(4.5, "2025-12-01"), creatinine(1.0, "2025-12-01")]
    resources.append(order("spironolactone", 25, since="2025-06-01"))
    rule = "check-potassium-creatinine"
    assert said(assessed(CONTENT, *resources), rule, "spironolactone") == "met"
    answer = finding(assessed(content_of(text), *resources), rule, "spironolactone")
    assert (answer["outcome"], answer["due"]["due_by"]) == ("open", "2026-03-02")


def test_days_that_a_profile_leaves_out_stay_as_they_are():
    before = next(row for row in CONTENT.tables.checks if row.id == "mra-start-week-4")
    content = content_of('[schedule]\nmra-start-week-4 = { due_after_days = 28, reason = "clinic days" }\n')
    after = next(row for row in content.tables.checks if row.id == "mra-start-week-4")
    assert (after.opens_after_days, after.grace_days) == (before.opens_after_days, before.grace_days)
    assert after.due_after_days == 28
    assert content.wording.limit_bases["mra-start-week-4"].locator == (
        "check mra-start-week-4: day 21 to 28, grace 7 days in place of day 21 to 35, grace 7 days (clinic days)"
    )


def test_a_rule_switched_off_makes_no_card_and_is_named_with_the_content():
    content = with_site(CONTENT, read_site(b'rules_off = ["start-mra"]\n' + HEAD.encode(), name="profile.toml"))
    whole = assess(bundle(*without_an_mra(4.5)), content, as_of=parse_as_of(TODAY, UTC), trace=True)
    (answer,) = whole["assessments"]
    assert card(assessed(CONTENT, *without_an_mra(4.5)), "start-mra")
    assert all(c["rule"] != "start-mra" for c in (*answer["cards"], *answer["findings"]))
    assert whole["content"]["rules_off"] == ["start-mra"]


def test_a_tier_of_the_site_decides_where_a_card_stands():
    content = content_of('[tiers]\n"start-mra.start" = "act"\n')
    assert card(assessed(CONTENT, *without_an_mra(4.5)), "start-mra")["tier"] == "plan"
    assert card(assessed(content, *without_an_mra(4.5)), "start-mra")["tier"] == "act"


def test_the_tier_of_a_severity_is_for_the_site_to_choose():
    content = content_of('[tiers]\n"severity.caution" = "plan"\n')
    resources = patient(), problem("heart failure", "2024-01-10"), potassium(5.2, DAY)
    assert card(assessed(CONTENT, *resources), "lab-out-of-range")["tier"] == "note"
    assert card(assessed(content, *resources), "lab-out-of-range")["tier"] == "plan"


def test_a_headline_of_the_site_is_filled_in_like_the_one_it_replaces():
    content = content_of('[headlines]\n"start-mra.start" = "Tarnwick pathway 3: start {drug} {dose}"\n')
    shown = card(assessed(content, *without_an_mra(4.5)), "start-mra")["headline"]
    assert shown == "Tarnwick pathway 3: start spironolactone 25 mg once a day"


def test_a_caution_of_the_site_takes_the_place_of_the_contents():
    content = content_of('[cautions]\nstart-mra = "Leaflet TL-7 first."\n')
    cautions = card(assessed(content, *without_an_mra(4.5)), "start-mra")["cautions"]
    assert "Leaflet TL-7 first." in cautions
    assert CONTENT.wording.cautions["start-mra"] not in cautions


SIGN_OFF = '[sign_off]\nwho = "Dr Ilse Marrow"\nwhen = {when}\ncontent_version = "{version}"\n'


@pytest.mark.parametrize("when", ["2026-12-01", '"2026-12-01"'], ids=["date", "text"])
def test_a_sign_off_takes_the_unsigned_notice_off_every_card(when):
    content = content_of(SIGN_OFF.format(when=when, version=CONTENT.version))
    for one, is_signed in ((CONTENT, False), (content, True)):
        for shown in assessed(one, *without_an_mra(4.5))["cards"]:
            said_unsigned = any("not clinically signed off" in caution for caution in shown["cautions"])
            assert said_unsigned is not is_signed
            assert any("by Dr Ilse Marrow on 2026-12-01" in caution for caution in shown["cautions"]) is is_signed
    whole = assess(bundle(*without_an_mra(4.5)), content, as_of=parse_as_of(TODAY, UTC))
    assert whole["content"]["signed_off"] == "Dr Ilse Marrow, 2026-12-01"
    assert whole["content"]["notice"].endswith("Advice for licensed clinicians; local policy and the prescriber decide.")


def test_a_profile_without_a_sign_off_leaves_the_content_unsigned():
    content = content_of("")
    assert content.signed_off is None
    assert content.wording.notice == CONTENT.wording.notice


def test_another_region_brings_the_rows_of_that_region():
    """Nebivolol closes the beta-blocker gap by the European list only (ESC guideline 2021; not in the US measure)."""
    resources = [r for r in without_an_mra(4.5) if "bisoprolol" not in r["id"]]
    resources.append(order("nebivolol", 10, since="2025-06-01"))
    assert said(assessed(content_of('region = "us"\n'), *resources), "start-beta-blocker") == "open/switch"
    assert said(assessed(content_of('region = "esc"\n'), *resources), "start-beta-blocker") == "met"


def test_the_zone_of_the_site_is_handed_on():
    assert content_of('zone = "America/Chicago"\n').zone == "America/Chicago"


def test_the_catalogue_prints_the_numbers_of_the_site():
    content = content_of("[limits]\nmra-potassium-block = 4.8\n")
    rows = {row["id"]: row for rule in catalogue(content) if rule["rule"] == "start-mra" for row in rule["rows"]}
    assert rows["mra-potassium-block"]["says"] == "potassium above 4.8 mmol/L: block"
    assert rows["mra-potassium-block"]["source"] == "site"


def test_an_order_is_checked_with_the_limits_of_the_site():
    content = content_of("[limits]\nmra-potassium-block = 4.8\n")
    resources = [*without_an_mra(4.9), order("spironolactone", 25, since=TODAY, status="draft")]
    whole = check_orders(bundle(*resources), content, as_of=parse_as_of(TODAY, UTC))
    (mine,), (others,) = (one["orders"] for one in (whole["checks"][0], order_check_of(*resources, as_of=TODAY)))
    assert (mine["verdict"], others["verdict"]) == ("cards", "closes")


# The example, which uses everything.


def test_the_example_profile_uses_every_part_there_is():
    site = read_site(TARNWICK.read_bytes(), name=TARNWICK.name)
    for part in site.__dataclass_fields__:
        assert getattr(site, part), f"the example does not show {part}"


@cache
def registry() -> Registry[Any]:
    documents = [json.loads(published(f"schemas/{name}.schema.json")) for name in ("assessment", "card")]
    return Registry().with_resources((one["$id"], Resource.from_contents(one)) for one in documents)


def test_what_is_printed_under_the_example_profile_keeps_to_the_published_schema_and_never_varies():
    """For each written patient: same bytes from a profile read twice."""
    one, other = (with_site(CONTENT, read_site(TARNWICK.read_bytes(), name="t")) for _ in range(2))
    schema = json.loads(published("schemas/assessment.schema.json"))
    check = Draft202012Validator(schema, registry=registry())
    for name, (data, day) in written_patients().items():
        answers = [orjson.dumps(assess(data, content, as_of=parse_as_of(day, UTC))) for content in (one, other)]
        assert answers[0] == answers[1], name
        assert [error.message for error in check.iter_errors(orjson.loads(answers[0]))] == [], name


def test_the_content_itself_is_left_as_it_was():
    before = assessed(CONTENT, *without_an_mra(4.5))
    with_site(CONTENT, read_site(TARNWICK.read_bytes(), name="t"))
    assert assessed(CONTENT, *without_an_mra(4.5)) == before


def test_an_answer_names_the_profile_its_version_and_the_hash_of_its_bytes():
    """SHA-256 of the bytes, its first 12 hexadecimal digits; a comment more is another profile."""
    one, other = (content_of(text).site for text in ("", "# reviewed\n"))
    assert one is not None
    assert one.startswith("Tarnwick Lakes Health Network 7 ")
    assert len(one.rsplit(" ", 1)[1]) == 12
    assert one != other


def test_a_second_profile_is_not_laid_over_the_first():
    with pytest.raises(ValueError, match="before"):
        with_site(content_of(""), profile(""))


# What stands for the severity table: rules whose tier a profile cannot set by answer.


def test_every_open_answer_of_a_rule_whose_tier_a_profile_cannot_set_has_a_severity():
    from cds.content.site_overlay import _BY_SEVERITY

    graded: dict[str, set[bool]] = {}
    for data, day in written_patients().values():
        for one in assess(data, CONTENT, as_of=parse_as_of(day, UTC), trace=True)["assessments"]:
            tiers = set(CONTENT.wording.tier_of_severity.values())
            for shown in one["cards"]:
                graded.setdefault(shown["rule"], set()).add(shown["tier"] in tiers)
    assert graded.keys() & _BY_SEVERITY
