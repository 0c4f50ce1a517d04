"""The gate before extraction: does a resource have the shape of FHIR R4? What it says is checked by its reader.

The R4B models of `fhir.resources` stand in for R4; what we read is alike in both. They let some nonsense through
(unknown status words, numbers as text, a JSON text in place of an object), so readers check what they use themselves.
The import is inside: it costs a tenth of a second, and a command that reads no resource should not pay it.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from functools import cache
from typing import Any, Protocol

from cds.errors import Issue
from cds.fhir.references import FHIR_ID

_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]{0,63}")
_RULES: Mapping[str, tuple[str, str]] = {
    "missing": ("is required and missing", "Send the element"),
    "extra_forbidden": ("is no element of this resource in FHIR R4", "Leave it out, or send it as an extension"),
    "string_type": ("is not a text", "Send a JSON string"),
    "string_pattern_mismatch": ("does not have the form R4 asks for", "Write it as the R4 data type says"),
    "value_error": ("does not keep a rule of R4", "Write the element as the R4 data type says"),
    "wrong-resource-type": ("is not the resource expected here", "Send the resource in the element meant for it"),
}
_ABSTRACT = ("Resource", "DomainResource")
_OTHER_RULE = ("is not of the type R4 asks for", "Write the element as the R4 data type says")
_WHOLE = "the resource"
_DATED = re.compile(r"(?:[dD]ate|[tT]ime|[iI]nstant|start|end|issued|authoredOn|recorded|lastUpdated)(?:\[\d+\])?$")
_NO_DATE = (
    "is no date of FHIR R4",
    "Send YYYY, YYYY-MM, YYYY-MM-DD, or a date and time with seconds and time zone",
)
_R5_MEDICATION = "is the R5 form of the medicine; this service reads R4"


class _Model(Protocol):
    @classmethod
    def model_validate(cls, obj: object) -> object: ...


def refusal(resource: Mapping[str, Any]) -> Issue | None:
    """Say why `resource` is not FHIR R4, or None where it passes.

    Names the first place and rule that fails and never repeats what stands there. Raises nothing.
    """
    sent, identity = resource.get("resourceType"), resource.get("id")
    kind = sent if isinstance(sent, str) and _NAME.fullmatch(sent) else "Resource"
    name = f"{kind}/{identity if isinstance(identity, str) and FHIR_ID.fullmatch(identity) else '?'}"
    model = _model(kind)
    if model is None:
        return Issue(
            resource=name,
            path="resourceType",
            problem="is no resource type of FHIR R4",
            fix="Send the resource with its R4 type",
        )
    if kind.startswith("Medication") and "medication" in resource:
        return Issue(
            resource=name,
            path="medication",
            problem=_R5_MEDICATION,
            fix="Send medicationCodeableConcept or medicationReference",
        )
    return _failure(model, resource, name)


def _failure(model: type[_Model], resource: Mapping[str, Any], name: str) -> Issue | None:
    from pydantic import ValidationError

    try:
        model.model_validate(resource)
    except ValidationError as error:
        first = error.errors(include_url=False, include_context=False, include_input=False)[0]
        path = _path(first["loc"])
        problem, fix = _rule(first["type"], path)
        return Issue(resource=name, path=path, problem=problem, fix=fix)
    except RecursionError:  # the models recurse through extensions; nothing of theirs is left half-done by it
        return Issue(
            resource=name,
            path="extension",
            problem="is nested too deeply to be checked",
            fix="Send fewer levels of extensions or items",
        )
    except (KeyError, TypeError, AttributeError):  # how the models fail on an unknown or mistyped contained resource
        return Issue(
            resource=name,
            path="contained",
            problem="holds something that is no resource of FHIR R4",
            fix="Send contained resources with their R4 type",
        )
    return None


@cache
def _model(kind: str) -> type[_Model] | None:
    from fhir.resources.R4B import get_fhir_model_class

    try:
        model: type[_Model] = get_fhir_model_class(kind)
    except (KeyError, LookupError, ValueError):
        return None
    is_resource = issubclass(model, get_fhir_model_class("Resource")) and kind not in _ABSTRACT
    return model if is_resource else None  # the library knows data types and backbone elements by name too


def _rule(name: str, path: str) -> tuple[str, str]:
    if name == "value_error" and path == _WHOLE:
        return "breaks a rule between elements, as two forms of one element[x]", "Send only one of the forms"
    if name == "value_error" and _DATED.search(path):
        return _NO_DATE
    return next((words for ending, words in _RULES.items() if name.endswith(ending)), _OTHER_RULE)


def _path(location: Sequence[str | int]) -> str:
    """The place FHIRPath-like: `dosageInstruction[0].text`. A name the sender made up is not repeated."""
    path = ""
    for step in location:
        if isinstance(step, int):
            path += f"[{step}]"
        elif step == "resource_type":
            path += ".resourceType"
        elif step != "root":
            path += f".{step}" if _NAME.fullmatch(step) else ".?"
    return path.removeprefix(".") or _WHOLE
