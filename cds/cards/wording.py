"""The words of a card that are not a patient's facts, and how they are filled in. The words themselves are content."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

from cds.cards.card import LONGEST_HEADLINE, CardBasis, Family, Tier
from cds.clinical.findings import Evidence, Finding
from cds.clinical.readings import sentence, show


@dataclass(frozen=True, slots=True, kw_only=True)
class CardWords:
    """Family, tier and headline of a rule's answer. The headline may name {drug}, {drugs}, {tests}, {course}, {subjects}."""

    family: Family
    tier: Tier
    headline: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Wording:
    """All words and the bases they rest on. `cards` is keyed by rule and action (or "unknown", "blocked")."""

    cards: Mapping[tuple[str, str], CardWords]
    cautions: Mapping[str, str]
    replies: Mapping[str, str]
    decline_reasons: Mapping[str, str]
    notice: str
    analytes: Mapping[str, str]
    units: Mapping[str, str]
    class_names: Mapping[str, str]
    shown_for_days: Mapping[str, int]  # by tier
    tier_of_severity: Mapping[str, Tier]
    rule_order: tuple[str, ...]  # within a tier and family
    recommendation_bases: Mapping[str, CardBasis]
    limit_bases: Mapping[str, CardBasis]

    def name(self, subject: str) -> str:
        """A subject in words: the name of an analyte or class, else the drug's own name."""
        return self.analytes.get(subject) or self.class_names.get(subject) or subject

    def names(self, subjects: Iterable[str]) -> str:
        return listing([self.name(subject) for subject in subjects])


def listing(words: Iterable[str]) -> str:
    """The words once each, with commas and an "and": "potassium, creatinine and sodium"."""
    items = list(dict.fromkeys(words))
    if len(items) < 2:
        return "".join(items)
    return f"{', '.join(items[:-1])} and {items[-1]}"


def headline(
    words: CardWords, finding: Finding, subjects: Iterable[str], wanted: Iterable[str], dose: str, wording: Wording
) -> str:
    """Fill in the headline. One that would grow too long names fewer of its items and says how many more there are."""
    drugs = [proposal.drug for proposal in finding.drug_proposals]
    names = list(dict.fromkeys(wording.name(subject) for subject in subjects))
    tests = list(dict.fromkeys(wanted))
    fewer = [(most, len(tests)) for most in range(max(len(names), 1), 0, -1)]
    fewer += [(1, most) for most in range(len(tests) - 1, 0, -1)]
    for most_names, most_tests in fewer:
        text = words.headline.format(
            drug=drugs[0] if drugs else "",
            drugs=listing(drugs),
            subjects=_listing_of(names, most_names),
            course=_listing_of(names, most_names),
            tests=_listing_of(tests, max(most_tests, 1)),
            why=finding.why,
            dose=dose,
        )
        text = sentence(text)
        if len(text) <= LONGEST_HEADLINE:
            return text
    return f"{text[: LONGEST_HEADLINE - 1].rsplit(' ', 1)[0].rstrip(' ,:')}…"


def _listing_of(items: list[str], most: int) -> str:
    if len(items) <= most:
        return listing(items)
    return listing([*items[:most], f"{len(items) - most} more"])


def dose_words(finding: Finding) -> str:
    """The first proposed dose as a prescriber writes it; empty without one."""
    if not finding.drug_proposals or finding.drug_proposals[0].dose_mg is None:
        return ""
    proposal = finding.drug_proposals[0]
    amount = proposal.dose_name or f"{show(proposal.dose_mg or 0)} mg"
    times = {1.0: "once a day", 2.0: "twice a day", 3.0: "three times a day", 0.5: "every other day"}
    return f"{amount} {times.get(proposal.times_per_day or 1.0, '')}".strip()


def wanted_names(finding: Finding, wording: Wording) -> tuple[str, ...]:
    """What a finding asks for, in words: its tests, else what it says is missing (without the resource's name)."""
    tests = dict.fromkeys(test for proposal in finding.test_proposals for test in proposal.tests)
    if finding.due is not None and not tests:
        tests = dict.fromkeys(finding.due.tests)
    if tests:
        return tuple(wording.name(test) for test in tests)
    return tuple(
        dict.fromkeys(text.partition(": ")[2] if "/" in text.partition(": ")[0] else text for text in finding.missing)
    )


def named_evidence(evidence: Iterable[Evidence], wording: Wording) -> tuple[Evidence, ...]:
    """Each fact once, with analytes under their names and units as people write them."""
    named = (
        replace(fact, what=_named(fact.what, wording), unit=wording.units.get(fact.unit or "", fact.unit))
        for fact in evidence
    )
    return tuple(dict.fromkeys(named))


def _named(what: str, wording: Wording) -> str:
    """The analyte's name, also before a remark: "egfr (computed)" becomes "eGFR (computed)"."""
    slug, space, remark = what.partition(" (")
    return f"{wording.analytes[slug]}{space}{remark}" if slug in wording.analytes else what


def bases(findings: Iterable[Finding], wording: Wording) -> tuple[CardBasis, ...]:
    """The recommendations first, then the limits and schedule rows that decided, each once."""
    found = list(findings)
    recommended = (wording.recommendation_bases[key] for f in found for key in f.recommendations)
    limited = (wording.limit_bases[key] for f in found for key in f.limits if key in wording.limit_bases)
    return tuple(dict.fromkeys([*recommended, *limited]))
