"""POST /v1/assessments, /v1/records, /v1/order-checks: a Bundle in, the answer of the one path out."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from typing import Any

from flask import Blueprint, Response, g, request

from cds import assessment
from cds.cards.replies import Reply
from cds.errors import Issue, NoPatientError, RequestError
from cds.fhir.record_shape import issue_shape
from cds.service.admission import admit
from cds.service.answers import as_json
from cds.service.parts import Parts
from cds.service.requests_in import by_reference, is_true, moment, read_body, refuse_unknown
from cds.store.shown import ShownCard

_SEND_PATIENT = "Send the Patient in the same Bundle as the resources about them"


def blueprint(parts: Parts) -> Blueprint:
    """The three endpoints that read a Bundle."""
    pages = Blueprint("assessments", __name__)

    @pages.post("/v1/assessments")
    def assess() -> Response:
        refuse_unknown(request, frozenset({"as_of", "trace"}))
        admit(request, parts, "assess")
        as_of = moment(request, parts.zone, parts.now)
        trace = is_true(request, "trace")
        data = _bundle(parts)
        answer = assessment.assess(
            data, parts.content, as_of=as_of, trace=trace, limits=parts.limits, replies=_replies(parts)
        )
        return _answer(parts, answer, "assessments")

    @pages.post("/v1/records")
    def record() -> Response:
        refuse_unknown(request, frozenset({"as_of"}))
        admit(request, parts, "record")
        as_of = moment(request, parts.zone, parts.now)
        answer = assessment.describe_records(_bundle(parts), parts.content, as_of=as_of, limits=parts.limits)
        return _answer(parts, answer, "records")

    @pages.post("/v1/order-checks")
    def check_orders() -> Response:
        refuse_unknown(request, frozenset({"as_of"}))
        admit(request, parts, "check-order")
        as_of = moment(request, parts.zone, parts.now)
        answer = assessment.check_orders(
            _bundle(parts), parts.content, as_of=as_of, limits=parts.limits, replies=_replies(parts)
        )
        return _answer(parts, answer, "checks")

    return pages


def _bundle(parts: Parts) -> bytes:
    data = read_body(request, parts.limits, seconds=parts.body_seconds)
    wanted = by_reference(data)
    if wanted is None:
        return data
    if parts.fetch is None:
        raise RequestError(400, "this service fetches from no FHIR server", "Send the Bundle itself")
    data, skipped = parts.fetch(*wanted)
    g.skipped = skipped
    return data


def _replies(parts: Parts) -> assessment.RepliesOf:
    store = parts.store
    if store is None:
        return assessment.no_replies

    def of(patient: str) -> Iterable[Reply]:
        return store.replies_of(patient)

    return of


def _answer(parts: Parts, answer: dict[str, Any], key: str) -> Response:
    """The answer as JSON; without any patient a problem with the issues (ruling 51)."""
    if not answer[key]:
        issues = tuple(Issue(**issue) for issue in answer["issues"])
        raise NoPatientError("the input holds no patient that can be assessed", _SEND_PATIENT, issues)
    for kind in g.get("skipped", ()):
        issue = Issue(
            resource="input",
            path="fhir_server",
            problem=f"does not offer {kind}, so nothing of that type was read",
            fix="Send the Bundle itself, or let the server offer the type",
            severity="doubtful",
        )
        answer["issues"].append(issue_shape(issue))
    _count(answer, key)
    if parts.store is not None and key != "records":
        for one in answer[key]:
            cards = [*one["cards"], *(card for order in one.get("orders", ()) for card in order["cards"])]
            parts.store.note_shown(one["patient"], [_shown(card) for card in cards], parts.now().date())
    return as_json(answer)


def _shown(card: dict[str, Any]) -> ShownCard:
    return ShownCard(
        card_id=card["card_id"], rule=card["rule"], about=card["about"], tier=card["tier"], facts=card["facts"]
    )


def _count(answer: dict[str, Any], key: str) -> None:
    """Numbers for the log and the metrics: how many cards, by rule and tier; how many issues, by severity."""
    cards: Counter[tuple[str, str]] = Counter()
    held: Counter[str] = Counter()
    issues: Counter[str] = Counter(issue["severity"] for issue in answer["issues"])
    for one in answer[key]:
        shown = [*one.get("cards", ()), *(card for order in one.get("orders", ()) for card in order["cards"])]
        cards.update((card["rule"], card["tier"]) for card in shown)
        held.update(item["reason"] for item in one.get("held_back", ()))
        found = one["issues"] if "issues" in one else one["intake"]["issues"]
        issues.update(issue["severity"] for issue in found)
    g.facts.update(patients=len(answer[key]), cards=cards, held_back=held, issues=issues)
