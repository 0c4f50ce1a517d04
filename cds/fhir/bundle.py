"""A document -> each patient's own resources. Two patients' data never mix.

A resource belongs to the Patient its subject names, in whichever form (relative, absolute, urn, identifier). Without a
subject, or with one that is not in the input, it belongs to nobody and is refused (ruling 43). The result does not depend
on the order of the entries.
"""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from functools import partial
from types import MappingProxyType
from typing import Any

from cds.errors import InputError, Issue
from cds.fhir.entries import Entry, newest_of_each, open_document
from cds.fhir.reading import Limits
from cds.fhir.references import ByAddress, ByIdentifier, Contained, Literal, Target, identifiers_of, target_of

Resolve = Callable[[Any, Mapping[str, Any]], dict[str, Any] | None]

USED_TYPES = frozenset(
    {
        "Patient",
        "Observation",
        "MedicationRequest",
        "Medication",
        "MedicationStatement",
        "MedicationDispense",
        "MedicationAdministration",
        "Condition",
        "AllergyIntolerance",
        "Procedure",
        "Device",
        "Encounter",
        "ServiceRequest",
    }
)
_OTHER_SUBJECT_ELEMENTS = {"AllergyIntolerance": "patient", "Device": "patient"}
_SAME_SUBJECT = "Name the patient the resource is about, and send that Patient in the same input"


@dataclass(frozen=True, slots=True, kw_only=True)
class PatientResources:
    """One patient's resources by type, each type sorted by id; every resource has an `id`.

    Medications are those the patient's own resources refer to. `resolve(reference, holder)` gives the resource a
    Reference inside `holder` points at (contained ones too), None where it is absent or another patient's.
    `read` counts the resources in `resources`; `not_needed` the patient's of types nobody here uses.
    """

    reference: str
    patient: dict[str, Any]
    resources: Mapping[str, tuple[dict[str, Any], ...]]
    resolve: Resolve
    read: int
    not_needed: int
    issues: tuple[Issue, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class SplitInput:
    """The patients of an input, by reference, and the issues that belong to none of them (ruling 51).

    `not_needed` counts resources of unused types that belong to no one patient.
    """

    patients: tuple[PatientResources, ...]
    issues: tuple[Issue, ...] = ()
    not_needed: int = 0


def split_by_patient(document: dict[str, Any], limits: Limits) -> SplitInput:
    """Sort the resources of a Bundle, or of a single resource, by the patient they are about.

    Without a Patient there are no patients and one issue. Raises InputTooLargeError beyond `limits.max_entries`, and
    InputError for Parameters.
    """
    if document.get("resourceType") == "Parameters":
        raise InputError("the input is a Parameters resource", "Send the Bundle that is inside it")
    opened = open_document(document, limits)
    entries, repeats = newest_of_each(opened)
    unowned = list(opened.issues)
    refused = frozenset(
        name for name, issue in repeats.items() if name.startswith("Patient/") and issue.severity == "refused"
    )
    directory = _Directory(entries, [e for e in opened.entries if e.type == "Patient" and e.name in refused])
    if not directory.patients and not refused:
        unowned.append(_no_patient(document))
        unused = sum(1 for entry in entries if entry.type not in USED_TYPES)
        return SplitInput(patients=(), issues=_sorted(unowned), not_needed=unused)

    groups = {name: _Group() for name in directory.patients}
    for entry in entries:
        found = directory.owner(entry, refused)
        owner = found if isinstance(found, str) else None
        if owner is not None:
            groups[owner].entries.append(entry)
        elif isinstance(found, Issue) and entry.type in USED_TYPES:
            unowned.append(found)
        repeat = repeats.pop(entry.name, None)
        if repeat is not None:
            (unowned if owner is None else groups[owner].issues).append(repeat)
    unowned.extend(repeats.values())  # none of the versions was kept
    patients = [_gather(name, group, directory) for name, group in sorted(groups.items())]
    not_needed = sum(1 for entry in entries if entry.type not in USED_TYPES) - sum(p.not_needed for p in patients)
    return SplitInput(patients=tuple(patients), issues=_sorted(unowned), not_needed=not_needed)


@dataclass(slots=True)
class _Group:
    entries: list[Entry] = field(default_factory=list)
    issues: list[Issue] = field(default_factory=list)


class _Directory:
    """Finds entries by reference, fullUrl and identifier, and the Patient each belongs to. Built once, then only read."""

    def __init__(self, entries: list[Entry], refused: Iterable[Entry] = ()) -> None:
        """`refused` Patients are never found, but what could mean one of them is not taken to mean another."""
        self._by_name = {entry.name: entry for entry in entries}
        self._by_url: dict[str, Entry] = {}
        self._by_identifier: dict[tuple[str, str], list[Entry]] = defaultdict(list)
        clashing = Counter(url for entry in (*entries, *refused) for url in entry.urls)
        for entry in entries:
            self._by_url.update({url: entry for url in entry.urls if clashing[url] == 1})
        for entry in (*entries, *refused):
            if entry.type in ("Patient", "Medication"):
                for pair in set(identifiers_of(entry.resource)):
                    self._by_identifier[pair].append(entry)
        self.patients = {entry.name: entry for entry in entries if entry.type == "Patient"}
        self._only_patient = next(iter(self.patients)) if len(self.patients) == 1 else None
        self._entry_of = {id(entry.resource): entry for entry in entries}

    def owner(self, entry: Entry, refused: frozenset[str] = frozenset()) -> str | Issue | None:
        """The Patient ("Patient/p1") an entry belongs to; an issue where that cannot be known; None where it has none."""
        if entry.type == "Patient":
            return entry.name
        if entry.type == "Medication":
            return None
        if entry.type not in USED_TYPES:
            return self._owner_of_unused(entry)
        element = _OTHER_SUBJECT_ELEMENTS.get(entry.type, "subject")
        subject = entry.resource.get(element)
        if subject is None:
            if entry.type == "Device":  # an analyser or a cuff is nobody's implant
                return _issue(entry, element, "is missing, so the device is no one's", _SAME_SUBJECT, "information")
            return _issue(entry, element, "is missing", _SAME_SUBJECT)
        target = target_of(subject)
        if target is None:
            return _issue(entry, element, "is not a reference that can be followed", _SAME_SUBJECT)
        if isinstance(target, (Literal, ByIdentifier)) and target.type not in ("Patient", None):
            return _issue(entry, element, "does not name a Patient", "Send what is about this one person")
        found = self.find(target, entry)
        if found is not None and found.name in self.patients:
            return found.name
        if (isinstance(target, Literal) and target.key in refused) or (found is not None and found.name in refused):
            return None  # said once, for the Patient
        if isinstance(target, ByIdentifier) and len(self._by_identifier.get((target.system, target.value), ())) > 1:
            return _issue(entry, element, "has an identifier that fits several Patients", "Refer by type and id")
        return _issue(entry, element, "names a Patient that is not in the input", _SAME_SUBJECT)

    def _owner_of_unused(self, entry: Entry) -> str | None:
        for element in ("subject", "patient", "beneficiary"):
            target = target_of(entry.resource.get(element))
            found = None if target is None else self.find(target, entry)
            if found is not None and found.name in self.patients:
                return found.name
        return self._only_patient

    def find(self, target: Target, holder: Entry | None) -> Entry | None:
        """The entry a reference in `holder` points at. An address on another server is not the resource of that id here."""
        match target:
            case Contained():
                return None
            case ByAddress():
                return self._by_url.get(target.address.partition("/_history/")[0])
            case ByIdentifier():
                fitting = [
                    entry
                    for entry in self._by_identifier.get((target.system, target.value), ())
                    if target.type in (None, entry.type)
                ]
                return fitting[0] if len(fitting) == 1 else None
        base = target.base if target.base is not None else (holder.base if holder is not None else None)
        if base is not None and (exact := self._by_url.get(f"{base}/{target.key}")) is not None:
            return exact
        found = self._by_name.get(target.key)
        if found is None or (base is not None and found.base is not None and base != found.base):
            return None
        return found

    def holds(self, resource: Mapping[str, Any]) -> bool:
        """True for a Medication that is an entry itself, not contained in another resource."""
        entry = self._entry_of.get(id(resource))
        return entry is not None and entry.type == "Medication"

    def resolve(self, patient: str, reference: Any, holder: Mapping[str, Any]) -> dict[str, Any] | None:
        """As `PatientResources.resolve` says, for `patient`."""
        target = target_of(reference)
        if target is None:
            return None
        if isinstance(target, Contained):
            return _contained(target.id, holder)
        found = self.find(target, self._entry_of.get(id(holder)))
        if found is None or self._belongs_to_another(found, patient):
            return None
        return found.resource

    def _belongs_to_another(self, entry: Entry, patient: str) -> bool:
        owner = self.owner(entry)
        return owner != patient and (isinstance(owner, str) or (isinstance(owner, Issue) and entry.type != "Device"))


def _gather(name: str, group: _Group, directory: _Directory) -> PatientResources:
    resolve = partial(directory.resolve, name)
    by_type: dict[str, dict[str, dict[str, Any]]] = defaultdict(dict)
    for entry in group.entries:
        if entry.type in USED_TYPES:
            by_type[entry.type][entry.id] = entry.resource
            medication = resolve(entry.resource.get("medicationReference"), entry.resource)
            if medication is not None and directory.holds(medication):
                by_type["Medication"][medication["id"]] = medication
    patient = directory.patients[name].resource
    issues = [*group.issues, *_replaced_by(name, patient)]
    return PatientResources(
        reference=name,
        patient=patient,
        resources=MappingProxyType(
            {kind: tuple(found[key] for key in sorted(found)) for kind, found in sorted(by_type.items())}
        ),
        resolve=resolve,
        read=sum(map(len, by_type.values())),
        not_needed=sum(1 for entry in group.entries if entry.type not in USED_TYPES),
        issues=_sorted(issues),
    )


def _replaced_by(name: str, patient: Mapping[str, Any]) -> Iterable[Issue]:
    links = patient.get("link")
    for position, link in enumerate(links if isinstance(links, list) else ()):
        if isinstance(link, Mapping) and link.get("type") == "replaced-by":
            yield Issue(
                resource=name,
                path=f"link[{position}].type",
                problem="says another Patient resource replaces this one; only what is sent about this one is read",
                fix="Send the data under the Patient resource in use",
                severity="information",
            )


def _contained(identity: str, holder: Mapping[str, Any]) -> dict[str, Any] | None:
    contained = holder.get("contained")
    for resource in contained if isinstance(contained, list) else ():
        if isinstance(resource, dict) and identity and resource.get("id") in (identity, f"#{identity}"):
            return resource
    return None


def _no_patient(document: Mapping[str, Any]) -> Issue:
    is_bundle = document.get("resourceType") == "Bundle"
    return Issue(
        resource="Bundle" if is_bundle else "input",
        path="entry" if is_bundle else "resourceType",
        problem="holds no Patient, so there is nobody to assess",
        fix="Send the Patient in the same Bundle as the resources about them",
    )


def _issue(entry: Entry, path: str, problem: str, fix: str, severity: str = "refused") -> Issue:
    return Issue(resource=entry.name, path=path, problem=problem, fix=fix, severity=severity)


def _sorted(issues: Iterable[Issue]) -> tuple[Issue, ...]:
    return tuple(sorted(issues, key=lambda issue: (issue.resource, issue.path, issue.problem)))
