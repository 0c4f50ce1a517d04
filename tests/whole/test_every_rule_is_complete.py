"""Enumerations: whatever is added to the rules, tables or errors must come with its words, its source and its exit code."""

from __future__ import annotations

import csv
import inspect
import tomllib
from collections.abc import Iterator
from datetime import UTC
from functools import cache
from importlib.resources import files
from typing import Any

import pytest
from click.testing import CliRunner
from random_patients import written_patients

from cds import errors
from cds.assessment import assess
from cds.cli import main
from cds.clinical.evaluate import ANSWERS, RULES
from cds.clinical.order_check import ORDER_ANSWERS
from cds.content.load import load_content
from cds.fhir.dates import parse_as_of

CONTENT = load_content()
TABLES = ("doses", "harms", "interactions", "monitoring", "phenotype", "recommendations", "therapy", "treatment")
# Names of our own concepts, and one number of ours that says how old a value may be where no start depends on it.
WITHOUT_SOURCE = {"therapy": {"optional_values"}, "phenotype": {"concepts"}}
EVERY_ANSWER = {**ANSWERS, **ORDER_ANSWERS}


@cache
def table(name: str) -> dict[str, Any]:
    return tomllib.loads(files("cds.content").joinpath(f"{name}.toml").read_text(encoding="utf-8"))


def rows(name: str) -> Iterator[tuple[str, dict[str, Any]]]:
    """Every row of a table with a name a reader can find it by."""
    for key, value in table(name).items():
        if key in WITHOUT_SOURCE.get(name, ()):
            continue
        if isinstance(value, list):
            yield from ((f"{name} {key} {row.get('id', number)}", row) for number, row in enumerate(value, start=1))
        else:
            yield f"{name} {key}", value


@cache
def findings() -> tuple[dict[str, Any], ...]:
    """All findings of all written patients."""
    found = []
    for data, day in written_patients().values():
        answer = assess(data, CONTENT, as_of=parse_as_of(day, UTC), trace=True)
        found += [finding for one in answer["assessments"] for finding in one["findings"]]
    return tuple(found)


def test_every_rule_lists_its_answers_and_stands_in_the_order_of_display():
    assert len(RULES) == len(ANSWERS)
    assert sorted(CONTENT.wording.rule_order) == sorted(EVERY_ANSWER)
    assert {finding["rule"] for finding in findings()} == set(ANSWERS)


@pytest.mark.parametrize(
    ("rule", "answer"), [(rule, answer) for rule, answers in EVERY_ANSWER.items() for answer in answers]
)
def test_every_answer_of_a_rule_has_words(rule, answer):
    words = CONTENT.wording.cards[rule, answer]
    assert words.headline


def test_no_words_stand_for_an_answer_no_rule_gives():
    assert set(CONTENT.wording.cards) == {(rule, answer) for rule in EVERY_ANSWER for answer in EVERY_ANSWER[rule]}


@pytest.mark.parametrize("rule", sorted(ANSWERS))
def test_a_rule_gives_only_the_answers_it_lists(rule):
    for finding in findings():
        if finding["rule"] == rule and finding["action"] is not None:
            assert finding["action"] in ANSWERS[rule]


@pytest.mark.parametrize("rule", sorted(ANSWERS))
def test_what_a_rule_rests_on_can_be_looked_up(rule):
    wording = CONTENT.wording
    for finding in (f for f in findings() if f["rule"] == rule):
        assert set(finding["recommendations"]) <= set(wording.recommendation_bases), finding["about"]
        for key in finding["limits"]:
            assert key in wording.limit_bases, f"{rule} about {finding['about']} rests on '{key}', which has no source"


@pytest.mark.parametrize("name", TABLES)
def test_every_row_of_a_table_names_its_source_and_whether_it_was_read(name):
    sources = table("sources")
    for row_name, row in rows(name):
        if "recommendation" in row and "source" not in row:  # it rests on the recommendation it names
            assert row["recommendation"] in CONTENT.wording.recommendation_bases, row_name
            continue
        assert row.get("source") in sources, f"{row_name}: no source of sources.toml"
        assert row.get("locator"), f"{row_name}: where in the source?"
        assert row.get("checked") in ("read", "memory"), f"{row_name}: read, or from memory?"


def test_every_source_says_what_of_it_was_read():
    for key, source in table("sources").items():
        assert {"title", "citation", "year", "read"} <= set(source), key


def test_every_class_a_table_names_is_one_that_a_medicine_can_have():
    """A row about a class that no code and no class table knows could never speak."""
    known = set(table("classes")) | _classes_of_codes()
    for name in TABLES:
        for row_name, row in rows(name):
            for key, value in row.items():
                if key == "pillar" or key.endswith(("_class", "_classes")):
                    named = {value} if isinstance(value, str) else set(value)
                    assert named <= known, f"{row_name}: {key} names {sorted(named - known)}"


def _classes_of_codes() -> set[str]:
    """Every class slug of the code tables."""
    found: set[str] = set()
    folder = files("cds.content").joinpath("codes")
    for file in folder.iterdir():
        if not file.name.endswith(".csv"):
            continue
        for row in csv.DictReader(file.read_text(encoding="utf-8").splitlines()):
            for key in ("drug_class", "drug_classes", "class", "classes"):
                found |= {slug.strip() for slug in (row.get(key) or "").split(";") if slug.strip()}
    return found


@pytest.mark.parametrize("name", [name for name, _ in inspect.getmembers(errors, inspect.isclass)])
def test_every_error_has_an_exit_code_that_the_help_explains(name):
    kind = getattr(errors, name)
    if not issubclass(kind, errors.CdsError) or kind is errors.CdsError:
        return
    for command in ((), ("assess",), ("record",)):
        shown = CliRunner().invoke(main, [*command, "--help"]).output
        codes = {line.split()[0] for line in shown.partition("Exit codes:")[2].splitlines() if line.strip()}
        assert str(kind.exit_code) in codes
    assert 400 <= kind.http_status <= 599


def test_errors_of_different_kinds_have_different_exit_codes():
    kinds = [k for _, k in inspect.getmembers(errors, inspect.isclass) if issubclass(k, errors.CdsError)]
    codes = [kind.exit_code for kind in kinds]
    assert len(set(codes)) == len(codes)
