"""A patient by reference: fetch the resources the rules read from a FHIR server on our list, as one Bundle.

How a server is asked, and the limits on it, belong to `fetch_pages.py`. What the resources mean is for `cds.fhir` alone.
"""

from __future__ import annotations

import random
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import orjson
import requests

from cds.service.fetch_pages import Address, FetchError, FetchRules, Source, base_address

__all__ = ["FetchError", "FetchResult", "FetchRules", "Wanted", "fetch_patient"]

_PATIENT = re.compile(r"(?:Patient/)?(?P<id>[A-Za-z0-9\-.]{1,64})")  # the id of FHIR R4
_TOKEN = re.compile(r"[A-Za-z0-9\-._~+/]{1,8192}=*")  # RFC 6750, section 2.1
_PAGE = 200
_MEDICATION = "Medication"
_NOT_OFFERED = frozenset({400, 404, 501})
# The types of cds.fhir.bundle.USED_TYPES but Patient, which is read, and Medication, which comes with those that name it.
_WITH_MEDICATIONS = ("MedicationRequest", "MedicationStatement", "MedicationDispense", "MedicationAdministration")
_ALONE = (
    "Observation",
    "Condition",
    "AllergyIntolerance",
    "Procedure",
    "Device",
    "Encounter",
    "ServiceRequest",
)


@dataclass(frozen=True, slots=True)
class Wanted:
    """Whom a request names: the patient ("x" or "Patient/x") on a server, and the token to read there, if any."""

    fhir_server: str
    patient: str = field(repr=False)
    access_token: str | None = field(repr=False, default=None)


@dataclass(frozen=True, slots=True)
class FetchResult:
    """A collection Bundle as JSON, and the types the server does not offer, sorted: of those nothing is known.

    "Medication" among them means that orders came without the medications they refer to.
    """

    bundle: bytes = field(repr=False)
    skipped: tuple[str, ...] = ()


def fetch_patient(
    wanted: Wanted,
    rules: FetchRules,
    *,
    session_factory: Callable[[], requests.Session],
    sleep: Callable[[float], None],
    clock: Callable[[], float],
    jitter: Callable[[], float] = random.random,
) -> FetchResult:
    """Fetch the Patient and the resources of the types in use.

    A type for which the server answers 400, 404 or 501 is left out and named in the result. Raises FetchError for
    everything else that is not as it should be; nothing is returned in part.

    `clock` counts seconds and never goes back. `session_factory` may set certificates (`verify` to a file of authorities,
    `cert`) and proxies; the environment's are not read. Verification cannot be switched off, and no redirect is followed.
    """
    base = _listed(wanted.fhir_server, rules)
    patient = _patient_id(wanted.patient)
    token = _token(wanted.access_token)
    entries: list[dict[str, Any]] = []
    skipped: set[str] = set()
    with Source(base, token, rules, session_factory(), sleep=sleep, clock=clock, jitter=jitter) as source:
        # Without fullUrl: behind a gateway a server may write another base address than ours into those of the others.
        entries.append({"resource": _read_patient(source, base, patient)})
        for kind in (*_WITH_MEDICATIONS, *_ALONE):
            found, missing = _search(source, kind, patient)
            entries.extend(found)
            skipped |= missing
    bundle = orjson.dumps({"resourceType": "Bundle", "type": "collection", "entry": entries})
    if len(bundle) > rules.max_bytes:  # numbers may be longer than as they were sent
        raise FetchError(
            502,
            f"FHIR server {base.name}: the patient's data are more than {rules.max_bytes} bytes",
            "Send the Bundle itself, with fewer resources",
        )
    return FetchResult(bundle, tuple(sorted(skipped)))


def _listed(server: str, rules: FetchRules) -> Address:
    """The address as the list has it. Raises FetchError (400)."""
    wanted = base_address(server)
    if wanted is None:
        raise FetchError(
            400,
            "fhir_server is no plain base address",
            "Send it like https://fhir.example.org/r4, without credentials, query, fragment or steps in the path",
        )
    if wanted not in map(base_address, rules.servers):
        raise FetchError(
            400,
            f"FHIR server {wanted.name}: this base address is not on the list of servers to fetch from",
            "Have it put on the list in the settings of this service, or send the Bundle itself",
        )
    return wanted


def _patient_id(text: str) -> str:
    match = _PATIENT.fullmatch(text)
    if match is None or match["id"] in (".", ".."):
        raise FetchError(
            400,
            "patient is no id of FHIR R4",
            'Send the id of the Patient, or "Patient/id": up to 64 letters, digits, hyphens and full stops',
        )
    return match["id"]


def _token(text: str | None) -> str | None:
    if text is not None and not _TOKEN.fullmatch(text):
        raise FetchError(400, "access_token is no bearer token", "Send the token alone, without the word Bearer")
    return text


def _read_patient(source: Source, base: Address, patient: str) -> dict[str, Any]:
    answer = source.read(f"Patient/{patient}", "Patient")
    if answer.status in (404, 410):
        raise FetchError(
            422, f"FHIR server {base.name}: it knows no such patient", "Send the id this server has for the patient"
        )
    if answer.document is None:
        raise source.refused(answer.status, "Patient")
    if answer.document.get("resourceType") != "Patient" or answer.document.get("id") != patient:
        raise FetchError(
            502,
            f"FHIR server {base.name}: the answer for Patient is another resource than the one asked for",
            "Send the id the patient has now; ids change when records are merged",
        )
    return answer.document


def _search(source: Source, kind: str, patient: str) -> tuple[list[dict[str, Any]], set[str]]:
    """The entries of one type (and the medications they name), and the types that had to be left out."""
    plain = f"{kind}?patient={patient}&_count={_PAGE}"
    has_medications = kind in _WITH_MEDICATIONS
    path, missing = (f"{plain}&_include={kind}:medication" if has_medications else plain), set[str]()
    answer = source.read(path, kind)
    if has_medications and answer.status == 400:  # a server may know the type, but not the inclusion
        path, missing = plain, {_MEDICATION}
        answer = source.read(path, kind)
    if answer.status in _NOT_OFFERED:
        return [], {kind}
    if answer.document is None:
        raise source.refused(answer.status, kind)
    asked_for = {kind, _MEDICATION} if has_medications else {kind}
    found = [
        kept
        for page in source.pages(answer.document, path, kind)
        for entry in page
        if (kept := _kept(entry, asked_for)) is not None
    ]
    return found, missing


def _kept(entry: object, asked_for: set[str]) -> dict[str, Any] | None:
    """The entry with its resource and address alone; None for outcomes and whatever was not asked for."""
    resource = entry.get("resource") if isinstance(entry, dict) else None
    if not isinstance(entry, dict) or not isinstance(resource, dict) or resource.get("resourceType") not in asked_for:
        return None
    url = entry.get("fullUrl")
    return {"fullUrl": url, "resource": resource} if isinstance(url, str) else {"resource": resource}
