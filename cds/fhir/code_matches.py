"""What a code or text was found to mean: the answers of `codes.CodeBook`."""

from __future__ import annotations

from dataclasses import dataclass

from cds.clinical.record import MatchedBy, Route


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugComponent:
    """One ingredient of a medicine. Strength is of one unit of the product (one tablet, one mL), None if unknown.

    `strength` and `strength_unit` stand as the code table has them ("20", "MEQ"; "10", "MG/ML"); `strength_mg` only
    for mass. `possible_classes` says what a component without a class may be: a code that names no ingredient ("and
    diuretics"), a code nobody has checked, or codings that disagree.
    """

    drug: str  # INN, lower case, salt where it matters
    drug_class: str | None
    strength_mg: float | None = None
    strength: float | None = None
    strength_unit: str | None = None
    possible_classes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class DrugMatch:
    """What a medication concept means. `possible_classes` concerns the components whose class is None, and is filled
    where codings disagree or leave the class open (see `DrugComponent.possible_classes`).
    """

    components: tuple[DrugComponent, ...]
    matched_by: MatchedBy
    is_systemic: bool | None
    route: Route | None = None
    dose_form: str | None = None
    possible_classes: tuple[str, ...] = ()
    note: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class AnalyteMatch:
    """What an observation code measures: analyte slug and the `use` of the code (prefer, accept, convert, ...)."""

    analyte: str
    use: str
    matched_by: str
    method: str | None = None
    note: str | None = None
    unit: str | None = None  # the code's usual UCUM unit, where the table names exactly one


@dataclass(frozen=True, slots=True, kw_only=True)
class ConceptMatch:
    """The concepts a problem, procedure or device code counts as, by role; each sorted.

    `weak` ones only hint (and may become certain with a second code, see `CodeBook.partners`); `qualifiers` count only
    where the code stands as the severity of a finding.
    """

    include: tuple[str, ...] = ()
    weak: tuple[str, ...] = ()
    excluded: tuple[str, ...] = ()
    qualifiers: tuple[str, ...] = ()
    display: str = ""
    matched_by: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class AllergyMatch:
    """What an allergy code is about: drugs, their classes, and the reaction the code itself names.

    No drugs but classes: the whole class. Neither: known, but no allergy to anything we use. `is_finding` is True for
    a code that by itself says "allergy to" or "adverse effect of", so that it also counts as the code of a Condition.
    """

    drugs: tuple[str, ...] = ()
    drug_classes: tuple[str, ...] = ()
    reactions: tuple[str, ...] = ()
    kind: str = "unspecified"
    display: str = ""
    matched_by: str = ""
    is_finding: bool = False
