"""What a health system may change by its profile, what it may not, and how it is told.

Profiles and patients are invented. A schedule, limit or tier written here shows the form and is no recommendation.
"""

from __future__ import annotations

import json
import tomllib
from dataclasses import replace
from datetime import UTC
from pathlib import Path
from typing import Any

import orjson
import pytest
from asking import card, finding, said
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
    sodium,
)
from expectations import AS_OF, PATIENTS
from published import faults

from cds.assessment import assess, check_orders, describe_records
from cds.cards.card import LONGEST_HEADLINE, TIERS
from cds.clinical.evaluate import evaluate
from cds.content.catalogue import catalogue
from cds.content.load import Content, load_content
from cds.content.published import published
from cds.content.site import SCHEMA, SiteProfile, SiteProfileError, as_json, read_site
from cds.content.site_overlay import with_site
from cds.errors import CdsError
from cds.fhir.build_record import build_record
from cds.fhir.bundle import split_by_patient
from cds.fhir.dates import parse_as_of
from cds.fhir.reading import COMMAND_LINE_LIMITS, read_json

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
    return {**potassium(value, DAY), "code": code, "valueQuantity": quantity}


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
    resources = patient(), problem("heart failure", "2024-01-10"), sodium(133, DAY)
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
    assert whole["content"]["notice"].endswith(
        "Advice for licensed clinicians; local policy and the prescriber decide."
    )


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
    stood_against = []
    for one in (CONTENT, content):
        (check,) = check_orders(bundle(*resources), one, as_of=parse_as_of(TODAY, UTC))["checks"]
        stood_against.append(
            [c["headline"] for order in check["orders"] for c in order["cards"] if "4.9" in c["headline"]]
        )
    assert stood_against[0] == []
    assert len(stood_against[1]) == 1


# The example, which uses everything.


def test_the_example_profile_uses_every_part_there_is():
    site = read_site(TARNWICK.read_bytes(), name=TARNWICK.name)
    for part in site.__dataclass_fields__:
        assert getattr(site, part), f"the example does not show {part}"


def test_what_is_printed_under_the_example_profile_keeps_to_the_published_schema_and_never_varies():
    """For each written patient: same bytes from a profile read twice."""
    one, other = (with_site(CONTENT, read_site(TARNWICK.read_bytes(), name="t")) for _ in range(2))
    for folder in sorted(PATIENTS.iterdir()):
        data, moment = (folder / "bundle.json").read_bytes(), parse_as_of(AS_OF, UTC)
        answers = [orjson.dumps(assess(data, content, as_of=moment)) for content in (one, other)]
        assert answers[0] == answers[1], folder.name
        assert faults("assessment", orjson.loads(answers[0])) == [], folder.name


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


# What may not be.


@pytest.mark.parametrize("rule", ["stop-harmful-drug", "interaction", "lab-out-of-range", "lower-dose"])
def test_every_open_answer_has_a_severity_where_a_profile_cannot_set_the_tier_by_rule(rule):
    answers = {answer for known, answer in CONTENT.wording.cards if known == rule and answer != "unknown"}
    for answer in answers:
        with pytest.raises(SiteProfileError, match="comes from its severity"):
            content_of(f'[tiers]\n"{rule}.{answer}" = "danger"\n')
    for folder in PATIENTS.iterdir():
        split = split_by_patient(
            read_json((folder / "bundle.json").read_bytes(), COMMAND_LINE_LIMITS), COMMAND_LINE_LIMITS
        )
        for one in split.patients:
            record = build_record(one, CONTENT.codes, UTC).record
            found = evaluate(record, CONTENT.tables, as_of=parse_as_of(AS_OF, UTC)) if record is not None else ()
            assert all(f.severity for f in found if f.rule == rule and f.outcome == "open"), folder.name


# A profile that departs from the schema: what is written, the key that is named, what is wrong, the way out.
AGAINST_THE_SCHEMA = [
    ("[sit]", "sit", "is no key we know", "Did you mean 'site'?"),
    ("[site]", "site.name", "is missing", "The name of the health system"),
    ("[site]\nname = 7", "site.name", "must be a text", "one line"),
    ("[site]\nname = ''", "site.name", "is empty", "one line"),
    ('[site]\nname = "two\\nlines"', "site.name", "is not in the form expected", "one line"),
    (f"[site]\nname = '{'x' * 101}'", "site.name", "is longer than 100 characters", "Correct it."),
    (f"{HEAD}zon = 'UTC'", "site.zon", "is no key we know", "Did you mean 'zone'?"),
    ("site = 'Tarnwick'", "site", "must be a table", "name and version"),
    ("[site]\nversion = 'a b'", "site.version", "is not in the form expected", "no spaces"),
    (
        f"{HEAD}rules_off = ['interaction']",
        "site.rules_off",
        "TOML counts it to the table site",
        "at the top of the file",
    ),
    (f"{HEAD}[limits]\nrules_off = []", "limits.rules_off", "TOML counts it to the table limits", "at the top"),
    (f"rules_off = 'interaction'\n{HEAD}", "rules_off", "must be a list", "ids of rules"),
    (f"rules_off = ['interaction', 'interaction']\n{HEAD}", "rules_off", "names one of its items twice", "Correct it."),
    (f"rules_off = [1]\n{HEAD}", "rules_off[0]", "must be a text", "`gdmt-cards rules` lists"),
    (f"{HEAD}[code.drug]\nsystem = 'x'", "code.drug", "must be a list", "[[code.drug]]"),
    (f"{HEAD}[[code.drug]]\ncode = '1'\ndrug = 'x'", "code.drug[0].system", "is missing", "exactly as the site's data"),
    (f"{HEAD}[[code.drug]]\nsystem = 'x'\ncode = 417\ndrug = 'x'", "code.drug[0].code", "must be a text", "in quotes"),
    (f"{HEAD}[[code.drug]]\nsystem = 'x'\ncode = ' 1'\ndrug = 'x'", "code.drug[0].code", "the form", "without spaces"),
    (f"{HEAD}[[code.drug]]\nsystem = 'x'\ncode = '1'", "code.drug[0]", "has neither drug nor parts", "parts in place"),
    (
        HEAD + drug("drug = 'x'\nparts = [{drug = 'y'}, {drug = 'z'}]"),
        "code.drug[0]",
        "has both drug and parts",
        "parts",
    ),
    (
        HEAD + drug("strength_mg = 5\nparts = [{drug = 'y'}, {drug = 'z'}]"),
        "code.drug[0]",
        "has strength_mg or class beside parts",
        "the part it belongs to",
    ),
    (HEAD + drug("parts = [{drug = 'y'}]"), "code.drug[0].parts", "has fewer than 2 items", "two to six"),
    (HEAD + drug("drug = 'x'\nstrength_mg = '25 mg'"), "code.drug[0].strength_mg", "must be a number", "Milligrams"),
    (HEAD + drug("drug = 'x'\nstrength_mg = 0"), "code.drug[0].strength_mg", "is too small", "Milligrams"),
    (HEAD + drug("drug = 'x'\nstrenght_mg = 25"), "code.drug[0].strenght_mg", "is no key we know", "'strength_mg'?"),
    (f"{HEAD}[[code.analyte]]\nsystem = 'x'\ncode = 'K'", "code.analyte[0].analyte", "is missing", "What is measured"),
    (f"{HEAD}[units]\npotassium = 1", "units.potassium", "must be a text", "UCUM"),
    (f"{HEAD}[units]\nPotassium = 'mmol/L'", "units.Potassium", "is not in the form expected", "An analyte"),
    (
        f"{HEAD}[limits]\nmra-potassium-block = '4.8'",
        "limits.mra-potassium-block",
        "a number or a table",
        "unit of the row",
    ),
    (f"{HEAD}[limits]\nmra-potassium-block = -1", "limits.mra-potassium-block", "is too small", "unit of the row"),
    (f"{HEAD}[limits]\nmra-potassium-block = inf", "limits.mra-potassium-block", "is too large", "unit of the row"),
    (f"{HEAD}[limits]\nmra-x = {{ reason = 'y' }}", "limits.mra-x.value", "is missing", "A number"),
    (f"{HEAD}[limits]\nmra-x = {{ value = 4, reasons = 'y' }}", "limits.mra-x.reasons", "no key we know", "'reason'?"),
    (
        f"{HEAD}[limits]\nmra-x = {{ value = 4, reason = '' }}",
        "limits.mra-x.reason",
        "is empty",
        "Why the site departs",
    ),
    (f"{HEAD}[schedule]\nmra-steady = 91", "schedule.mra-steady", "must be a table", "due_after_days"),
    (f"{HEAD}[schedule]\nmra-steady = {{}}", "schedule.mra-steady", "changes nothing", "at least one of"),
    (
        f"{HEAD}[schedule]\nmra-steady = {{ grace_days = 1.5 }}",
        "schedule.mra-steady.grace_days",
        "a whole number",
        "days",
    ),
    (
        f"{HEAD}[schedule]\nmra-steady = {{ grace_days = -1 }}",
        "schedule.mra-steady.grace_days",
        "is too small",
        "from 0",
    ),
    (f"{HEAD}[schedule]\nmra-steady = {{ due = 9 }}", "schedule.mra-steady.due", "is no key we know", "due_after_days"),
    (f"{HEAD}[tiers]\n'start-mra.start' = 'dangr'", 'tiers."start-mra.start"', "must be one of danger", "'danger'?"),
    (f"{HEAD}[tiers]\nstart-mra.start = 'act'", "tiers.start-mra", "is a table", 'in quotes: "start-mra.start"'),
    (f"{HEAD}[headlines]\n'start-mra.start' = ''", 'headlines."start-mra.start"', "is empty", "One line"),
    (
        f"{HEAD}[headlines]\n'start-mra.start' = 'Start {{patient}}'",
        'headlines."start-mra.start"',
        "the form",
        "{drug}",
    ),
    (f"{HEAD}[headlines]\n'start-mra.start' = '{{drug.x}}'", 'headlines."start-mra.start"', "the form", "{drug}"),
    (f"{HEAD}[headlines]\n'start-mra.start' = 'Start {{drug'", 'headlines."start-mra.start"', "the form", "{drug}"),
    (f"{HEAD}[headlines]\n'a.b' = '{'x' * 121}'", 'headlines."a.b"', "is longer than 120 characters", "One line"),
    (f"{HEAD}[cautions]\nstart-mra = '   '", "cautions.start-mra", "is not in the form expected", "One line"),
    (f"{HEAD}[sign_off]\nwho = 'Dr Marrow'", "sign_off.when", "is missing", "A date"),
    (f"{HEAD}[sign_off]\nwhen = 2026-12-01T09:00:00", "sign_off.when", "is no date of the calendar", "A date"),
    (f"{HEAD}[sign_off]\nwhen = '2026-02-30'", "sign_off.when", "is no date of the calendar", "2026-11-20"),
    (f"{HEAD}[sign_off]\ncontent_version = 2026.1", "sign_off.content_version", "must be a text", "in quotes"),
]
# A profile in good form, about something that does not exist or may not be.
AGAINST_THE_CONTENT = [
    ("region = 'uk'", "site.region", "'uk' is no region of the content", "Known are esc, us"),
    ("zone = 'America/Chicgo'", "site.zone", "is no time zone", "IANA"),
    ("zone = '../etc/passwd'", "site.zone", "is no time zone", "IANA"),
    (drug("drug = 'spironolacton'"), "code.drug[0].drug", "no single drug the content knows", "mean 'spironolactone'?"),
    (drug("drug = 'torsemide'"), "code.drug[0].drug", "no single drug", "Here it is called 'torasemide'."),
    (drug("drug = 'Eplerenone'"), "code.drug[0].drug", "no single drug", "Here it is called 'eplerenone'."),
    (drug("drug = 'lisinopril/hydrochlorothiazide'"), "code.drug[0].drug", "no single drug", "give them as parts"),
    (
        drug("drug = 'eplerenone'\nclass = 'arb'"),
        "code.drug[0].class",
        "'arb' is not the class of eplerenone: to the content it is of the class 'mra'",
        "leave class out",
    ),
    (
        drug("drug = 'eplerenone'\nclass = 'steroids'"),
        "code.drug[0].class",
        "'steroids' is not the class",
        "leave class out",
    ),
    (drug("drug = 'eplerenone'\nstrength_mg = nan"), "code.drug[0].strength_mg", "no strength", "one tablet"),
    (
        drug("drug = 'sacubitril/valsartan'\nstrength_mg = 97"),
        "code.drug[0].strength_mg",
        "is no strength of sacubitril/valsartan",
        "both parts together: 50, 100, 200",
    ),
    (
        drug("parts = [{drug = 'lisinopril'}, {drug = 'lisinopril'}]"),
        "code.drug[0].parts",
        "names a drug twice",
        "each ingredient once",
    ),
    (
        drug("parts = [{drug = 'lisinopril'}, {drug = 'hctz'}]"),
        "code.drug[0].parts[1].drug",
        "'hctz' is no single drug",
        "non-proprietary name",
    ),
    (drug("drug = 'eplerenone'") + drug("drug = 'lisinopril'"), "code.drug[1]", "a second meaning", "Keep one"),
    (
        f"[[code.drug]]\nsystem = '{ATC}'\ncode = 'C09AA02'\ndrug = 'eplerenone'",
        "code.drug[0]",
        "a code the content already knows",
        "Remove it",
    ),
    (
        f"[[code.analyte]]\nsystem = '{LOINC}'\ncode = '2823-3'\nanalyte = 'sodium'",
        "code.analyte[0]",
        "a code the content already knows",
        "Remove it",
    ),
    (ANALYTE + ANALYTE, "code.analyte[1]", "a second meaning", "Keep one"),
    (
        ANALYTE.replace('"potassium"', '"potasium"'),
        "code.analyte[0].analyte",
        "nothing the content measures",
        "'potassium'?",
    ),
    ("[units]\npotasium = 'mmol/L'", "units.potasium", "nothing the content measures", "Did you mean 'potassium'?"),
    ("[units]\npotassium = 'mmol/l'", "units.potassium", "'mmol/l' is no unit of potassium", "Did you mean 'mmol/L'?"),
    ("[limits]\nmra-potassium-blok = 4", "limits.mra-potassium-blok", "no limit of the id", "'mra-potassium-block'?"),
    (
        "[limits]\nmra-potassium-block = 5.1",
        "limits.mra-potassium-block",
        "is less safe than > 5 mmol/L",
        'reason = "..."',
    ),
    ("[limits]\nmra-egfr-block = 25", "limits.mra-egfr-block", "is less safe than <= 30", 'reason = "..."'),
    ("[limits]\nmra-potassium-stop = 6.1", "limits.mra-potassium-stop", "is less safe than >= 6", 'reason = "..."'),
    ("[limits]\nsodium-low = 130", "limits.sodium-low", "is less safe than < 135", 'reason = "..."'),
    (
        "[limits]\nmra-creatinine-lower = 2.5",
        "limits.mra-creatinine-lower",
        "is no value of creatinine that a patient can have, in umol/L",
        "The content has 221 umol/L; give the new number in the same unit.",
    ),
    ("[limits]\nmra-potassium-block = nan", "limits.mra-potassium-block", "is no value of potassium", "same unit"),
    (
        "[limits]\npotassium-emergency = 6.2",
        "limits.potassium-emergency",
        "would contradict the caution that goes with it",
        "Write a caution of the site",
    ),
    (
        '[limits]\nmra-potassium-block = 4.8\n"limit.mra-potassium-block" = 4.7',
        'limits."limit.mra-potassium-block"',
        "another key changes too",
        "Keep one",
    ),
    (
        '[limits]\n"out_of_range.mra-potassium-block" = 4.8',
        'limits."out_of_range.mra-potassium-block"',
        "no limit of the id",
        "`gdmt-cards rules` lists",
    ),
    (
        "[schedule]\nmra-stead = { grace_days = 9 }",
        "schedule.mra-stead",
        "no timed check",
        "Did you mean 'mra-steady'?",
    ),
    (
        "[schedule]\nmra-steady = { due_after_days = 91 }",
        "schedule.mra-steady",
        "would open on day 150, after it is due on day 91",
        "that fit together",
    ),
    ("[tiers]\n'start-mra.stat' = 'act'", 'tiers."start-mra.stat"', "no card has the words", "'start-mra.start'?"),
    ("[tiers]\n'severity.mayor' = 'act'", 'tiers."severity.mayor"', "no card has the words", "'severity.major'?"),
    (
        "[tiers]\n'severity.contraindicated' = 'act'",
        'tiers."severity.contraindicated"',
        "less than a danger",
        "Remove it",
    ),
    ("[tiers]\n'interaction.stop' = 'note'", 'tiers."interaction.stop"', "changes nothing", '"severity.major"'),
    (
        "[headlines]\n'start-mar.start' = 'x'",
        'headlines."start-mar.start"',
        "no card has the words",
        "'start-mra.start'?",
    ),
    ("[cautions]\nstart-mar = 'x'", "cautions.start-mar", "no caution of the key", "Did you mean 'start-mra'?"),
    (
        SIGN_OFF.format(when="2025-11-01", version="2025.11.0"),
        "sign_off.content_version",
        f"the sign-off is for content 2025.11.0, but the content is {CONTENT.version}",
        "or remove [sign_off]",
    ),
]


def refused(text: str) -> SiteProfileError:
    """What reading these bytes, or laying them over the content, is refused with."""
    with pytest.raises(SiteProfileError) as caught:
        with_site(CONTENT, read_site(text.encode(), name="profile.toml"))
    return caught.value


def schema_faults(text: str) -> list[str]:
    """What any validator would say of the published schema and the parsed profile."""
    return faults("site-profile", as_json(tomllib.loads(text)))


@pytest.mark.parametrize(("text", "key", "problem", "fix"), AGAINST_THE_SCHEMA)
def test_a_departure_from_the_schema_is_refused_with_its_key_and_the_way_out(text, key, problem, fix):
    told = {one.key: one for one in refused(text).problems}
    assert problem in told[key].problem
    assert fix in told[key].fix
    assert schema_faults(text)


@pytest.mark.parametrize(("text", "key", "problem", "fix"), AGAINST_THE_CONTENT)
def test_what_only_the_content_can_tell_is_refused_with_its_key_and_the_way_out(text, key, problem, fix):
    error = refused(HEAD + text)
    (told,) = error.problems
    assert told.key == key
    assert problem in told.problem
    assert fix in told.fix
    assert schema_faults(HEAD + text) == []
    assert str(error) == f"profile.toml: {told.key}: {told.problem}.\n{told.fix}"


def test_a_rule_that_does_not_exist_cannot_be_switched_off():
    (told,) = refused(f"rules_off = ['interaction', 'start-mar']\n{HEAD}").problems
    assert (told.key, told.problem) == ("rules_off[1]", "there is no rule 'start-mar'")
    assert told.fix.endswith("Did you mean 'start-mra'?")


def test_an_id_of_two_limits_is_refused_until_the_table_is_named():
    """The limits of a start and under treatment may share an id: each can be meant alone."""
    row = replace(CONTENT.tables.safety.treatment_limits[0], id="mra-potassium-block")
    safety = replace(CONTENT.tables.safety, treatment_limits=(row,))
    content = replace(CONTENT, tables=replace(CONTENT.tables, safety=safety))
    with pytest.raises(SiteProfileError, match=r'Write "limit\.mra-potassium-block" or "treatment_limit\.mra-p'):
        with_site(content, profile("[limits]\nmra-potassium-block = 4.8\n"))
    made = with_site(content, profile('[limits]\n"treatment_limit.mra-potassium-block" = 5.9\n')).tables
    assert made.limits == content.tables.limits
    assert made.safety.treatment_limits[0].value == 5.9


@pytest.mark.parametrize(
    ("data", "line", "problem"),
    [
        (b"[site]\nname = Tarnwick\n", "line 2", "is not TOML: "),
        (b'[site]\nname = "a"\nname = "b"\n', "line 3", "is not TOML: "),
        (b'[site]\n\nname = "a', "line 3", "is not TOML: "),
        (b'[site]\nname = "T\xe9"\n', "line 2", "is not UTF-8 text"),
        (b"x = " + b"[" * 100_000, "the whole profile", "nests its lists or tables too deeply"),
    ],
)
def test_what_is_no_toml_is_refused_with_its_line(data, line, problem):
    with pytest.raises(SiteProfileError) as caught:
        read_site(data, name="profile.toml")
    (told,) = caught.value.problems
    assert told.key == line
    assert told.problem.startswith(problem)
    assert str(caught.value).startswith(f"profile.toml: {line}: ")


def test_a_file_of_an_editor_that_writes_a_byte_order_mark_and_carriage_returns_is_read():
    assert read_site(b"\xef\xbb\xbf" + HEAD.replace("\n", "\r\n").encode(), name="profile.toml").version == "7"


def test_all_that_is_wrong_is_told_at_once_but_never_without_end():
    many = "".join(f"{HEAD}[limits]\n" if n == 0 else f"x-{n} = '?'\n" for n in range(31))
    error = refused(many)
    assert len(error.problems) == 30
    assert str(error).endswith("profile.toml: and 10 more problems.")


def test_a_profile_that_cannot_be_used_is_an_error_of_ours_with_an_exit_code_of_its_own():
    error = refused("[site]")
    assert isinstance(error, CdsError)
    assert (error.exit_code, error.http_status) == (22, 500)


def test_the_schema_knows_the_same_tiers_and_headline_fields_as_the_content():
    schema = json.loads(published(SCHEMA))["properties"]
    assert tuple(schema["tiers"]["additionalProperties"]["enum"]) == TIERS
    assert schema["headlines"]["additionalProperties"]["maxLength"] == LONGEST_HEADLINE
    for words in CONTENT.wording.cards.values():
        assert schema_faults(f"{HEAD}[headlines]\n'a.b' = {json.dumps(words.headline)}\n") == []


def test_every_id_of_the_content_can_be_written_in_a_profile():
    tables = CONTENT.tables
    limits = (*tables.limits, *tables.safety.treatment_limits, *tables.safety.out_of_range)
    lines = [HEAD, "[limits]", *(f"{key} = 1" for key in dict.fromkeys(row.id for row in limits))]
    lines += ["[schedule]", *(f"{row.id} = {{ grace_days = 1 }}" for row in tables.checks)]
    lines += ["[cautions]", *(f"{key} = 'x'" for key in CONTENT.wording.cautions)]
    lines += ["[tiers]", *(f"'{rule}.{answer}' = 'act'" for rule, answer in CONTENT.wording.cards)]
    assert schema_faults("\n".join(lines)) == []
