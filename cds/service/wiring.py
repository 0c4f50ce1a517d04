"""From the settings to the application: every part made and joined. Here the service learns the time; nothing else is decided."""

from __future__ import annotations

import time
from datetime import UTC, datetime
from zoneinfo import ZoneInfo

import requests
from flask import Flask

from cds import assessment
from cds.content.load import Content, load_content
from cds.content.site import read_site
from cds.content.site_overlay import with_site
from cds.fhir.bundle import USED_TYPES
from cds.fhir.validate import refusal
from cds.service.app import create_app
from cds.service.auth import Gatekeeper
from cds.service.contract import Contract
from cds.service.fetch import FetchRules, Wanted, fetch_patient
from cds.service.logs import Log
from cds.service.metrics import Metrics, Shared, share
from cds.service.parts import Parts
from cds.service.rate import Rate
from cds.service.requests_in import Fetch
from cds.service.settings import Settings, SettingsError
from cds.store import Store, open_store

_NOBODY = b'{"resourceType": "Patient", "id": "nobody"}'
_LONGEST_BODY_SECONDS = 10.0  # no sender needs longer for a body within the limits; others wait for the thread


def open_log(settings: Settings) -> Log:
    """The log of the service on stdout, at the level of the settings."""
    return Log(settings.log_level, now=_now)


def prepare(settings: Settings) -> None:
    """Do once what must be right before anybody is served: the content and the site profile, token keys, the store's tables.

    What takes time at its first use is made here too, so that workers, forked later, have it. Raises a CdsError that
    says what is wrong and where.
    """
    _warm(read_content(settings))
    Gatekeeper(settings.tokens, now=_now)
    if settings.fhir_servers:
        _rules(settings)
    store = _open(settings)
    try:
        store.migrate()
    finally:
        store.close()


def build(settings: Settings, *, log: Log | None = None, shared: Shared | None = None) -> Flask:
    """Build the application of one process, after `prepare`. Raises a CdsError if a part cannot be made.

    With `shared`, counts are kept together with those of the server's other workers.
    """
    log = log or open_log(settings)
    if shared is not None:
        share(shared)
    watch = Metrics(log, folder=None if shared is None else shared.folder)
    content = read_content(settings)
    return create_app(
        Parts(
            content=content,
            zone=settings.zone or ZoneInfo(content.zone or "UTC"),
            now=_now,
            clock=time.perf_counter,
            callers=Gatekeeper(settings.tokens, now=_now, tell=watch.refused),
            watch=watch,
            store=_open(settings),
            fetch=_fetch(settings, log) if settings.fhir_servers else None,
            wait=Rate(settings.requests_a_minute, clock=time.monotonic).wait,
            limits=settings.limits,
            body_seconds=min(_LONGEST_BODY_SECONDS, settings.request_seconds),
        )
    )


def read_content(settings: Settings) -> Content:
    """The content, with the site profile laid over it if the settings name one. Raises ContentError, SettingsError."""
    content = load_content()
    if settings.site_profile is None:
        return content
    try:
        data = settings.site_profile.read_bytes()
    except OSError as error:
        problem = f"the file cannot be read ({error.strerror or type(error).__name__})"
        raise SettingsError("SITE", problem, "Give the path of a site profile that this program may read") from None
    return with_site(content, read_site(data, name=settings.site_profile.name))


def _warm(content: Content) -> None:
    """Build the models of the resources we read, and the published document: half a second that no request should wait."""
    for kind in sorted(USED_TYPES):
        refusal({"resourceType": kind})
    Contract.load()
    assessment.assess(_NOBODY, content, as_of=_now())


def _open(settings: Settings) -> Store:
    return open_store(settings.store_url, secret=settings.store_secret, keep_references=settings.keep_references)


def _rules(settings: Settings) -> FetchRules:
    return FetchRules(
        servers=settings.fhir_servers,
        seconds=float(settings.request_seconds),
        max_bytes=settings.limits.max_bytes,
        max_entries=settings.limits.max_entries,
    )


def _fetch(settings: Settings, log: Log) -> Fetch:
    rules = _rules(settings)

    def fetch(server: str, patient: str, token: str | None) -> tuple[bytes, tuple[str, ...]]:
        result = fetch_patient(
            Wanted(server, patient, token),
            rules,
            session_factory=requests.Session,
            sleep=time.sleep,
            clock=time.monotonic,
        )
        if result.skipped:
            log.warning("types_not_offered", types=result.skipped)
        return result.bundle, result.skipped

    return fetch


def _now() -> datetime:
    return datetime.now(UTC)
