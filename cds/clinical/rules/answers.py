"""Short ways to give each of the outcomes that need no action, so that rules read as sentences."""

from __future__ import annotations

from datetime import date

from cds.clinical.findings import Due, Evidence, Finding, TestProposal


def not_applicable(rule: str, *, because: str, about: str | None = None, source: str | None = None) -> Finding:
    """The question does not arise for this patient."""
    evidence = (Evidence(what=because, role="limits", resource=source),) if source else ()
    return Finding(rule=rule, about=about, outcome="not-applicable", because=because, evidence=evidence)


def met(
    rule: str,
    *,
    because: str,
    about: str | None = None,
    evidence: tuple[Evidence, ...] = (),
    due: Due | None = None,
    recommendations: tuple[str, ...] = (),
) -> Finding:
    """It applies and it is done."""
    return Finding(
        rule=rule,
        about=about,
        outcome="met",
        because=because,
        evidence=evidence,
        due=due,
        recommendations=recommendations,
    )


def blocked(
    rule: str,
    *,
    because: str,
    about: str | None = None,
    evidence: tuple[Evidence, ...] = (),
    limits: tuple[str, ...] = (),
    look_again_on: date | None = None,
    refer: bool = False,
    recommendations: tuple[str, ...] = (),
    test_proposals: tuple[TestProposal, ...] = (),
    opened_by: tuple[str, ...] = (),
) -> Finding:
    """It applies, it is not done, and a recorded fact stands against it."""
    return Finding(
        rule=rule,
        about=about,
        outcome="blocked",
        action="refer" if refer else None,
        because=because,
        evidence=evidence,
        limits=limits,
        look_again_on=look_again_on,
        recommendations=recommendations,
        test_proposals=test_proposals,
        opened_by=opened_by,
    )


def unknown(
    rule: str,
    *,
    because: str,
    missing: tuple[str, ...],
    about: str | None = None,
    evidence: tuple[Evidence, ...] = (),
    recommendations: tuple[str, ...] = (),
    topic: str | None = None,
) -> Finding:
    """It cannot be decided: `missing` names what is wanted."""
    return Finding(
        rule=rule,
        about=about,
        outcome="unknown",
        because=because,
        missing=missing,
        evidence=evidence,
        recommendations=recommendations,
        topic=topic,
    )
