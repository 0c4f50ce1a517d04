"""The one door to the rules: a record and the tables in, findings out."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from datetime import datetime

from cds.clinical.findings import Finding
from cds.clinical.record import PatientRecord
from cds.clinical.rules.arni import switch_to_arni
from cds.clinical.rules.data import confirm_still_taken, ejection_fraction_missing
from cds.clinical.rules.doses import lower_dose, raise_dose
from cds.clinical.rules.labs import lab_out_of_range
from cds.clinical.rules.monitoring import check_potassium_creatinine
from cds.clinical.rules.safety import interaction, stop_harmful_drug
from cds.clinical.rules.therapy import start_beta_blocker, start_mra, start_ras_inhibitor, start_sglt2_inhibitor
from cds.clinical.situation import Situation, understand
from cds.clinical.tables import ClinicalTables

Rule = Callable[[Situation], tuple[Finding, ...]]

RULES: tuple[Rule, ...] = (
    stop_harmful_drug,
    interaction,
    lab_out_of_range,
    lower_dose,
    start_ras_inhibitor,
    start_beta_blocker,
    start_mra,
    start_sglt2_inhibitor,
    switch_to_arni,
    raise_dose,
    check_potassium_creatinine,
    ejection_fraction_missing,
    confirm_still_taken,
)

# What an order can bring or close, by rule id: what may have to be asked of the record without it too.
CHANGED_BY_AN_ORDER: Mapping[str, Rule] = {
    "stop-harmful-drug": stop_harmful_drug,
    "interaction": interaction,
    "lower-dose": lower_dose,
    "start-ras-inhibitor": start_ras_inhibitor,
    "start-beta-blocker": start_beta_blocker,
    "start-mra": start_mra,
    "start-sglt2-inhibitor": start_sglt2_inhibitor,
}
_START = ("start", "review", "unknown", "blocked", "refer")

# What each rule may put on a card: its actions, and "unknown" or "blocked" where those ask for something.
ANSWERS: Mapping[str, tuple[str, ...]] = {
    "stop-harmful-drug": ("stop", "stop-if-taken", "review", "unknown"),
    "interaction": ("stop", "stop-if-taken", "review", "review-if-taken"),
    "lab-out-of-range": ("test", "review"),
    "lower-dose": ("lower", "review"),
    "start-ras-inhibitor": _START,
    "start-beta-blocker": (*_START, "switch"),
    "start-mra": _START,
    "start-sglt2-inhibitor": _START,
    "switch-to-arni": ("switch", "review", "unknown", "refer"),
    "raise-dose": ("raise", "review", "unknown"),
    "check-potassium-creatinine": ("test", "unknown"),
    "ejection-fraction-missing": ("test",),
    "confirm-still-taken": ("document",),
}


def findings_in(
    situation: Situation, *, rules: Iterable[Rule] = RULES, rules_off: frozenset[str] = frozenset()
) -> tuple[Finding, ...]:
    """The rules' answers, in their order, then by subject. One answer per rule and subject.

    A rule a site has switched off answers nothing; it is named with the content.
    """
    found: list[Finding] = []
    for rule in rules:
        answers = sorted(rule(situation), key=lambda finding: finding.about or "")
        found.extend(finding for finding in answers if finding.rule not in rules_off)
    return tuple(found)


def evaluate(record: PatientRecord, tables: ClinicalTables, *, as_of: datetime) -> tuple[Finding, ...]:
    """Answer every rule for one patient on one instant; nothing dated after `as_of` matters."""
    return findings_in(understand(record, tables, as_of=as_of))
