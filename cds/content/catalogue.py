"""The rule catalogue: each rule in plain words, with its numbers, its sources, what it needs and what it never does."""

from __future__ import annotations

import tomllib
from collections.abc import Iterable, Iterator
from functools import cache
from importlib.resources import files
from typing import Any

from cds.cards.card import CardBasis
from cds.clinical.evaluate import ANSWERS
from cds.clinical.order_check import ORDER_ANSWERS
from cds.clinical.readings import show
from cds.clinical.tables import ClinicalTables
from cds.content.load import Content
from cds.errors import ContentError

_KEYS = {"asks", "needs", "never"}
_SIGNS = {"<": "below", "<=": "at or below", ">": "above", ">=": "at or above"}
_PILLARS = {
    "start-ras-inhibitor": ("ace-inhibitor", "arb", "arni"),
    "start-beta-blocker": ("beta-blocker",),
    "start-mra": ("mra",),
    "start-sglt2-inhibitor": ("sglt2-inhibitor",),
    "switch-to-arni": ("arni",),
}


def catalogue(content: Content) -> list[dict[str, Any]]:
    """Describe every rule, in the order in which cards stand. Raises ContentError if a rule has no words."""
    words = _words()
    rules = {**ANSWERS, **ORDER_ANSWERS}
    for rule in rules:
        if set(words.get(rule, {})) != _KEYS:
            raise ContentError("rules.toml", rule, "lacks asks, needs or never", "Add them.")
    return [_rule(rule, words[rule], content) for rule in content.wording.rule_order]


@cache
def _words() -> dict[str, Any]:
    return tomllib.loads(files("cds.content").joinpath("rules.toml").read_text(encoding="utf-8"))


def _rule(rule: str, words: dict[str, Any], content: Content) -> dict[str, Any]:
    answers = {**ANSWERS, **ORDER_ANSWERS}[rule]
    rows = list(_rows_of(rule, content.tables))
    recommendations = [content.wording.recommendation_bases[key] for key in _recommendations_of(rule, content.tables)]
    return {
        "rule": rule,
        "asks": words["asks"],
        "needs": words["needs"],
        "never": words["never"],
        "switched_off": rule in content.rules_off,
        "cards": [
            {"answer": answer, "family": card.family, "tier": card.tier, "headline": card.headline}
            for answer in answers
            if (card := content.wording.cards.get((rule, answer))) is not None
        ],
        "recommendations": [_graded(basis) for basis in recommendations],
        "rows": [
            {"id": key, "says": says, **_source(content.wording.limit_bases[key])}
            for key, says in rows
            if key in content.wording.limit_bases
        ],
    }


def _graded(basis: CardBasis) -> dict[str, Any]:
    return {
        "recommendation": basis.recommendation,
        "words": basis.words,
        "class_of_recommendation": basis.grade,
        "level_of_evidence": basis.level,
        **_source(basis),
    }


def _source(basis: CardBasis) -> dict[str, Any]:
    return {
        "source": basis.source,
        "title": basis.title,
        "locator": basis.locator,
        "checked": basis.checked,
        "kind": basis.kind,
    }


def _recommendations_of(rule: str, tables: ClinicalTables) -> list[str]:
    found = [row.recommendation for row in tables.indications if row.rule == rule]
    found += [row.recommendation for row in tables.candidates if row.rule == rule and row.recommendation is not None]
    found += {"switch-to-arni": ["c-switch-arni"], "ejection-fraction-missing": ["lvef-known"]}.get(rule, [])
    found += {"confirm-still-taken": ["order-reconciled"]}.get(rule, [])
    return list(dict.fromkeys(found))


def _rows_of(rule: str, tables: ClinicalTables) -> Iterator[tuple[str, str]]:
    """The rows a rule holds a patient against, each with what it says."""
    safety = tables.safety
    classes = _PILLARS.get(rule)
    if classes is not None or rule == "order-limits":
        yield from _start_rows(tables, classes)
    elif rule == "stop-harmful-drug":
        yield from ((row.id, row.words) for row in safety.harms)
        yield from _limits((row for row in safety.treatment_limits if row.effect == "stop"), tables)
    elif rule == "interaction":
        yield from ((row.id, row.words) for row in safety.interactions)
    elif rule == "lab-out-of-range":
        yield from _limits(safety.out_of_range, tables)
    elif rule == "lower-dose":
        yield from _limits((row for row in safety.treatment_limits if row.effect in ("lower", "review")), tables)
    elif rule in ("raise-dose", "order-dose"):
        yield from (
            (row.id, f"{row.drug}: start {show(row.start_dose_mg)} mg, target {show(row.target_daily_mg)} mg a day")
            for row in tables.doses
        )
        if rule == "raise-dose":
            yield from _limits((row for row in safety.treatment_limits if row.effect == "no-raise"), tables)
    elif rule in ("check-potassium-creatinine", "order-tests"):
        for row in tables.checks:
            names = " and ".join(tables.analyte_names.get(test, test) for test in row.tests)
            when = f"day {row.opens_after_days} to {row.due_after_days} after the {row.trigger}"
            if row.trigger == "steady":
                when = f"every {row.due_after_days} days"
            yield row.id, f"{', '.join(row.drug_classes)}: {names} {when}, grace {row.grace_days} days"


def _start_rows(tables: ClinicalTables, classes: tuple[str, ...] | None) -> Iterator[tuple[str, str]]:
    def is_meant(row_classes: tuple[str, ...]) -> bool:
        return classes is None or not set(classes).isdisjoint(row_classes)

    yield from _limits((row for row in tables.limits if is_meant(row.drug_classes)), tables)
    for barrier in tables.barriers:
        if is_meant(barrier.drug_classes):
            yield barrier.id, f"{barrier.effect}: {barrier.words}"
    for other in tables.drug_barriers:
        if is_meant(other.drug_classes):
            yield other.id, f"{other.effect}: {other.words}"


def _limits(rows: Iterable[Any], tables: ClinicalTables) -> Iterator[tuple[str, str]]:
    """Rows that compare a value: what is compared, with which number, and what follows."""
    for row in rows:
        name = tables.analyte_names.get(row.analyte, row.analyte)
        unit = tables.unit_names.get(row.unit, row.unit)
        follows = getattr(row, "effect", None) or getattr(row, "words", "")
        rise = "rise of " if getattr(row, "is_rise_percent", False) else ""
        yield row.id, f"{rise}{name} {_SIGNS[row.sign]} {show(row.value)} {unit}: {follows}"


def as_text(rules: Iterable[dict[str, Any]]) -> str:
    """The catalogue for a terminal."""
    return "\n\n".join(_text(rule) for rule in rules)


def _text(rule: dict[str, Any]) -> str:
    lines = [rule["rule"] + (" (switched off)" if rule["switched_off"] else ""), f"  {rule['asks']}"]
    lines += [f"  needs  {need}" for need in rule["needs"]]
    lines += [f"  never  {never.removeprefix('never ')}" for never in rule["never"]]
    lines += [f"  card   {card['answer']}: {card['tier']}: {card['headline']}" for card in rule["cards"]]
    for one in rule["recommendations"]:
        grade = f"class {one['class_of_recommendation']}, level {one['level_of_evidence']}"
        lines.append(f"  by     {one['words']} ({grade}; {one['source']}, {one['locator']}; {one['checked']})")
    lines += [
        f"  row    {row['says']} [{row['id']}; {row['source']}, {row['locator']}; {row['checked']}]"
        for row in rule["rows"]
    ]
    return "\n".join(lines)


def as_markdown(rules: Iterable[dict[str, Any]]) -> str:
    """The catalogue as a document."""
    parts = ["# Rule catalogue"]
    for rule in rules:
        parts.append(f"## {rule['rule']}{' (switched off)' if rule['switched_off'] else ''}\n\n{rule['asks']}")
        parts.append("Needs: " + "; ".join(rule["needs"]) + ".")
        parts.append("\n".join(f"- {never}" for never in rule["never"]))
        graded = [
            f"| {r['words']} | {r['class_of_recommendation']} | {r['level_of_evidence']} | {r['title']}, {r['locator']} |"
            for r in rule["recommendations"]
        ]
        if graded:
            parts.append("\n".join(["| recommendation | class | level | source |", "|---|---|---|---|", *graded]))
        rows = [f"| {r['id']} | {r['says']} | {r['title']}, {r['locator']} | {r['checked']} |" for r in rule["rows"]]
        if rows:
            parts.append("\n".join(["| row | says | source | checked |", "|---|---|---|---|", *rows]))
    return "\n\n".join(parts)
