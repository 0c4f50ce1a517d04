"""Several codings of one medicine -> one answer. The most specific decides; a more general one may only agree.

Where codings disagree on the class, nothing is claimed: the class becomes None and the classes it may be are listed, so
that no gap is closed by it and every safety rule can take the cautious one (README of the code tables; rulings 38, 40).
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace

from cds.fhir.code_matches import DrugComponent, DrugMatch
from cds.fhir.drug_codes import RANKS, DrugRow

SALTS = {"metoprolol": ("succinate", "tartrate", "fumarate"), "carvedilol": ("phosphate",)}
SALT_UNKNOWN = "the salt is not known"
_ARNI = "sacubitril/valsartan"
_NOT_NAMED = " (not named)"


def base_name(drug: str) -> str:
    """The drug without the salt that tells its dose scales apart."""
    first = drug.partition(" ")[0]
    return first if first in SALTS else drug


def agree(rows: Sequence[DrugRow]) -> DrugMatch:
    """Settle what `rows` (at least one) mean together.

    A row that says nothing about the class is left out where another does. A specific row that says "not systemic" ends
    the match; one that says "systemic" against a general one that does not leaves it open.
    """
    known = [row for row in rows if row.has_class] or list(rows)
    ordered = sorted(known, key=lambda row: (row.rank, -len(row.components)))
    best, others = ordered[0], [_as_pair(row, ordered) for row in ordered[1:]]
    best = _as_pair(best, ordered)
    match = DrugMatch(
        components=best.components,
        matched_by=best.matched_by,
        is_systemic=_systemic(best, others),
        route=best.route,
        dose_form=best.dose_form,
        possible_classes=_possible(best.components),
        note=best.note,
    )
    if best.is_systemic is False or not others:
        return match
    if match.is_systemic is None and any(row.is_systemic is False for row in others) and best.is_systemic:
        return _open(match, best.components, "its codes disagree on whether it acts in the whole body")
    return _settle_salts(_settle_classes(match, best, others), best, others)


def _systemic(best: DrugRow, others: Iterable[DrugRow]) -> bool | None:
    if best.is_systemic is False:
        return False
    said = {row.is_systemic for row in others} - {None}
    if best.is_systemic is None:
        return said.pop() if len(said) == 1 else None
    return None if False in said else True


def _as_pair(row: DrugRow, rows: Iterable[DrugRow]) -> DrugRow:
    """The valsartan of sacubitril/valsartan coded by its own: part of the pair, no plain ARB."""
    if not any(component.drug == _ARNI for other in rows for component in other.components):
        return row
    if not any(component.drug == "valsartan" for component in row.components):
        return row
    pair = DrugComponent(drug=_ARNI, drug_class="arni")
    kept = [c for c in row.components if c.drug not in ("valsartan", _ARNI)]
    return replace(row, components=(*kept, pair))


def _settle_classes(match: DrugMatch, best: DrugRow, others: Sequence[DrugRow]) -> DrugMatch:
    own = _classes(best.components)
    doubtful = [c for c in best.components if c.drug_class and any(_denies(row, c, own) for row in others)]
    extra = {
        component.drug: component
        for row in others
        for component in row.components
        if component.drug_class and component.drug_class not in own
        if component.drug_class not in match.possible_classes
    }
    renamed = [_rename(component, others) for component in best.components if component not in doubtful]
    if not doubtful and not extra:
        return replace(match, components=tuple(renamed))
    open_ones = [*doubtful, *extra.values()]
    merged = DrugComponent(
        drug=" or ".join(dict.fromkeys(sorted(component.drug for component in open_ones))),
        drug_class=None,
        possible_classes=tuple(sorted({component.drug_class for component in open_ones if component.drug_class})),
    )
    components = (*renamed, merged)
    return replace(
        match,
        components=components,
        possible_classes=_possible(components),
        note=_joined(match.note, "its codes disagree on the drug class"),
    )


def _denies(row: DrugRow, component: DrugComponent, own: frozenset[str]) -> bool:
    """True if the row knows other classes than the best one and not this one."""
    classes = _classes(row.components)
    return not classes <= own and component.drug_class not in classes | frozenset(_possible(row.components))


def _rename(component: DrugComponent, others: Iterable[DrugRow]) -> DrugComponent:
    """The component, under both names and without strength where another coding names another drug of its class."""
    if component.drug_class is None:
        return component
    names = {base_name(component.drug)}
    for row in others:
        said = {
            base_name(c.drug)
            for c in row.components
            if c.drug_class == component.drug_class and not c.drug.endswith(_NOT_NAMED)
        }
        if said and names.isdisjoint(said):
            names |= said
    if len(names) == 1:
        return component
    return DrugComponent(drug=" or ".join(sorted(names)), drug_class=component.drug_class)


def _settle_salts(match: DrugMatch, best: DrugRow, others: Sequence[DrugRow]) -> DrugMatch:
    """A general code may name the salt the specific one leaves open; two different salts leave it open again."""
    for component in match.components:
        base = base_name(component.drug)
        if base not in SALTS:
            continue
        told = {row: c.drug for row in others for c in row.components if base_name(c.drug) == base and c.drug != base}
        names = set(told.values()) - {component.drug}
        if not names:
            continue
        if component.drug == base and len(names) == 1 and can_take_salt(component, best.rank):
            teller = next(row for row, drug in told.items() if drug in names)
            return with_salt(replace(match, matched_by=teller.matched_by), names.pop())
        plain = DrugComponent(drug=base, drug_class=component.drug_class)
        return replace(
            match,
            components=tuple(plain if c is component else c for c in match.components),
            note=_joined(match.note, "its codes disagree on the salt"),
        )
    return match


def can_take_salt(component: DrugComponent, rank: int) -> bool:
    """True if the salt is open. A carvedilol product without salt is the plain one, so nothing is open there."""
    return component.drug == "metoprolol" or (component.drug == "carvedilol" and rank >= RANKS["form"])


def with_salt(match: DrugMatch, drug: str) -> DrugMatch:
    """The match with the salt filled in."""
    components = tuple(replace(c, drug=drug) if c.drug == base_name(drug) else c for c in match.components)
    note = match.note if match.note and "salt is not stated" not in match.note else None
    return replace(match, components=components, note=note)


def _open(match: DrugMatch, components: tuple[DrugComponent, ...], why: str) -> DrugMatch:
    opened = tuple(
        DrugComponent(drug=c.drug, drug_class=None, possible_classes=(c.drug_class,)) if c.drug_class else c
        for c in components
    )
    return replace(match, components=opened, possible_classes=_possible(opened), note=_joined(match.note, why))


def _classes(components: Iterable[DrugComponent]) -> frozenset[str]:
    return frozenset(component.drug_class for component in components if component.drug_class)


def _possible(components: Iterable[DrugComponent]) -> tuple[str, ...]:
    return tuple(sorted({name for component in components for name in component.possible_classes}))


def _joined(*parts: str | None) -> str:
    return "; ".join(part for part in parts if part)
