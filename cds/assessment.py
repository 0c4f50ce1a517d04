"""The one path: bytes -> resources -> record -> findings -> cards with drafts. Command, service and audit all call it."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from datetime import UTC, datetime, time, tzinfo
from typing import Any

from cds.cards.card import Card, HeldBack
from cds.cards.folding import make_cards
from cds.cards.ordering import held_back_order
from cds.cards.replies import Reply, hold_back
from cds.cards.shape import card_shape, finding_shape, gate_shape, held_back_shape, phenotype_shape, pillars_shape
from cds.clinical.evaluate import findings_in
from cds.clinical.order_check import CheckedOrder, OrderCheck
from cds.clinical.order_check import check_orders as check_drafts
from cds.clinical.situation import Situation, understand
from cds.content.load import Content
from cds.errors import Issue
from cds.fhir.build_record import BuiltRecord, build_record
from cds.fhir.bundle import PatientResources, SplitInput, split_by_patient
from cds.fhir.drafts import draft_drug_order, draft_test_order
from cds.fhir.medications import NOT_RECOGNISED
from cds.fhir.reading import COMMAND_LINE_LIMITS, Limits, read_json
from cds.fhir.record_shape import course_issues, issue_shape, record_shape

FORMAT_VERSION = "1.0"
_CLOSING = ("deceased", "under-age")  # no rule at all was asked
RepliesOf = Callable[[str], Iterable[Reply]]


def no_replies(_patient: str) -> Iterable[Reply]:
    """Without a store nobody has answered anything."""
    return ()


def assess(
    data: bytes,
    content: Content,
    *,
    as_of: datetime,
    trace: bool = False,
    limits: Limits = COMMAND_LINE_LIMITS,
    replies: RepliesOf = no_replies,
) -> dict[str, Any]:
    """Assess every patient of a Bundle (or of a single resource) and return the assessment as plain data.

    Calendar days are days in the zone of `as_of`. With `trace` every finding is listed. Equal input, content and `as_of`
    give equal output, if `replies` (what was answered to a patient's cards, by patient reference) are equal too. Raises InputError (and its kinds) for input that cannot be read as a whole; everything else that
    is wrong with the input is an issue in the answer. Without a Patient there are no assessments, only issues.
    """
    split = split_by_patient(read_json(data, limits), limits)
    built = [_built(patient, content, as_of) for patient in split.patients]
    return {
        "format": "gdmt-cards/assessment",
        **_frame(content, as_of),
        "assessments": [
            assess_patient(one, content, as_of=as_of, trace=trace, replies=replies(one.patient))
            for one in built
            if one.record is not None
        ],
        "issues": _unowned(split, built),
    }


def describe_records(
    data: bytes, content: Content, *, as_of: datetime, limits: Limits = COMMAND_LINE_LIMITS
) -> dict[str, Any]:
    """Return what was understood of each patient's data as known on `as_of`. Raises as `assess` does."""
    split = split_by_patient(read_json(data, limits), limits)
    built = [_built(patient, content, as_of) for patient in split.patients]
    return {
        "format": "gdmt-cards/record",
        **_frame(content, as_of),
        "records": [_record(one, content, as_of) for one in built if one.record is not None],
        "issues": _unowned(split, built),
    }


def check_orders(
    data: bytes,
    content: Content,
    *,
    as_of: datetime,
    limits: Limits = COMMAND_LINE_LIMITS,
    replies: RepliesOf = no_replies,
) -> dict[str, Any]:
    """Check the orders under the pen: the MedicationRequests of the input with status "draft". Raises as `assess` does.

    Cards are only about these orders, and whatever else is of tier danger.
    """
    split = split_by_patient(read_json(data, limits), limits)
    built = [(patient, _built(patient, content, as_of)) for patient in split.patients]
    return {
        "format": "gdmt-cards/order-check",
        **_frame(content, as_of),
        "checks": [
            _order_check(patient, one, content, as_of, replies(one.patient))
            for patient, one in built
            if one.record is not None
        ],
        "issues": _unowned(split, [one for _, one in built]),
    }


def _order_check(
    patient: PatientResources, built: BuiltRecord, content: Content, as_of: datetime, replies: Iterable[Reply]
) -> dict[str, Any]:
    if built.record is None:
        raise ValueError("a refused patient has no orders to check")
    drafts = frozenset(
        f"MedicationRequest/{resource['id']}"
        for resource in patient.resources.get("MedicationRequest", ())
        if resource.get("status") == "draft"
    )
    check = check_drafts(built.record, drafts, content.tables, as_of=as_of, rules_off=content.rules_off)
    answers = tuple(replies)
    orders: list[dict[str, Any]] = []
    held_back: list[HeldBack] = []
    said: set[tuple[str, str | None]] = set()
    for order in check.orders:
        made = make_cards(check.after, order.findings, content.wording)
        shown, answered = hold_back(made.cards, answers, content.reply_limits, today=as_of.date())
        held_back.extend((*made.held_back, *answered))
        said |= {(finding.rule, finding.about) for finding in order.findings}
        orders.append(
            {
                "order": order.source,
                "drugs": list(order.drugs),
                **_verdict(order, len(shown), len(answered), check, built),
                "closes": list(order.closes),
                "cards": [_card_shape(card, check.after, content) for card in shown],
            }
        )
    rest = make_cards(check.after, [f for f in check.others if (f.rule, f.about) not in said], content.wording)
    dangers = [card for card in rest.cards if card.tier == "danger"]
    shown, answered = hold_back(dangers, answers, content.reply_limits, today=as_of.date())
    held_back.extend((*rest.held_back, *answered))
    held_back.extend(
        HeldBack(card_id=card.card_id, rule=card.rule, about=card.about, reason="not-about-this-order")
        for card in rest.cards
        if card.tier != "danger"
    )
    issues = [*built.issues, *course_issues(check.after.courses)]
    return {
        "patient": built.patient,
        "gates": [gate_shape(gate) for gate in check.after.gates],
        "orders": orders,
        "cards": [_card_shape(card, check.after, content) for card in shown],
        "held_back": [held_back_shape(item) for item in sorted(held_back, key=held_back_order)],
        "intake": {
            "read": built.read,
            "not_needed": built.not_needed,
            "issues": [issue_shape(issue) for issue in issues],
        },
    }


def _verdict(
    order: CheckedOrder, shown: int, answered: int, check: OrderCheck, built: BuiltRecord
) -> dict[str, str | None]:
    """What to say of an order in one word, and why nothing is said where nothing was checked."""
    if shown:
        return {"verdict": "cards", "because": None}
    if answered:  # held back is not withdrawn: what was answered still stands against the order
        return {"verdict": "answered", "because": "All there is to say of this order was answered: see held_back."}
    if order.closes:
        return {"verdict": "closes", "because": None}
    closed = next((gate for gate in check.after.gates if gate.id in _CLOSING), None)
    if closed is not None:
        return {"verdict": "not-checked", "because": closed.words}
    other = next((m for m in built.other_medicines if m.source == order.source), None)
    if other is not None and other.reason == NOT_RECOGNISED:  # most drugs have nothing to do with heart failure
        return {"verdict": "clear", "because": "The medicine is in none of our tables: nothing about it was checked."}
    if not order.drugs and (other is None or other.is_unread):
        return {"verdict": "not-checked", "because": "The order could not be read: see the issues."}
    gate = next(iter(check.after.gates), None)
    return {"verdict": "clear", "because": gate.words if gate is not None else None}


def _card_shape(card: Card, situation: Situation, content: Content) -> dict[str, Any]:
    return card_shape(card, _drafts(card, situation, content), content.wording)


def assess_patient(
    built: BuiltRecord,
    content: Content,
    *,
    as_of: datetime,
    trace: bool = False,
    replies: Iterable[Reply] = (),
) -> dict[str, Any]:
    """Assess one patient whose record was built. The record must not be refused."""
    if built.record is None:
        raise ValueError("a refused patient has no record to assess")
    situation = understand(built.record, content.tables, as_of=as_of)
    findings = findings_in(situation, rules_off=content.rules_off)
    made = make_cards(situation, findings, content.wording)
    shown, answered = hold_back(made.cards, replies, content.reply_limits, today=situation.today)
    issues = [*built.issues, *course_issues(situation.courses)]
    return {
        "patient": built.patient,
        "phenotype": phenotype_shape(situation.phenotype),
        "gates": [gate_shape(gate) for gate in situation.gates],
        "pillars": pillars_shape(findings),
        "cards": [_card_shape(card, situation, content) for card in shown],
        "held_back": [held_back_shape(item) for item in sorted((*made.held_back, *answered), key=held_back_order)],
        **({"findings": [finding_shape(finding) for finding in findings]} if trace else {}),
        "intake": {
            "read": built.read,
            "not_needed": built.not_needed,
            "issues": [issue_shape(issue) for issue in issues],
        },
    }


def _frame(content: Content, as_of: datetime) -> dict[str, Any]:
    return {
        "format_version": FORMAT_VERSION,
        "as_of": shown_moment(as_of),
        "content": {
            "version": content.version,
            "sha256": content.sha256,
            "site": content.site,
            "signed_off": content.signed_off,
            "rules_off": sorted(content.rules_off),
            "notice": content.wording.notice,
        },
    }


def shown_moment(as_of: datetime) -> str:
    """The moment as it was asked for: a date where it is the end of a day, else an instant."""
    return as_of.date().isoformat() if as_of.time() == time.max else as_of.isoformat(timespec="seconds")


def _built(patient: PatientResources, content: Content, as_of: datetime) -> BuiltRecord:
    zone: tzinfo = as_of.tzinfo if as_of.tzinfo is not None else UTC
    return build_record(patient, content.codes, zone, default_units=content.default_units)


def _record(built: BuiltRecord, content: Content, as_of: datetime) -> dict[str, Any]:
    if built.record is None:
        raise ValueError("a refused patient has no record to show")
    situation = understand(built.record, content.tables, as_of=as_of)
    issues = [*built.issues, *course_issues(situation.courses)]
    return record_shape(situation.record, situation.courses, issues, built.not_recognised, on=as_of.date())


def _drafts(card: Card, situation: Situation, content: Content) -> list[dict[str, Any]]:
    patient, today = situation.record.patient, situation.today
    reasons = [fact.resource for fact in card.evidence if fact.resource is not None]
    drugs = [
        draft_drug_order(proposal, content.order_codes, patient=patient, authored_on=today, reasons=reasons)
        for proposal in card.drug_proposals
    ]
    tests = [
        draft_test_order(
            proposal,
            test,
            content.wording.name(test),
            content.order_codes,
            patient=patient,
            authored_on=today,
            reasons=reasons,
        )
        for proposal in card.test_proposals
        for test in proposal.tests
        if card.due is None or card.due.already_ordered is None
    ]
    return [*drugs, *tests]


def _unowned(split: SplitInput, built: list[BuiltRecord]) -> list[dict[str, Any]]:
    """The issues that belong to no assessed patient: of the whole input, and of patients that were refused."""
    issues: list[Issue] = [*split.issues]
    for one in built:
        if one.record is None:
            issues.extend(one.issues)
    return [issue_shape(issue) for issue in issues]
