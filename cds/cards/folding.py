"""Findings -> few cards. What asks for the same thing is one card; what was folded is listed with the card it went into.

Cards come from open findings, from unknown ones (they name what is missing), and from blocked ones that ask for
something: a value to be repeated, or a specialist.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from datetime import timedelta

from cds.cards.card import TIERS, Card, HeldBack, Tier, card_id
from cds.cards.ordering import card_order, held_back_order, lead, tier_of
from cds.cards.wording import Wording, bases, dose_words, headline, named_evidence, wanted_names
from cds.clinical.findings import Evidence, Finding, TestProposal
from cds.clinical.situation import Situation

_ONE_CARD_A_RULE = ("check-potassium-creatinine",)
_EJECTION_FRACTION = "ejection-fraction-missing"
_OFFERING = ("start", "switch", "raise", "lower")
_SILENT_UNKNOWN = ("lab-out-of-range", "lower-dose")  # the timed checks and the start rules ask for what is missing
_VALUES: tuple[tuple[str, ...], ...] = (("topic", "value:potassium"), ("topic", "value:kidney"))
_CHECK, _NEEDED, _REPEAT = ("open", "check-potassium-creatinine"), ("needed", "tests"), ("blocked", "repeat")
_OLD_ORDERS = ("topic", "old-orders")
_SAME_SAMPLE = {"potassium", "creatinine"}  # one blood sample gives both


@dataclass(frozen=True, slots=True)
class CardSet:
    """The cards to show, most urgent first, and those held back."""

    cards: tuple[Card, ...]
    held_back: tuple[HeldBack, ...]


def make_cards(situation: Situation, findings: Sequence[Finding], wording: Wording) -> CardSet:
    """Make the cards of one patient from all findings of one assessment. Never two cards that ask for the same thing."""
    groups: dict[tuple[str, ...], list[Finding]] = defaultdict(list)
    for finding in findings:
        key = _group(finding)
        if key is not None:
            groups[key].append(finding)
    for finding in groups.pop(_OLD_ORDERS, ()):  # a drug with a card of its own is asked about there
        own = ("topic", f"drug:{finding.about}")
        groups[own if own in groups else _OLD_ORDERS].append(finding)
    cards: list[Card] = []
    held_back: list[HeldBack] = []
    for group in _absorb(groups):
        ordered = sorted(group, key=lead)
        card = _card(situation, ordered, wording)
        cards.append(card)
        held_back.extend(
            HeldBack(
                card_id=card_id(situation.record.patient, finding),
                rule=finding.rule,
                about=finding.about,
                reason="folded",
                into=card.card_id,
            )
            for finding in ordered[1:]
        )
    shown = sorted(cards, key=lambda card: card_order(card, wording.rule_order))
    return CardSet(tuple(shown), tuple(sorted(held_back, key=held_back_order)))


def _group(finding: Finding) -> tuple[str, ...] | None:
    """Which card a finding goes to; None where it makes none."""
    match finding.outcome:
        case "open":
            if finding.topic is not None:
                return "topic", finding.topic
            if finding.rule in (*_ONE_CARD_A_RULE, _EJECTION_FRACTION):
                return "open", finding.rule
            return "open", finding.rule, finding.about or ""
        case "unknown":
            if finding.rule in _SILENT_UNKNOWN:
                return None
            if finding.topic is not None:
                return "topic", finding.topic
            if "left ventricular ejection fraction" in finding.missing:
                return "open", _EJECTION_FRACTION
            if finding.test_proposals:
                return "needed", "tests"
            if finding.rule in _ONE_CARD_A_RULE:
                return "needed", finding.rule
            return "needed", *sorted(_without_resource(text) for text in finding.missing)
        case "blocked":
            if finding.action == "refer":
                return "blocked", "refer"
            return ("blocked", "repeat") if finding.test_proposals else None
        case _:
            return None


def _without_resource(text: str) -> str:
    """What is missing, alike for all drugs: "daily dose", "NYHA class"."""
    return text.partition(": ")[2].partition(" of ")[0] if "/" in text.partition(": ")[0] else text


def _absorb(groups: dict[tuple[str, ...], list[Finding]]) -> Iterable[list[Finding]]:
    """Let a card that already asks for tests take in the findings that wait for no other test.

    A value out of range asks for more than a check that is due, a check for more than a decision that waits.
    """
    ranked = [*_VALUES, _CHECK, _NEEDED, _REPEAT]
    for position, key in enumerate(ranked):
        for taker_key in ranked[:position]:
            taker, group = groups.get(taker_key), groups.get(key)
            if not taker or not group or (taker_key in _VALUES and key in _VALUES):
                continue
            asked = set[str]().union(*(_tests(finding) for finding in taker))
            if asked & _SAME_SAMPLE:
                asked |= _SAME_SAMPLE
            taken = [finding for finding in group if _tests(finding) and _tests(finding) <= asked]
            groups[taker_key] = [*taker, *taken]
            groups[key] = [finding for finding in group if finding not in taken]
    return [group for group in groups.values() if group]


def _tests(finding: Finding) -> set[str]:
    return {test for proposal in finding.test_proposals for test in proposal.tests}


def _card(situation: Situation, findings: list[Finding], wording: Wording) -> Card:
    """One card; the first finding leads it, gives its id, rule and due date."""
    first = findings[0]
    key: str = first.action if first.action is not None else first.outcome
    if first.asks_if_taken and (first.rule, f"{key}-if-taken") in wording.cards:
        key = f"{key}-if-taken"
    words = wording.cards[first.rule, key]
    alike = [f for f in findings if f.rule == first.rule and f.action == first.action]
    if first.outcome != "open":
        alike = [f for f in findings if f.outcome == first.outcome]
    subjects = [f.about for f in alike if f.about is not None]
    wanted = [name for f in alike for name in wanted_names(f, wording)]
    tier = min((_tier(f, wording) for f in alike), key=TIERS.index)
    evidence = named_evidence((fact for f in findings for fact in f.evidence), wording)
    basis = bases(findings, wording)
    cautions = _cautions(situation, findings, any(b.checked == "memory" for b in basis), wording)
    return Card(
        card_id=card_id(situation.record.patient, first),
        rule=first.rule,
        about=first.about,
        family=words.family,
        tier=tier,
        headline=headline(words, first, subjects, wanted, dose_words(first), wording),
        because=tuple(dict.fromkeys(f.because for f in findings)),
        evidence=_without_repeats(evidence),
        basis=basis,
        due=first.due,
        drug_proposals=tuple(dict.fromkeys(p for f in findings if f.action in _OFFERING for p in f.drug_proposals)),
        test_proposals=_joined(findings),
        cautions=cautions,
        expires_on=situation.today + timedelta(days=wording.shown_for_days[tier]),
    )


def _tier(finding: Finding, wording: Wording) -> Tier:
    return tier_of(
        wording.cards[finding.rule, finding.action or finding.outcome].tier, finding, wording.tier_of_severity
    )


def _joined(findings: list[Finding]) -> tuple[TestProposal, ...]:
    """Each test once, on its earliest date."""
    found: dict[str, TestProposal] = {}
    for finding in findings:
        for proposal in finding.test_proposals:
            for test in proposal.tests:
                known = found.get(test)
                if known is None or proposal.due_by < known.due_by:
                    found[test] = replace(proposal, tests=(test,))
    return tuple(found.values())


def _without_repeats(evidence: tuple[Evidence, ...]) -> tuple[Evidence, ...]:
    """One entry a fact: where the same one limits and supports, what it limits is said."""
    rank = {"limits": 0, "stale": 1, "missing": 2, "supports": 3}
    best: dict[tuple[object, ...], Evidence] = {}
    for fact in evidence:
        key = fact.what, fact.resource, fact.value, fact.unit
        known = best.get(key)
        if known is None or rank[fact.role] < rank[known.role]:
            best[key] = fact
    return tuple(best.values())


def _cautions(situation: Situation, findings: list[Finding], is_from_memory: bool, wording: Wording) -> tuple[str, ...]:
    keys = [key for finding in findings for key in finding.cautions]
    if any(finding.drug_proposals or finding.test_proposals for finding in findings):
        keys.append("draft")
    starts = any(f.action in ("start", "switch") for f in findings)
    if starts and any(m.is_unread and m.status in ("active", "unknown") for m in situation.record.other_medicines):
        keys.append("unread")
    if any(proposal.alternatives for finding in findings for proposal in finding.drug_proposals):
        keys.append("alternatives")
    cited = {fact.resource for finding in findings for fact in finding.evidence}
    if any(course.matched_by == "text" and not cited.isdisjoint(course.sources) for course in situation.courses):
        keys.append("unsure-code")
    if is_from_memory:
        keys.append("memory")
    keys.append("every-card")
    texts = [wording.cautions[key] for key in dict.fromkeys(keys) if key in wording.cautions]
    return (*texts, wording.notice)
