"""The record with and without the orders under check: what they bring, what they close. Pure, as the rules are."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime

from cds.clinical.evaluate import CHANGED_BY_AN_ORDER, findings_in
from cds.clinical.findings import Finding
from cds.clinical.record import MedicationEntry, PatientRecord
from cds.clinical.rules.orders import DOSE, LIMITS, TESTS, OrderUnderCheck, order_findings
from cds.clinical.situation import Situation, understand
from cds.clinical.tables import ClinicalTables
from cds.clinical.timeline import PartialDate

# What the questions about an order may put on a card, beside the answers of the rules that run on every record.
ORDER_ANSWERS: Mapping[str, tuple[str, ...]] = {
    "order-limits": ("review",),
    "order-dose": ("review", "lower"),
    "order-duplicate": ("review",),
    "order-tests": ("test",),
}
_ABOUT_THE_DRUG = ("stop-harmful-drug", "lower-dose")


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckedOrder:
    """One draft: the findings it brings, and the rules it closes. Both empty: nothing to say."""

    source: str
    drugs: tuple[str, ...]
    findings: tuple[Finding, ...]
    closes: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderCheck:
    """All drafts of a patient. `after` is the situation with them; `others` what was open without them."""

    after: Situation
    orders: tuple[CheckedOrder, ...]
    others: tuple[Finding, ...]


def check_orders(
    record: PatientRecord,
    drafts: frozenset[str],
    tables: ClinicalTables,
    *,
    as_of: datetime,
    rules_off: frozenset[str] = frozenset(),
) -> OrderCheck:
    """Hold the record without the drafts against the one with them. `drafts` are "MedicationRequest/id".

    A draft of an ingredient already running replaces it. The first dose is taken at the start the order states, else
    when it was written, else now.
    """
    orders = [_under_check(entry, as_of) for entry in record.medications if entry.source in drafts]
    kept = tuple(entry for entry in record.medications if entry.source not in drafts)
    before = understand(replace(record, medications=kept), tables, as_of=as_of)
    drugs = {order.drug for order in orders}
    # Safety looks at the order beside everything else; only another order of the same drug gives way to it.
    others = tuple(entry for entry in kept if entry.drug not in drugs)
    tests = tuple(replace(order, is_draft=False) for order in record.tests_ordered)
    drafted = tuple(_as_running(order, as_of) for order in orders)
    after = understand(
        replace(record, medications=(*drafted, *others), tests_ordered=tests),
        tables,
        as_of=as_of,
        first_doses={order.drug: order.first_dose for order in orders},
    )
    answers = findings_in(after, rules_off=rules_off)
    open_before = _open_without(before, _rules_touched(answers, orders, after), rules_off)
    found_after = [f for f in answers if f.about not in drugs or not _is_told_by_the_dose(f, rules_off)]
    checked = [
        _checked(source, [o for o in orders if o.source == source], before, after, open_before, found_after, rules_off)
        for source in sorted(drafts)
    ]
    return OrderCheck(after=after, orders=tuple(checked), others=tuple(f for f in found_after if f.outcome == "open"))


def _rules_touched(answers: Sequence[Finding], orders: Sequence[OrderUnderCheck], after: Situation) -> frozenset[str]:
    """The rules that say something of an order, or because of one."""
    return frozenset(f.rule for f in answers if any(_is_about(f, o, after) or _cites(f, o.source) for o in orders))


def _open_without(
    before: Situation, touched: frozenset[str], rules_off: frozenset[str]
) -> dict[tuple[str, str | None], Finding]:
    rules = [rule for rule_id, rule in CHANGED_BY_AN_ORDER.items() if rule_id in touched]
    return {(f.rule, f.about): f for f in findings_in(before, rules=rules, rules_off=rules_off) if f.outcome == "open"}


def _under_check(entry: MedicationEntry, as_of: datetime) -> OrderUnderCheck:
    stated = entry.starts if entry.starts is not None else entry.authored
    if stated is None:
        return OrderUnderCheck(entry=entry, first_dose=as_of)
    first = stated.at if stated.at is not None else None
    if first is None:  # a day without time: not before now, nor before that day
        first = max(as_of, datetime.combine(stated.earliest, datetime.min.time(), as_of.tzinfo))
    return OrderUnderCheck(entry=entry, first_dose=first)


def _as_running(order: OrderUnderCheck, as_of: datetime) -> MedicationEntry:
    """The draft as if it were signed: running, and begun by now."""
    begun = PartialDate.of_instant(min(order.first_dose, as_of).astimezone(as_of.tzinfo))
    lines = tuple(replace(line, starts=None, ends=None) for line in order.entry.lines)
    return replace(order.entry, status="active", authored=begun, starts=begun, ends=None, lines=lines)


def _checked(
    source: str,
    orders: Sequence[OrderUnderCheck],
    before: Situation,
    after: Situation,
    open_before: dict[tuple[str, str | None], Finding],
    found_after: Sequence[Finding],
    rules_off: frozenset[str],
) -> CheckedOrder:
    found: list[Finding] = []
    closes: dict[str, None] = {}
    for order in orders:
        brought = [f for f in found_after if f.outcome == "open" and _is_about(f, order, after)]
        found.extend(f for f in brought if not _was_open(f, open_before))
        asked = order_findings(before, after, order)
        found.extend(f for f in asked if f.outcome == "open" and f.rule not in rules_off)
        for finding in found_after:
            if finding.outcome == "met" and (finding.rule, finding.about) in open_before and _cites(finding, source):
                closes[finding.rule] = None
    if any(f.severity == "contraindicated" or (f.rule == LIMITS and f.severity == "major") for f in found):
        # Neither tests nor another dose for an order that should not be signed.
        found = [_without_proposals(f) for f in found if f.rule != TESTS]
        closes = {}
    if any(f.rule == DOSE for f in found):
        found = [f for f in found if f.rule != "lower-dose" or f.action != "review"]  # the same said twice
    drugs = tuple(dict.fromkeys(order.drug for order in orders))
    unique = {(f.rule, f.about, f.action): f for f in found}
    return CheckedOrder(source=source, drugs=drugs, findings=tuple(unique.values()), closes=tuple(closes))


def _without_proposals(finding: Finding) -> Finding:
    is_dose = finding.rule == DOSE and finding.action == "lower"
    return replace(finding, drug_proposals=(), action="review" if is_dose else finding.action)


def _was_open(finding: Finding, open_before: dict[tuple[str, str | None], Finding]) -> bool:
    """True if the same was said without the order. A danger of the ordered drug itself is said again."""
    known = open_before.get((finding.rule, finding.about))
    return known is not None and known.action == finding.action and finding.rule not in _ABOUT_THE_DRUG


def _is_told_by_the_dose(finding: Finding, rules_off: frozenset[str]) -> bool:
    """Above the highest dose of the table: no limit on a value, and `order-dose` says the same of the order."""
    is_above_highest = finding.rule == "lower-dose" and finding.outcome == "open" and not finding.limits
    return is_above_highest and DOSE not in rules_off


def _is_about(finding: Finding, order: OrderUnderCheck, after: Situation) -> bool:
    if finding.rule in _ABOUT_THE_DRUG:
        return finding.about == order.drug
    if finding.rule == "interaction":
        return order.drug in (finding.about or "").split(" + ")
    if finding.rule.startswith("start-") and finding.action in ("switch", "review"):
        row = after.tables.classes.get(order.entry.drug_class or "")
        return row is not None and row.pillar == finding.about and _cites(finding, order.source)
    return False


def _cites(finding: Finding, source: str) -> bool:
    return any(fact.resource == source for fact in finding.evidence)
