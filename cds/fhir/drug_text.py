"""Free text -> medicine, as the last resort: non-proprietary names as whole words, longest first, salts afterwards.

A form that does not act in the whole body is looked for first. A drug named after "stop", "no", "allergy to" and the
like is not matched. Strengths and doses are read elsewhere.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

from cds.clinical.record import Route
from cds.fhir.code_matches import DrugComponent, DrugMatch
from cds.fhir.codings import words_of
from cds.fhir.drug_agreement import SALTS, base_name, can_take_salt, with_salt
from cds.fhir.drug_codes import RANKS, DrugRow

_LOCAL = frozenset(
    "ophthalmic ophth eye eyes eyedrop eyedrops ocular intraocular intravitreal otic ear ears nasal intranasal nostril topical "
    "topically cream ointment gel lotion shampoo foam inhaled inhalation inhaler inhalant nebulizer nebuliser "
    "nebulized nebulised irrigation vaginal dermal cutaneous scalp mouthwash gargle".split()
)
_ORAL = frozenset("oral orally tablet tablets tab tabs capsule capsules cap caps softgel softgels po chewable".split())
_PARENTERAL = frozenset(
    "injection injectable inject injected intravenous intravenously iv ivpb infusion vial syringe subcutaneous "
    "subcutaneously subcut intramuscular".split()
)
_THROUGH_SKIN = frozenset("patch patches transdermal".split())
_SYSTEMIC_PATCHES = frozenset({"nitrate", "central-sympatholytic"})
_EXTENDED = frozenset("er xl xr cr sr la extended controlled modified prolonged".split())
_NEGATIONS = frozenset(
    "no not stop stopped stopping hold held holding discontinue discontinued dc without avoid allergy allergic allergies "
    "never cancel cancelled intolerant intolerance contraindicated instead replace replaces replaced replacing refuses "
    "refused declines declined off except cease ceased withhold withheld".split()
)
_REACH = 4  # words before a name that a negation is looked for in
_SALT_REACH = 4
_NOT_A_MEDICINE = frozenset({"glucosamine", "flush", "lock"})  # salts of other things, and catheter care
_FREE = frozenset({"free"})


@dataclass(frozen=True, slots=True)
class _Mention:
    components: tuple[DrugComponent, ...]
    start: int
    end: int
    is_local: bool


class DrugNames:
    """Non-proprietary names and what they mean."""

    __slots__ = ("_by_first",)

    def __init__(self, names: Iterable[tuple[str, tuple[DrugComponent, ...], bool]] = ()) -> None:
        """Each name with its components and whether the drug only exists in local forms."""
        by_first: dict[str, list[tuple[tuple[str, ...], tuple[DrugComponent, ...], bool]]] = defaultdict(list)
        for name, components, is_local in names:
            words = tuple(words_of(name))
            by_first[words[0]].append((words, components, is_local))
        for entries in by_first.values():
            entries.sort(key=lambda entry: -len(entry[0]))
        self._by_first: Mapping[str, Sequence[tuple[tuple[str, ...], tuple[DrugComponent, ...], bool]]] = dict(by_first)

    def read(self, text: str, *, negations: frozenset[str] = _NEGATIONS) -> DrugRow | None:
        """What a text names, or None. Several names are a combination."""
        words = words_of(text)
        mentions = self._mentions(words, negations)
        if not mentions or not _NOT_A_MEDICINE.isdisjoint(words):
            return None
        components: dict[str, DrugComponent] = {}
        for place, mention in enumerate(mentions):
            until = mentions[place + 1].start if place + 1 < len(mentions) else len(words)
            after = words[mention.end : min(until, mention.end + _SALT_REACH)]
            for component in mention.components:
                salted = _with_salt_after(component, after, words)
                components.setdefault(salted.drug, salted)
        if "sacubitril/valsartan" in components:
            components.pop("valsartan", None)
        is_systemic, route = form_in(words, {c.drug_class for c in components.values()})
        if all(mention.is_local for mention in mentions):
            is_systemic = False
        return DrugRow(
            components=tuple(components.values()),
            matched_by="text",
            rank=RANKS["text"],
            is_systemic=is_systemic,
            route=route,
        )

    def _mentions(self, words: Sequence[str], negations: frozenset[str]) -> list[_Mention]:
        found: list[_Mention] = []
        place = free_from = 0
        while place < len(words):
            entry = self._longest_at(words, place)
            if entry is None:
                place += 1
                continue
            name, components, is_local = entry
            end = place + len(name)
            before = words[max(free_from, place - _REACH) : place]
            if negations.isdisjoint(before) and _FREE.isdisjoint(words[end : end + 1]):
                found.append(_Mention(components, place, end, is_local))
            place = free_from = end
        return found

    def _longest_at(
        self, words: Sequence[str], place: int
    ) -> tuple[tuple[str, ...], tuple[DrugComponent, ...], bool] | None:
        for entry in self._by_first.get(words[place], ()):
            if tuple(words[place : place + len(entry[0])]) == entry[0]:
                return entry
        return None


def form_in(words: Sequence[str], classes: Iterable[str | None]) -> tuple[bool | None, Route | None]:
    """Whether a form named in the text acts in the whole body, and its route; None and None where it names none."""
    present = frozenset(words)
    if "gel" in present and present & {"cap", "caps", "capsule", "capsules", "liqui"}:
        present -= {"gel"}
    if present & _LOCAL:
        return False, "other"
    if present & _THROUGH_SKIN:
        return (
            (True, "transdermal")
            if _SYSTEMIC_PATCHES.issuperset(name for name in classes if name)
            else (False, "other")
        )
    if present & _PARENTERAL:
        return True, "parenteral"
    if present & _ORAL:
        return True, "oral"
    if "%" in present:
        return False, "other"  # a strength in percent is a drop, gel or cream
    return None, None


def complete_from_text(match: DrugMatch, rank: int, texts: Iterable[str]) -> DrugMatch:
    """Let the texts say what the codes leave open: the salt, and a form that does not act in the whole body."""
    for text in texts:
        words = words_of(text)
        if match.is_systemic is None:
            is_systemic, route = form_in(words, {c.drug_class for c in match.components})
            match = replace(match, is_systemic=is_systemic, route=match.route or route)
        for component in match.components:
            if can_take_salt(component, rank):
                salted = _with_salt_after(component, words, words)
                if salted.drug != component.drug:
                    match = with_salt(replace(match, matched_by="text"), salted.drug)
    return match


def _with_salt_after(component: DrugComponent, after: Sequence[str], words: Sequence[str]) -> DrugComponent:
    """The component with the salt named in `after`.

    Extended-release carvedilol is the phosphate. Old displays call the extended-release succinate of metoprolol a tartrate
    (code tables, pitfalls), so those words together leave the salt open.
    """
    if base_name(component.drug) not in SALTS or component.drug not in SALTS:
        return component
    is_extended = not _EXTENDED.isdisjoint(words)
    named = [salt for salt in SALTS[component.drug] if salt in after]
    if component.drug == "carvedilol" and is_extended:
        named = ["phosphate"]
    if len(named) != 1 or (named == ["tartrate"] and is_extended):
        return component
    return replace(component, drug=f"{component.drug} {named[0]}")
