"""A document -> its resources, each named once: Bundles opened, ids settled, repeated resources reduced to one.

Whose resource it is belongs to `bundle.py`.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from datetime import UTC
from typing import Any

from cds.errors import InputTooLargeError, Issue
from cds.fhir.dates import DateNotUnderstood, parse_date
from cds.fhir.reading import Limits
from cds.fhir.references import FHIR_ID, Literal, parse_reference

_DEEPEST_BUNDLE = 5
_NEVER = float("-inf")


@dataclass(frozen=True, slots=True, eq=False)
class Entry:
    """One resource and how it is addressed. `resource` always has an `id`; `base` is the server's address, if known."""

    type: str
    id: str
    resource: dict[str, Any]
    urls: tuple[str, ...] = ()  # the fullUrl of each entry that held it
    base: str | None = None
    is_history: bool = False

    @property
    def name(self) -> str:
        return f"{self.type}/{self.id}"


@dataclass(slots=True)
class Opened:
    """What a document holds. `deleted` is when a history Bundle says a resource was deleted ("Type/id" -> time)."""

    entries: list[Entry] = field(default_factory=list)
    issues: list[Issue] = field(default_factory=list)
    deleted: dict[str, float] = field(default_factory=dict)


def open_document(document: dict[str, Any], limits: Limits) -> Opened:
    """All resources of a Bundle (Bundles inside it opened too), or the one resource that `document` is.

    Raises InputTooLargeError beyond `limits.max_entries`. An entry without a resource (a request, an outcome) is skipped.
    """
    opened = Opened()
    if document.get("resourceType") != "Bundle":
        _add(document, {}, "1", False, opened)
        return opened
    count = 0
    waiting: list[tuple[dict[str, Any], str, int]] = [(document, "", 1)]
    while waiting:
        bundle, prefix, level = waiting.pop()
        is_history = bundle.get("type") == "history"
        for position, entry in enumerate(_entries(bundle, prefix, opened), start=1):
            count += 1
            if count > limits.max_entries:
                raise InputTooLargeError(
                    f"the input holds more than {limits.max_entries} entries",
                    "Send fewer patients at a time, or use the audit for whole panels",
                )
            place = f"{prefix}{position}"
            resource = entry.get("resource") if isinstance(entry, dict) else entry
            if resource is None:
                _note_deletion(entry, is_history, opened)
            elif isinstance(entry, dict) and isinstance(resource, dict) and resource.get("resourceType") == "Bundle":
                if level >= _DEEPEST_BUNDLE:
                    _refuse(
                        opened,
                        f"Bundle/entry-{place}",
                        "entry",
                        "lies in too many Bundles",
                        "Send fewer levels of Bundles",
                    )
                else:
                    waiting.append((resource, f"{place}-", level + 1))
            else:
                _add(resource, entry, place, is_history, opened)
    return opened


def newest_of_each(opened: Opened) -> tuple[list[Entry], dict[str, Issue]]:
    """One entry for each type and id, sorted by both, and the issues that tell of repeats, by "Type/id".

    Equal content (but for `meta`) counts once, silently. Otherwise the newest by `meta.lastUpdated`, then `versionId`;
    where that decides nothing, and for Patients always, none of them. Never depends on the order of the entries.
    """
    by_name: dict[tuple[str, str], list[Entry]] = defaultdict(list)
    for entry in opened.entries:
        by_name[entry.type, entry.id].append(entry)
    kept: list[Entry] = []
    issues: dict[str, Issue] = {}
    for _, group in sorted(by_name.items()):
        newest, issue = _newest(group) if len(group) > 1 else (group[0], None)
        if issue is not None:
            issues[issue.resource] = issue
        if newest is not None and not _is_deleted(newest, opened.deleted):
            kept.append(newest)
    return kept, issues


def _newest(group: list[Entry]) -> tuple[Entry | None, Issue | None]:
    # Where the versions tie, `meta` decides, so that the order of the entries never does.
    ordered = sorted(
        group, key=lambda entry: (_version(entry.resource), repr(entry.resource.get("meta"))), reverse=True
    )
    first = ordered[0]
    others = [entry for entry in ordered[1:] if not _same_content(first.resource, entry.resource)]
    first = replace(
        first,
        urls=tuple(sorted({url for entry in group for url in entry.urls})),
        base=first.base if len({entry.base for entry in group}) == 1 else None,
    )
    if not others:
        return first, None
    is_history = all(entry.is_history for entry in group)
    if first.type == "Patient" and not is_history:
        return None, Issue(
            resource=first.name,
            path="id",
            problem="is the id of two Patient resources with different content, so whose data is whose cannot be known",
            fix="Give every patient an id of their own, or send only the current version",
        )
    if _version(others[0].resource) == _version(first.resource):
        return None, Issue(
            resource=first.name,
            path="meta.lastUpdated",
            problem="does not tell which of several resources with this id is the newest",
            fix="Send only the current version, or meta.lastUpdated with each",
        )
    if is_history:
        return first, None
    return first, Issue(
        resource=first.name,
        path="id",
        problem="was sent more than once with different content; the newest by meta.lastUpdated and versionId is used",
        fix="Send only the current version",
        severity="doubtful",
    )


def _same_content(one: dict[str, Any], other: dict[str, Any]) -> bool:
    try:
        return {**one, "meta": None} == {**other, "meta": None}
    except RecursionError:  # content nested beyond what Python compares; read_json never lets it through
        return False


def _version(resource: dict[str, Any]) -> tuple[float, int, str]:
    meta = resource.get("meta")
    if not isinstance(meta, dict):
        return _NEVER, -1, ""
    version = meta.get("versionId")
    version = version if isinstance(version, str) and FHIR_ID.fullmatch(version) else ""
    number = int(version) if version.isascii() and version.isdigit() else -1
    return _time(meta.get("lastUpdated")), number, "" if number >= 0 else version


def _time(text: object) -> float:
    try:
        when = parse_date(text, UTC).at
        return _NEVER if when is None else when.timestamp()
    except (DateNotUnderstood, OverflowError):  # Overflow: the year 1
        return _NEVER


def _entries(bundle: dict[str, Any], prefix: str, opened: Opened) -> Iterable[Any]:
    entries = bundle.get("entry")
    if entries is None:
        return ()
    if isinstance(entries, list):
        return entries
    name = f"Bundle/entry-{prefix.removesuffix('-')}" if prefix else "Bundle"
    _refuse(opened, name, "entry", "is not a list", "Send the entries as a JSON array")
    return ()


def _add(resource: object, entry: Mapping[str, Any], place: str, is_history: bool, opened: Opened) -> None:
    if not isinstance(resource, dict) or not isinstance(entry, dict):
        _refuse(opened, f"Bundle/entry-{place}", "resource", "is not a JSON object", "Send one FHIR resource an entry")
        return
    kind = resource.get("resourceType")
    if not isinstance(kind, str) or not kind.isascii() or not kind.isalpha() or len(kind) > 64:
        _refuse(
            opened,
            f"Bundle/entry-{place}",
            "resource.resourceType",
            "is no resource type",
            "Send the resource's R4 type",
        )
        return
    full_url = entry.get("fullUrl")
    full_url = full_url.partition("/_history/")[0] if isinstance(full_url, str) and full_url else None
    identity = resource.get("id")
    if identity is None:
        last = full_url.replace(":", "/").rpartition("/")[2] if full_url else ""
        identity = last if FHIR_ID.fullmatch(last) else f"entry-{place}"
        resource = {**resource, "id": identity}
    elif not isinstance(identity, str) or not FHIR_ID.fullmatch(identity):
        _refuse(
            opened,
            f"{kind}/entry-{place}",
            "id",
            "is no id of FHIR R4",
            "Use up to 64 letters, digits, hyphens and full stops",
        )
        return
    target = parse_reference(full_url) if full_url else None
    if isinstance(target, Literal) and target.key != f"{kind}/{identity}":
        opened.issues.append(
            Issue(
                resource=f"{kind}/{identity}",
                path="fullUrl",
                problem="ends in another type or id than the resource has, so it is not used",
                fix="Send a fullUrl that ends in the type and id of the resource",
                severity="doubtful",
            )
        )
        full_url = target = None
    base = target.base if isinstance(target, Literal) else None
    opened.entries.append(Entry(kind, identity, resource, (full_url,) if full_url else (), base, is_history))


def _note_deletion(entry: object, is_history: bool, opened: Opened) -> None:
    """A history Bundle tells of a deletion by an entry without resource: request DELETE Type/id."""
    request, response = ((entry.get(key) if isinstance(entry, dict) else None) for key in ("request", "response"))
    if not is_history or not isinstance(request, dict) or request.get("method") != "DELETE":
        return
    url = request.get("url")
    target = parse_reference(url) if isinstance(url, str) else None
    if isinstance(target, Literal):
        when = _time(response.get("lastModified")) if isinstance(response, dict) else _NEVER
        opened.deleted[target.key] = max(when, opened.deleted.get(target.key, _NEVER))


def _is_deleted(entry: Entry, deleted: Mapping[str, float]) -> bool:
    """True if it was deleted after its newest version, or no one can say which came first."""
    if entry.name not in deleted:
        return False
    updated, when = _version(entry.resource)[0], deleted[entry.name]
    return _NEVER in (updated, when) or when >= updated


def _refuse(opened: Opened, resource: str, path: str, problem: str, fix: str) -> None:
    opened.issues.append(Issue(resource=resource, path=path, problem=problem, fix=fix))
