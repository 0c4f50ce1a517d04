"""The command `gdmt-cards`. Reads files and the clock, writes JSON on stdout and messages on stderr; decides nothing else.

Imports of the program itself stand inside the commands, so that `--help` is quick.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from datetime import UTC, datetime, tzinfo
from typing import TYPE_CHECKING, Any, NoReturn, TypeVar

import click

if TYPE_CHECKING:
    from cds.content.load import Content
    from cds.service.settings import Settings

T = TypeVar("T")
EXIT_CODES = """\b
Exit codes:
  0   done; what could not be used is listed as issues
  2   wrong use of the command
  10  the input cannot be read as a whole
  11  with --strict: at least one resource was refused
  12  the input is larger, longer or deeper than allowed
  13  the input holds no patient that can be assessed
  14  a request over HTTP cannot be served as sent
  20  our own tables are wrong
  21  a setting of the service is wrong
  22  the site profile is wrong
  30  the store of replies cannot be used
  69  a part is not installed
  70  an error of the program itself
"""
_STRICT, _NO_PATIENT, _NOT_INSTALLED, _OWN_ERROR = 11, 13, 69, 70
_PATIENTS = ("assessments", "records", "checks")  # one list in each answer


@click.group(context_settings={"help_option_names": ["-h", "--help"]}, epilog=EXIT_CODES)
@click.version_option(package_name="gdmt-cards", prog_name="gdmt-cards")
def main() -> None:
    """Heart-failure decision support: FHIR R4 bundles in, recommendation cards out.

    Advice for licensed clinicians; content is not clinically signed off.
    """


_site_option = click.option(
    "--site",
    type=click.Path(exists=True, dir_okay=False),
    metavar="PROFILE.toml",
    envvar="GDMT_CARDS_SITE",
    help="Site profile to lay over the content.",
)


def _input_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give `command` the argument and the options that every command reading a Bundle has."""
    for decorate in (
        click.option("--strict", is_flag=True, help="Exit with 11 if any resource was refused."),
        click.option(
            "--zone",
            metavar="NAME",
            envvar="GDMT_CARDS_ZONE",
            help="Time zone (IANA name) whose calendar days count. Default: the site profile's, else UTC.",
        ),
        _site_option,
        click.option(
            "--as-of",
            "as_of",
            metavar="DATE",
            help="The moment to assess: YYYY-MM-DD (its end) or an instant with zone. Default: now.",
        ),
        click.argument("bundle", type=click.Path(exists=True, dir_okay=False, allow_dash=True), metavar="BUNDLE.json"),
    ):
        command = decorate(command)
    return command


@main.command(epilog=EXIT_CODES, short_help="Print the cards of each patient.")
@_input_options
@click.option("--trace", is_flag=True, help="List every rule's finding, not only the cards.")
def assess(bundle: str, as_of: str | None, zone: str | None, site: str | None, strict: bool, trace: bool) -> None:
    """Assess each patient of BUNDLE.json (or of standard input, "-") and print their cards as JSON."""

    def work(data: bytes, content: Content, moment: datetime) -> dict[str, Any]:
        from cds import assessment

        return assessment.assess(data, content, as_of=moment, trace=trace)

    _run(work, bundle, as_of, zone, site, strict=strict)


@main.command(epilog=EXIT_CODES, short_help="Print what was understood of the data.")
@_input_options
def record(bundle: str, as_of: str | None, zone: str | None, site: str | None, strict: bool) -> None:
    """Print what was understood of each patient's data in BUNDLE.json, and what was not, as JSON."""

    def work(data: bytes, content: Content, moment: datetime) -> dict[str, Any]:
        from cds import assessment

        return assessment.describe_records(data, content, as_of=moment)

    _run(work, bundle, as_of, zone, site, strict=strict)


@main.command("check-order", epilog=EXIT_CODES, short_help="Check the draft orders of each patient.")
@_input_options
def check_order(bundle: str, as_of: str | None, zone: str | None, site: str | None, strict: bool) -> None:
    """Check the orders under the pen (the MedicationRequests of BUNDLE.json with status "draft") and print the answer."""

    def work(data: bytes, content: Content, moment: datetime) -> dict[str, Any]:
        from cds import assessment

        return assessment.check_orders(data, content, as_of=moment)

    _run(work, bundle, as_of, zone, site, strict=strict)


@main.command(short_help="Print the rule catalogue.")
@click.argument("rule", required=False)
@click.option(
    "--format",
    "form",
    type=click.Choice(["text", "markdown", "json"]),
    default="text",
    show_default=True,
    help="How to print it.",
)
@_site_option
def rules(rule: str | None, form: str, site: str | None) -> None:
    """Print the rule catalogue, or one RULE: what it asks, its numbers and sources, what it needs and never does."""
    from cds.content.catalogue import as_markdown, as_text, catalogue

    found = [one for one in catalogue(_checked(lambda: _content(site))) if rule in (None, one["rule"])]
    if not found:
        raise click.BadParameter("no rule has this id; without one all are listed.", param_hint="RULE")
    if form == "json":
        _print({"format": "gdmt-cards/rules", "format_version": "1.0", "rules": found})
    else:
        click.echo(as_text(found) if form == "text" else as_markdown(found))


@main.command(short_help="Serve cards over HTTP.")
def serve() -> None:
    """Serve cards over HTTP, by the settings in GDMT_CARDS_* variables; on loopback unless they say otherwise."""
    _served(lambda settings: _serve(settings))


@main.command(short_help="Remove kept replies and shown cards.")
@click.option("--before", metavar="DATE", help="Remove what was kept before this day. Default: by the settings.")
@click.option("--forget", "patient", metavar="PATIENT", help='Remove all that was kept of one patient, "Patient/id".')
def purge(before: str | None, patient: str | None) -> None:
    """Remove replies and shown cards from the store: older than a day, or all of one patient."""
    from datetime import date, timedelta

    def work(settings: Settings) -> None:
        from cds.store import open_store

        try:
            day = date.fromisoformat(before) if before is not None else None
        except ValueError:
            raise click.BadParameter("it is no day: write YYYY-MM-DD.", param_hint="--before") from None
        store = open_store(settings.store_url, secret=settings.store_secret, keep_references=settings.keep_references)
        try:
            if patient is not None:
                count = store.forget(patient)
            else:
                last = datetime.now(settings.zone or UTC).date() - timedelta(days=settings.retention_days)
                count = store.purge(day if day is not None else last)
        finally:
            store.close()
        click.echo(f"removed: {count.replies} replies, {count.shown_cards} shown cards")

    _served(work)


def _serve(settings: Settings) -> None:
    from cds.service.serve import serve as start

    start(settings)


def _served(work: Callable[[Settings], None]) -> None:
    """Read the settings and do work that needs the extra `service`."""
    import os

    try:
        from cds.service.settings import read_settings
    except ModuleNotFoundError as error:
        _stop(f"{error.name} is not installed.\nInstall the extra: pip install 'gdmt-cards[service]'", _NOT_INSTALLED)
    _checked(lambda: work(read_settings(os.environ)))


def _content(site: str | None) -> Content:
    """The content, with the site profile laid over it if there is one."""
    from cds.content.load import load_content

    content = load_content()
    if site is None:
        return content
    from cds.content.site import read_site
    from cds.content.site_overlay import with_site

    with click.open_file(site, "rb") as stream:
        return with_site(content, read_site(stream.read(), name=site))


def _checked(work: Callable[[], T]) -> T:
    """Turn an error of ours into its message and exit code."""
    from cds.errors import CdsError

    try:
        return work()
    except CdsError as error:
        _stop(str(error), error.exit_code)


def _run(
    work: Callable[[bytes, Content, datetime], dict[str, Any]],
    bundle: str,
    as_of: str | None,
    zone: str | None,
    site: str | None,
    *,
    strict: bool,
) -> None:
    """Read, work, print; turn every error into a message and its exit code."""
    from cds.errors import CdsError

    content = _checked(lambda: _content(site))
    moment = _moment(as_of, zone if zone is not None else content.zone or "UTC")
    try:
        answer = work(_read(bundle), content, moment)
    except CdsError as error:
        _stop(str(error), error.exit_code)
    except Exception as error:  # noqa: BLE001 - the last resort: a traceback could show a patient's values
        where = _place_of(error)
        _stop(
            f"an error of the program itself ({type(error).__name__} at {where}).\nPlease report it with this line.",
            _OWN_ERROR,
        )
    _print(answer)
    refused = _refused(answer)
    if not next(answer[key] for key in _PATIENTS if key in answer):
        _stop(
            "the input holds no patient that can be assessed.\nSend each Patient in the same Bundle; see the issues.",
            _NO_PATIENT,
        )
    if strict and refused:
        _stop(f'{refused} resources or values were refused.\nSee the issues with severity "refused".', _STRICT)


def _moment(as_of: str | None, zone: str) -> datetime:
    from cds.fhir.dates import DateNotUnderstood, parse_as_of

    where = _zone(zone)
    if as_of is None:
        return datetime.now(where)
    try:
        return parse_as_of(as_of, where)
    except DateNotUnderstood as error:
        way_out = "Write YYYY-MM-DD, or an instant with seconds and time zone."
        raise click.BadParameter(f"it {error.problem}. {way_out}", param_hint="--as-of") from None


def _zone(name: str) -> tzinfo:
    from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

    try:
        return ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise click.BadParameter("it is no IANA time zone name, such as Europe/Vienna.", param_hint="--zone") from None


def _read(bundle: str) -> bytes:
    """Read at most one byte more than allowed, so that a huge input is refused without being held."""
    from cds.fhir.reading import COMMAND_LINE_LIMITS

    with click.open_file(bundle, "rb") as stream:
        data: bytes = stream.read(COMMAND_LINE_LIMITS.max_bytes + 1)
    return data


def _print(answer: dict[str, Any]) -> None:
    import orjson

    sys.stdout.buffer.write(orjson.dumps(answer, option=orjson.OPT_INDENT_2 | orjson.OPT_APPEND_NEWLINE))
    sys.stdout.buffer.flush()


def _refused(answer: dict[str, Any]) -> int:
    """Count the refusals in an answer, of whatever patient."""
    issues = [*answer["issues"]]
    for one in next(answer[key] for key in _PATIENTS if key in answer):
        issues += one["issues"] if "issues" in one else one["intake"]["issues"]
    return sum(issue["severity"] == "refused" for issue in issues)


def _place_of(error: Exception) -> str:
    """Module and line of the innermost frame; never its values."""
    trace = error.__traceback__
    while trace is not None and trace.tb_next is not None:
        trace = trace.tb_next
    return "?" if trace is None else f"{trace.tb_frame.f_globals.get('__name__', '?')}:{trace.tb_lineno}"


def _stop(message: str, code: int) -> NoReturn:
    click.echo(f"gdmt-cards: {message}", err=True)
    raise SystemExit(code)
