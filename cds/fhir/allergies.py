"""AllergyIntolerance -> intolerances to drugs and classes we use, with the reactions recorded.

The status of verification comes first: a refuted allergy is none. An allergy to anything else is no fact of ours.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal

from cds.clinical.record import Intolerance
from cds.clinical.timeline import PartialDate
from cds.fhir.allergy_codes import merge
from cds.fhir.code_matches import AllergyMatch
from cds.fhir.codings import codings_of, texts_of, words_of
from cds.fhir.intake import Context
from cds.fhir.patient import (
    count_unknown,
    objects_in,
    read_date,
    read_onset,
    source_of,
    status_words,
)

Status = Literal["active", "inactive", "resolved"]
Kind = Literal["allergy", "intolerance", "unspecified"]

NOT_A_FACT = frozenset({"refuted", "entered-in-error"})
_VERIFICATIONS = frozenset(
    {"confirmed", "presumed", "provisional", "differential", "unconfirmed", "refuted", "entered-in-error"}
)
_STATUSES: Mapping[str, Status] = {"active": "active", "inactive": "inactive", "resolved": "resolved"}
_KINDS: Mapping[object, Kind] = {"allergy": "allergy", "intolerance": "intolerance"}
_CRITICALITIES = frozenset({"low", "high", "unable-to-assess"})
# SNOMED CT: no known allergy, and none known to drugs, foods, latex, insects, the environment. From memory; all they
# do here is keep a record of nothing from being counted as a code we do not know.
_NOTHING_KNOWN = frozenset({"716186003", "409137002", "429625007", "716184000", "428197003", "428607008"})
_NOTHING_KNOWN_WORDS = frozenset({"nka", "nkda", "nkfa", "nil", "none"})


def read_allergy(
    resource: Mapping[str, Any], context: Context, *, born: PartialDate | None = None
) -> Intolerance | None:
    """Read one AllergyIntolerance; None where it is refuted, wrong, unknown, or about nothing we use.

    The code decides; without one that names a drug or a class, the substances of its reactions do. No clinical status
    means active. `born` turns an age at onset into a date. Raises nothing.
    """
    source = source_of(resource)
    verification = read_verification(resource, source, context)
    if verification is None:
        return None
    match = _match(resource, source, context)
    if match is None or not (match.drugs or match.drug_classes):
        return None
    reactions = set(match.reactions)
    for reaction in objects_in(resource.get("reaction")):
        for manifestation in objects_in(reaction.get("manifestation")):
            reactions.update(context.codes.reactions(manifestation))
    criticality, kind = resource.get("criticality"), resource.get("type")
    return Intolerance(
        drugs=match.drugs,
        drug_classes=match.drug_classes,
        kind=_KINDS[kind] if isinstance(kind, str) and kind in _KINDS else kind_of(match),
        reactions=tuple(sorted(reactions)),
        status=_status(resource, source, context),
        source=source,
        display=match.display,
        matched_by=match.matched_by,
        criticality=criticality if isinstance(criticality, str) and criticality in _CRITICALITIES else None,
        verification=verification,
        recorded=_recorded(resource, source, context, born),
    )


def kind_of(match: AllergyMatch) -> Kind:
    """Whether the code itself says allergy or intolerance."""
    return _KINDS.get(match.kind, "unspecified")


def read_verification(resource: Mapping[str, Any], source: str, context: Context) -> str | None:
    """How sure the sender is of an allergy or a problem; "unknown" where not said, None where it is no fact.

    Refuted or entered in error by any of its codings is no fact. A status that is no JSON object is refused, since it
    may say just that; one in words we do not know counts as unknown, with a doubt.
    """
    status = resource.get("verificationStatus")
    if status is None:
        return "unknown"
    if not isinstance(status, Mapping):
        context.intake.refuse(
            source, "verificationStatus", "is not a CodeableConcept", "Send a coding of the R4 value set"
        )
        return None
    words = status_words(status, _VERIFICATIONS)
    if not NOT_A_FACT.isdisjoint(words):
        context.intake.inform(
            source,
            "verificationStatus",
            "says that this is refuted or was entered in error, so it does not count",
            "Nothing to do unless the status is wrong",
        )
        return None
    if len(words) == 1:
        return words[0]
    context.intake.doubt(
        source,
        "verificationStatus",
        "names more than one status" if words else "is no status of FHIR R4; it counts as not said",
        "Send one coding of the R4 value set",
    )
    return "unknown"


def _match(resource: Mapping[str, Any], source: str, context: Context) -> AllergyMatch | None:
    code = resource.get("code")
    concepts = [code] if isinstance(code, Mapping) and code else []
    substances = [
        substance
        for reaction in objects_in(resource.get("reaction"))
        for substance in objects_in(reaction.get("substance"))
    ]
    if not concepts and not substances:
        context.intake.refuse(source, "code", "is missing", "Send the code of the substance, drug or class")
        return None
    coded = context.codes.allergy(concepts[0]) if concepts else None
    if coded is not None and (coded.drugs or coded.drug_classes):
        return coded
    named = [match for substance in substances if (match := context.codes.allergy(substance)) is not None]
    if coded is None and not named:
        if not any(_says_nothing_known(concept) for concept in concepts):
            count_unknown("allergy", (*concepts, *substances)[0], context)
        return None
    return merge([match for match in (coded, *named) if match is not None])


def _says_nothing_known(concept: Mapping[str, Any]) -> bool:
    if any(coding.system == "snomed" and coding.code in _NOTHING_KNOWN for coding in codings_of(concept)):
        return True
    told = [words_of(text) for text in texts_of(concept)]
    return any(words[:2] == ["no", "known"] or (len(words) == 1 and words[0] in _NOTHING_KNOWN_WORDS) for words in told)


def _status(resource: Mapping[str, Any], source: str, context: Context) -> Status:
    status = resource.get("clinicalStatus")
    if status is None:
        return "active"
    words = status_words(status, _STATUSES)
    if len(words) == 1:
        return _STATUSES[words[0]]
    context.intake.doubt(
        source,
        "clinicalStatus",
        "is not one status of FHIR R4, so the allergy counts as active",
        "Send active, inactive or resolved as a coding of the R4 value set",
    )
    return "active"


def _recorded(
    resource: Mapping[str, Any], source: str, context: Context, born: PartialDate | None
) -> PartialDate | None:
    """When it came to be known: recordedDate, else its onset."""
    recorded = read_date(resource, "recordedDate", source, context)
    return recorded if recorded is not None else read_onset(resource, source, context, born)
