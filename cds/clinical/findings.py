"""What a rule answers: exactly one of five outcomes, with the facts it rests on."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date
from typing import Literal

Outcome = Literal["open", "met", "blocked", "unknown", "not-applicable"]
Action = Literal["start", "raise", "lower", "switch", "stop", "review", "test", "refer", "document"]
Severity = Literal["contraindicated", "major", "caution"]
Role = Literal["supports", "limits", "missing", "stale"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """One fact a finding rests on. `value` and `unit` stand as reported; None where there is no number.

    `resource` is None only for what is missing.
    """

    what: str
    role: Role
    resource: str | None = None
    value: float | str | None = None
    unit: str | None = None
    date: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Due:
    """When a test is due. `days_overdue_most` differs from `days_overdue` only where dates are imprecise."""

    tests: tuple[str, ...]  # analytes still wanted
    window_opens: date
    due_by: date
    days_overdue: int = 0
    days_overdue_most: int = 0
    grace_ends: date | None = None
    already_ordered: str | None = None  # the ServiceRequest
    status: Literal["not-due", "due", "overdue-in-grace", "overdue"] = "due"


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugProposal:
    """A drug order a card may offer, for a human to sign. Alternatives share the card; the first is preferred.

    A dose of None means the prescriber must choose it. `dose_name` is how the tablet is called where the
    milligrams alone would mislead ("24 mg/26 mg").
    """

    drug: str
    dose_mg: float | None
    times_per_day: float | None
    dose_name: str | None = None
    dose_row: str | None = None  # key of the dose table
    replaces: str | None = None  # the order it would replace
    alternatives: tuple[str, ...] = ()  # other drugs proposed on the same card: only one is to be signed
    note: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class TestProposal:
    """A test order a card may offer: analytes, and the days between which it is wanted."""

    tests: tuple[str, ...]
    not_before: date | None
    due_by: date
    why: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """A rule's answer for one patient and one subject (`about`; None for patient-level rules).

    `because` is one or more plain sentences with the numbers and dates. `recommendations` are the keys of the
    recommendation table it computes; `limits` the keys of the limit rows that decided it.
    """

    rule: str
    about: str | None
    outcome: Outcome
    because: str
    action: Action | None = None
    evidence: tuple[Evidence, ...] = ()
    missing: tuple[str, ...] = ()
    look_again_on: date | None = None
    due: Due | None = None
    recommendations: tuple[str, ...] = ()
    limits: tuple[str, ...] = ()
    drug_proposals: tuple[DrugProposal, ...] = ()
    test_proposals: tuple[TestProposal, ...] = ()
    opened_by: tuple[str, ...] = ()  # the courses or problems it stands on: part of the card's id
    cautions: tuple[str, ...] = ()  # keys of the wording table
    severity: Severity | None = None  # of a danger; None where the rule's own tier holds
    topic: str | None = None  # findings of one topic share a card: "drug:ibuprofen", "value:potassium"
    asks_if_taken: bool = False  # an old order nobody ended: first ask whether the drug is taken
    why: str = ""  # the reason in a few words, for a headline

    def __post_init__(self) -> None:
        if self.outcome == "open" and self.action is None:
            raise ValueError(f"{self.rule}: an open finding needs an action")
        if self.outcome != "open" and self.action not in (None, "refer"):
            raise ValueError(f"{self.rule}: only an open finding may ask for {self.action}")
