"""A site profile: one TOML file in which a health system lays its own choices over the content. Read and checked here.

The published schema `site-profile.schema.json` says which keys there are and what they hold; whether the ids, drugs and
analytes named exist is for `site_overlay`. Every problem names its key as a dotted path (lists count from 0) and the way out.

    CdsError
    └── SiteProfileError       a site profile cannot be used: refuse to start    exit 22   500
"""

from __future__ import annotations

import difflib
import hashlib
import json
import re
import tomllib
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date, datetime, time
from functools import cache
from typing import Any, cast

from jsonschema import Draft202012Validator
from jsonschema.exceptions import ValidationError

from cds.cards.card import Tier
from cds.content.published import published
from cds.errors import CdsError

SCHEMA = "schemas/site-profile.schema.json"
_MOST_PROBLEMS_TOLD = 20
_AT_THE_TOP = "rules_off"  # the one key that is no table: written further down, TOML counts it to the table above it
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_KINDS = {"object": "a table", "array": "a list", "string": "a text", "number": "a number", "integer": "a whole number"}
_KEYED_BY_ANSWER = ("tiers", "headlines")
_Path = tuple[str | int, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteProblem:
    """One thing in a profile that cannot be used: its key as a dotted path, what is wrong, and the way out."""

    key: str
    problem: str
    fix: str

    def __str__(self) -> str:
        return f"{self.key}: {self.problem}.\n{self.fix}"


class SiteProfileError(CdsError):
    """A site profile cannot be used as it is; `problems` holds everything found wrong. The program refuses to start."""

    exit_code = 22
    http_status = 500

    def __init__(self, profile: str, problems: Sequence[SiteProblem]) -> None:
        told = [f"{profile}: {problem}" for problem in problems[:_MOST_PROBLEMS_TOLD]]
        left = len(problems) - len(told)
        super().__init__("\n".join([*told, *([f"{profile}: and {left} more problems."] if left else [])]))
        self.profile, self.problems = profile, tuple(problems)


@dataclass(frozen=True, slots=True, kw_only=True)
class SitePart:
    """One ingredient of a medicine. `drug_class` only checks the content's own."""

    drug: str
    strength_mg: float | None = None  # in one tablet or capsule
    drug_class: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteDrugCode:
    """A local drug code; more than one part is a combination. `system` as the site's data has it."""

    system: str
    code: str
    parts: tuple[SitePart, ...]
    is_combination: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteAnalyteCode:
    """A local observation code. `system` as the site's data has it."""

    system: str
    code: str
    analyte: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitChange:
    """The new value of a limit, in the unit of its row."""

    value: float
    reason: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ScheduleChange:
    """The new days of a timed check; None leaves the content's number."""

    opens_after_days: int | None = None
    due_after_days: int | None = None
    grace_days: int | None = None
    reason: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SignOff:
    """Who signed which content off clinically, and when."""

    who: str
    when: date
    content_version: str


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteProfile:
    """A profile as written: complete and well formed, but not yet held against the content.

    `file` is where it was read from, for messages; `sha256` that of its bytes. Codes stand in the order of the file.
    """

    file: str
    sha256: str
    name: str
    version: str
    region: str | None = None
    zone: str | None = None
    drug_codes: tuple[SiteDrugCode, ...] = ()
    analyte_codes: tuple[SiteAnalyteCode, ...] = ()
    units: Mapping[str, str] = field(default_factory=dict)
    limits: Mapping[str, LimitChange] = field(default_factory=dict)
    schedule: Mapping[str, ScheduleChange] = field(default_factory=dict)
    rules_off: tuple[str, ...] = ()
    tiers: Mapping[str, Tier] = field(default_factory=dict)
    headlines: Mapping[str, str] = field(default_factory=dict)
    cautions: Mapping[str, str] = field(default_factory=dict)
    sign_off: SignOff | None = None


def read_site(data: bytes, *, name: str) -> SiteProfile:
    """Read a profile from the bytes of its TOML file; `name` is the file's, for messages.

    Raises SiteProfileError for what is not TOML (with the line), or with every departure from the published schema.
    """
    raw = as_json(_toml(data, name))
    problems = sorted(_problems(raw), key=lambda problem: problem.key)
    if problems:
        raise SiteProfileError(name, problems)
    return _profile(raw, name, hashlib.sha256(data).hexdigest())


def as_json(value: Any) -> Any:
    """Parsed TOML as JSON has it: dates and times as ISO 8601 texts."""
    match value:
        case dict():
            return {key: as_json(item) for key, item in value.items()}
        case list():
            return [as_json(item) for item in value]
        case date() | datetime() | time():
            return value.isoformat()
        case _:
            return value


def dotted(path: Iterable[str | int]) -> str:
    """A path as TOML writes it, list positions in brackets: `code.drug[0].code`, `tiers."start-mra.start"`."""
    parts: list[str] = []
    for part in path:
        if isinstance(part, int):
            parts.append(f"[{part}]")
        else:
            written = part if _BARE_KEY.fullmatch(part) else json.dumps(part, ensure_ascii=False)
            parts.append(f".{written}" if parts else written)
    return "".join(parts) or "the whole profile"


def nearest(word: str, known: Iterable[str]) -> str:
    """ " Did you mean 'potassium'?" for a word that is like a known one, else nothing."""
    found = difflib.get_close_matches(word, sorted(known), n=1, cutoff=0.6)
    return f" Did you mean '{found[0]}'?" if found else ""


@cache
def _validator() -> Draft202012Validator:
    checker = Draft202012Validator.FORMAT_CHECKER
    return Draft202012Validator(json.loads(published(SCHEMA)), format_checker=checker)


def _toml(data: bytes, name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(data.decode("utf-8-sig"))
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        problem = SiteProblem(key=f"line {line}", problem="is not UTF-8 text", fix="Save the file as UTF-8.")
    except tomllib.TOMLDecodeError as error:
        problem = _syntax_problem(str(error), data)
    except RecursionError:
        problem = SiteProblem(
            key="the whole profile",
            problem="nests its lists or tables too deeply",
            fix="Write it as the example has it.",
        )
    raise SiteProfileError(name, [problem])


def _syntax_problem(said: str, data: bytes) -> SiteProblem:
    """The parser says "... (at line 3, column 7)" or "... (at end of document)"."""
    what, _, where = said.rpartition(" (at ")
    found = re.match(r"line (\d+)", where)
    line = int(found[1]) if found else data.count(b"\n") + (not data.endswith(b"\n"))
    return SiteProblem(
        key=f"line {line}",
        problem=f"is not TOML: {what or said}",
        fix="Correct the line; texts stand in quotes, each key is given once.",
    )


def _problems(raw: Mapping[str, Any]) -> Iterator[SiteProblem]:
    """Every departure from the schema, one a key."""
    told: set[_Path] = set()
    found = sorted(
        _validator().iter_errors(raw),
        key=lambda error: (str(error.absolute_path), error.validator != "type", str(error.validator)),
    )
    for error in found:
        for path, problem, fix in _told(error, raw):
            if path not in told:
                told.add(path)
                yield SiteProblem(key=dotted(path), problem=problem, fix=fix)


def _told(error: ValidationError, raw: Mapping[str, Any]) -> Iterator[tuple[_Path, str, str]]:
    """What a departure from the schema means to the one who wrote the file: path, problem, way out."""
    path: _Path = tuple(error.absolute_path)
    schema: Any = error.schema
    rule, wanted, found = str(error.validator), cast("Any", error.validator_value), cast("Any", error.instance)
    if "propertyNames" in error.absolute_schema_path:
        path, found = (*path, found), _at(raw, (*path, found))
    if rule == "additionalProperties":
        yield from _unknown_keys(path, found, schema["properties"])
    elif rule == "required":
        for key in (key for key in wanted if key not in found):
            yield (*path, key), "is missing", f"Add it.{_described(schema['properties'][key])}"
    elif path and path[-1] == _AT_THE_TOP and len(path) > 1:
        yield path, *_misplaced(path)
    elif len(path) == 2 and path[0] in _KEYED_BY_ANSWER and isinstance(found, Mapping):
        key = f"{path[1]}.{next(iter(found), 'answer')}"
        yield path, "is a table: TOML splits a key at its dots", f'Write the whole key in quotes: "{key}" = "..."'
    elif rule == "not" and isinstance(found, Mapping):
        yield path, "has strength_mg or class beside parts", "Put it into the part it belongs to."
    else:
        near = nearest(found, wanted) if rule == "enum" and isinstance(found, str) else ""
        problem = "is empty" if found == "" else _wrong(rule, wanted, found)
        yield path, problem, f"Correct it.{near}{_described(schema)}"


def _wrong(rule: str, wanted: Any, found: Any) -> str:
    match rule:
        case "type":
            kinds = [wanted] if isinstance(wanted, str) else wanted
            return f"must be {' or '.join(_KINDS[kind] for kind in kinds)}"
        case "enum":
            return f"must be one of {', '.join(wanted)}"
        case "oneOf":
            return "has both drug and parts" if "drug" in found else "has neither drug nor parts"
        case "anyOf":
            return "changes nothing"
        case "minimum" | "exclusiveMinimum":
            return "is too small"
        case "maximum":
            return "is too large"
        case "maxLength":
            return f"is longer than {wanted} characters"
        case "minItems":
            return f"has fewer than {wanted} items"
        case "maxItems":
            return f"has more than {wanted} items"
        case "uniqueItems":
            return "names one of its items twice"
        case "format":
            return "is no date of the calendar"
        case _:
            return "is not in the form expected"


def _at(raw: Any, path: _Path) -> Any:
    for part in path:
        raw = raw[part]
    return raw


def _described(schema: Mapping[str, Any]) -> str:
    """What the schema says is expected there."""
    if "$ref" in schema:
        definitions: Any = cast("Any", _validator().schema)["$defs"]
        schema = definitions[schema["$ref"].rsplit("/", 1)[1]]
    return f" Expected: {schema['description']}" if "description" in schema else ""


def _unknown_keys(path: _Path, found: Mapping[str, Any], known: Mapping[str, Any]) -> Iterator[tuple[_Path, str, str]]:
    for key in (key for key in found if key not in known):
        if path and key == _AT_THE_TOP:
            yield (*path, key), *_misplaced((*path, key))
        else:
            yield (*path, key), "is no key we know", f"Known here: {', '.join(known)}.{nearest(key, known)}"


def _misplaced(path: _Path) -> tuple[str, str]:
    return (
        f"TOML counts it to the table {dotted(path[:-1])} above it",
        f"Write {_AT_THE_TOP} at the top of the file, above the first [table].",
    )


def _profile(raw: Mapping[str, Any], file: str, sha256: str) -> SiteProfile:
    """Build the profile from what the schema has let through."""
    site, code, signed = raw["site"], raw.get("code", {}), raw.get("sign_off")
    return SiteProfile(
        file=file,
        sha256=sha256,
        name=site["name"],
        version=site["version"],
        region=site.get("region"),
        zone=site.get("zone"),
        drug_codes=tuple(_drug_code(row) for row in code.get("drug", ())),
        analyte_codes=tuple(SiteAnalyteCode(**row) for row in code.get("analyte", ())),
        units=raw.get("units", {}),
        limits={key: _limit(given) for key, given in raw.get("limits", {}).items()},
        schedule={key: _schedule(given) for key, given in raw.get("schedule", {}).items()},
        rules_off=tuple(raw.get("rules_off", ())),
        tiers=raw.get("tiers", {}),
        headlines=raw.get("headlines", {}),
        cautions=raw.get("cautions", {}),
        sign_off=None if signed is None else SignOff(**{**signed, "when": date.fromisoformat(signed["when"])}),
    )


def _drug_code(row: Mapping[str, Any]) -> SiteDrugCode:
    parts = tuple(
        SitePart(drug=part["drug"], strength_mg=_number(part.get("strength_mg")), drug_class=part.get("class"))
        for part in row.get("parts", (row,))
    )
    return SiteDrugCode(system=row["system"], code=row["code"], parts=parts, is_combination="parts" in row)


def _limit(given: float | Mapping[str, Any]) -> LimitChange:
    if isinstance(given, Mapping):
        return LimitChange(value=float(given["value"]), reason=given.get("reason"))
    return LimitChange(value=float(given))


def _schedule(given: Mapping[str, Any]) -> ScheduleChange:
    """A number of days written as 7.0 is a whole number to JSON Schema."""
    days: dict[str, Any] = {key: int(value) if isinstance(value, float) else value for key, value in given.items()}
    return ScheduleChange(**days)


def _number(given: float | None) -> float | None:
    return None if given is None else float(given)
