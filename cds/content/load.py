"""All content, read and checked once: clinical tables, code book, wording. Stops at any doubt (ContentError)."""

from __future__ import annotations

import hashlib
import string
import tomllib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from functools import cache
from importlib.resources import files
from typing import Any

from cds.cards.card import FAMILIES, TIERS, CardBasis, Tier
from cds.cards.replies import ReplyLimits
from cds.cards.wording import CardWords, Wording
from cds.clinical import units
from cds.clinical.evaluate import ANSWERS
from cds.clinical.harm import SEVERITIES
from cds.clinical.order_check import ORDER_ANSWERS
from cds.clinical.safety_tables import (
    Harm,
    Interaction,
    OutOfRange,
    SafetyLimits,
    SafetyTables,
    SwitchLimits,
    SwitchStart,
    TreatmentLimit,
)
from cds.clinical.tables import (
    Barrier,
    Basis,
    Candidate,
    ClinicalTables,
    ConceptGroups,
    DoseRow,
    DrugBarrier,
    DrugClass,
    Indication,
    Limit,
    Needed,
    PhenotypeLimits,
    ReactionReach,
    Recommendation,
    ScheduledCheck,
    SupplyLimits,
    Unstable,
)
from cds.content.codes import code_table_bytes, load_code_book
from cds.content.order_codes import order_codes
from cds.content.rows import Row, make_row
from cds.errors import ContentError
from cds.fhir.codes import CodeBook
from cds.fhir.drafts import OrderCodes

_TABLES = (
    "classes.toml",
    "doses.toml",
    "harms.toml",
    "interactions.toml",
    "monitoring.toml",
    "phenotype.toml",
    "recommendations.toml",
    "rules.toml",
    "sources.toml",
    "tests.toml",
    "therapy.toml",
    "treatment.toml",
    "version.toml",
    "wording.toml",
)
_HEADLINE_FIELDS = frozenset({"drug", "drugs", "subjects", "course", "tests", "why", "dose"})
_REGION = "us"  # ruling 52; a site profile may say otherwise


@dataclass(frozen=True, slots=True, kw_only=True)
class Content:
    """Everything the program knows, with its version and the SHA-256 of all its files."""

    tables: ClinicalTables
    codes: CodeBook
    wording: Wording
    order_codes: OrderCodes
    reply_limits: ReplyLimits
    version: str
    sha256: str
    site: str | None = None  # name, version and hash of the site profile laid over it
    signed_off: str | None = None  # who signed this content off, and when; nobody until a site says so
    rules_off: frozenset[str] = frozenset()
    zone: str | None = None
    default_units: Mapping[str, str] = field(default_factory=dict)  # units a site's systems leave out, by analyte


@cache
def load_content() -> Content:
    """Read and check the content that ships with the program. Raises ContentError at the first doubt."""
    raw = {name: _toml(name) for name in _TABLES}
    sources = frozenset(raw["sources.toml"])
    tables = _clinical_tables(raw, sources)
    _check_tables(tables)
    return Content(
        tables=tables,
        codes=load_code_book(),
        wording=_wording(raw, tables),
        reply_limits=_reply_limits(raw["wording.toml"]),
        order_codes=order_codes(raw["tests.toml"]),
        version=_text(raw["version.toml"], "version", "version.toml"),
        sha256=content_sha256(),
    )


def content_sha256() -> str:
    """Hash every file the content is read from, names and bytes, in the order of their names."""
    digest = hashlib.sha256()
    for name, data in sorted([*((name, _bytes(name)) for name in _TABLES), *code_table_bytes()]):
        digest.update(f"{name}\0{len(data)}\0".encode())
        digest.update(data)
    return digest.hexdigest()


def _bytes(name: str) -> bytes:
    return files("cds.content").joinpath(name).read_bytes()


def _toml(name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(_bytes(name).decode())
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ContentError(name, "the file", f"is not TOML ({type(error).__name__})", "Correct its syntax.") from error


def _text(table: Mapping[str, Any], key: str, name: str) -> str:
    value = table.get(key)
    if not isinstance(value, str) or not value:
        raise ContentError(name, key, "must be a text", "Add it.")
    return value


def _rows(
    raw: Mapping[str, Any], key: str, row_type: type[Row], table: str, sources: frozenset[str]
) -> tuple[Row, ...]:
    rows = raw.get(key)
    if not isinstance(rows, list) or not rows:
        raise ContentError(table, key, "has no rows", f"Add at least one [[{key}]].")
    made = tuple(
        make_row(row_type, row, table=table, name=f"{key} {row.get('id', position)}", sources=sources)
        for position, row in enumerate(rows, start=1)
    )
    ids = [row["id"] for row in rows if "id" in row]
    if len(set(ids)) != len(ids):
        twice = next(name for name in ids if ids.count(name) > 1)
        raise ContentError(table, f"{key} {twice}", "is there twice", "Give every row an id of its own.")
    return made


def _clinical_tables(raw: Mapping[str, dict[str, Any]], sources: frozenset[str]) -> ClinicalTables:
    therapy, phenotype, wording = raw["therapy.toml"], raw["phenotype.toml"], raw["wording.toml"]

    def rows(key: str, row_type: type[Row], table: str = "therapy.toml") -> tuple[Row, ...]:
        return _rows(raw[table], key, row_type, table, sources)

    def one(key: str, row_type: type[Row]) -> Row:
        return make_row(row_type, phenotype.get(key, {}), table="phenotype.toml", name=key, sources=sources)

    classes = {
        slug: make_row(DrugClass, {"slug": slug, **row}, table="classes.toml", name=slug, sources=sources)
        for slug, row in raw["classes.toml"].items()
    }
    recommendations = rows("recommendation", Recommendation, "recommendations.toml")
    return ClinicalTables(
        region=_REGION,
        classes=classes,
        recommendations={row.id: row for row in recommendations},
        indications=rows("indication", Indication),
        candidates=rows("candidate", Candidate),
        limits=rows("limit", Limit),
        barriers=rows("barrier", Barrier),
        drug_barriers=rows("drug_barrier", DrugBarrier),
        needed=rows("needed", Needed),
        unstable=rows("unstable", Unstable),
        optional_within_days=int(therapy["optional_values"]["within_days"]),
        reactions=rows("reaction", ReactionReach),
        doses=rows("dose", DoseRow, "doses.toml"),
        checks=rows("check", ScheduledCheck, "monitoring.toml"),
        phenotype=one("limits", PhenotypeLimits),
        concepts=one("concepts", ConceptGroups),
        supply=one("supply", SupplyLimits),
        safety=_safety_tables(raw, sources),
        analyte_names=dict(wording["analytes"]),
        unit_names=dict(wording["units"]),
    )


def _safety_tables(raw: Mapping[str, dict[str, Any]], sources: frozenset[str]) -> SafetyTables:
    treatment = raw["treatment.toml"]

    def one(key: str, row_type: type[Row]) -> Row:
        return make_row(row_type, treatment.get(key, {}), table="treatment.toml", name=key, sources=sources)

    return SafetyTables(
        harms=_rows(raw["harms.toml"], "harm", Harm, "harms.toml", sources),
        interactions=_rows(raw["interactions.toml"], "interaction", Interaction, "interactions.toml", sources),
        treatment_limits=_rows(treatment, "treatment_limit", TreatmentLimit, "treatment.toml", sources),
        out_of_range=_rows(treatment, "out_of_range", OutOfRange, "treatment.toml", sources),
        limits=one("values", SafetyLimits),
        switch_starts=_rows(treatment, "switch_start", SwitchStart, "treatment.toml", sources),
        switch=one("switch", SwitchLimits),
    )


def _check_tables(tables: ClinicalTables) -> None:
    """Hold the tables against each other: what one names, another must have."""
    named = [("indication", row.recommendation) for row in tables.indications]
    named += [("candidate", row.recommendation) for row in tables.candidates if row.recommendation is not None]
    for where, key in named:
        if key not in tables.recommendations:
            raise ContentError(
                "therapy.toml", where, f"recommendation '{key}' is not in recommendations.toml", "Add it there."
            )
    for limit in tables.limits:
        for unit in (limit.unit, limit.also_unit):
            if unit is not None and not units.is_known(limit.analyte, unit):
                raise ContentError(
                    "therapy.toml", f"limit {limit.id}", f"'{unit}' is no unit of {limit.analyte}", "Correct it."
                )
    with_classes: list[tuple[str, tuple[str, ...]]] = [("candidate", (row.drug_class,)) for row in tables.candidates]
    with_classes += [(f"limit {row.id}", row.drug_classes) for row in tables.limits]
    with_classes += [(f"barrier {row.id}", row.drug_classes) for row in tables.barriers]
    with_classes += [(f"check {row.id}", row.drug_classes) for row in tables.checks]
    for where, slugs in with_classes:
        for slug in slugs:
            if slug not in tables.classes:
                raise ContentError("therapy.toml", where, f"class '{slug}' is not in classes.toml", "Add it there.")


def _card_basis(basis: Basis, sources: Mapping[str, Any], recommendation: Recommendation | None = None) -> CardBasis:
    made = CardBasis(
        source=basis.source,
        title=sources[basis.source]["title"],
        locator=basis.locator,
        checked=basis.checked,
        kind=basis.kind,
    )
    if recommendation is None:
        return made
    return replace(
        made,
        recommendation=recommendation.id,
        words=recommendation.words,
        grade=recommendation.grade,
        level=recommendation.level,
    )


def _limit_bases(tables: ClinicalTables, sources: Mapping[str, Any]) -> dict[str, CardBasis]:
    """What every limit, barrier, schedule, dose and safety row rests on, by its id. Harm rows carry their own class."""
    rows: tuple[Limit | Barrier | DrugBarrier | ScheduledCheck | DoseRow | TreatmentLimit | OutOfRange, ...] = (
        *tables.limits,
        *tables.barriers,
        *tables.drug_barriers,
        *tables.checks,
        *tables.doses,
        *tables.safety.treatment_limits,
        *tables.safety.out_of_range,
    )
    ids = [row.id for row in rows]
    if len(set(ids)) != len(ids):
        twice = next(key for key in ids if ids.count(key) > 1)
        raise ContentError(
            "the tables", twice, "is the id of two rows", "Give every row of all tables an id of its own."
        )
    found = {row.id: _card_basis(row.basis, sources) for row in rows}
    graded: tuple[Harm | Interaction, ...] = (*tables.safety.harms, *tables.safety.interactions)
    for row in graded:
        made = _card_basis(row.basis, sources)
        found[row.id] = replace(made, recommendation=row.id, words=row.words, grade=row.grade, level=row.level)
    return found


def _tiers_of_severity(words: Mapping[str, Any]) -> dict[str, Tier]:
    tiers = words.get("tier_of_severity", {})
    for severity in SEVERITIES:
        if tiers.get(severity) not in TIERS:
            raise ContentError("wording.toml", "tier_of_severity", f"has no tier of ours for {severity}", "Add it.")
    return {severity: _one_of(tiers[severity], TIERS) for severity in SEVERITIES}


def _rule_order(words: Mapping[str, Any]) -> tuple[str, ...]:
    rules = words.get("order", {}).get("rules", [])
    if sorted(rules) != sorted({**ANSWERS, **ORDER_ANSWERS}):
        raise ContentError("wording.toml", "order.rules", "does not list every rule once", "Add or remove rules.")
    return tuple(rules)


def _wording(raw: Mapping[str, dict[str, Any]], tables: ClinicalTables) -> Wording:
    words, sources = raw["wording.toml"], raw["sources.toml"]
    cards = {
        (rule, action): _card_words(rule, action, row)
        for rule, by_action in words["cards"].items()
        for action, row in by_action.items()
    }
    for rule, answers in {**ANSWERS, **ORDER_ANSWERS}.items():
        for answer in answers:
            if (rule, answer) not in cards:
                raise ContentError("wording.toml", f"cards.{rule}", f"has no words for '{answer}'", "Add them.")
    for tier in TIERS:
        if not isinstance(words["shown_for_days"].get(tier), int):
            raise ContentError("wording.toml", "shown_for_days", f"has no number of days for {tier}", "Add it.")
    return Wording(
        cards=cards,
        cautions=dict(words["cautions"]),
        replies=dict(words["replies"]),
        decline_reasons=dict(words["decline_reasons"]),
        notice=_text(words, "notice", "wording.toml"),
        analytes=dict(words["analytes"]),
        units=dict(words["units"]),
        class_names={slug: row.name for slug, row in tables.classes.items()},
        shown_for_days=dict(words["shown_for_days"]),
        tier_of_severity=_tiers_of_severity(words),
        rule_order=_rule_order(words),
        recommendation_bases={key: _card_basis(row.basis, sources, row) for key, row in tables.recommendations.items()},
        limit_bases=_limit_bases(tables, sources),
    )


def _reply_limits(words: Mapping[str, Any]) -> ReplyLimits:
    limits = ReplyLimits(days=dict(words["replies_hold"]), danger_days=dict(words["replies_hold_danger"]))
    for code in words["replies"]:
        if not all(isinstance(days.get(code), int) for days in (limits.days, limits.danger_days)):
            raise ContentError("wording.toml", "replies_hold", f"has no number of days for '{code}'", "Add it.")
    return limits


def _card_words(rule: str, action: str, row: Mapping[str, str]) -> CardWords:
    name = f"cards.{rule}.{action}"
    family, tier, headline = (row.get(key, "") for key in ("family", "tier", "headline"))
    if family not in FAMILIES or tier not in TIERS:
        raise ContentError("wording.toml", name, "family or tier is none of ours", "Correct it.")
    fields = {field for _, field, _, _ in string.Formatter().parse(headline) if field is not None}
    if not headline or not fields <= _HEADLINE_FIELDS:
        raise ContentError("wording.toml", name, "the headline is empty or names an unknown field", "Correct it.")
    return CardWords(family=_one_of(family, FAMILIES), tier=_one_of(tier, TIERS), headline=headline)


def _one_of(word: str, words: Iterable[Row]) -> Row:
    return next(known for known in words if known == word)
