"""Lay a site profile over the content: a new Content, with every name the profile uses held against what there is.

What a site changes says so wherever it is cited: the row rests on the profile then, with the number it replaced. A
number never moves to the less safe side without a reason, and what is contraindicated stays a danger.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TypeVar
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from cds.cards.card import CardBasis
from cds.cards.wording import Wording
from cds.clinical import units
from cds.clinical.evaluate import ANSWERS
from cds.clinical.order_check import ORDER_ANSWERS
from cds.clinical.readings import show
from cds.clinical.safety_tables import OutOfRange, TreatmentLimit
from cds.clinical.tables import Basis, ClinicalTables, Limit, ScheduledCheck
from cds.content.load import Content
from cds.content.site import LimitChange, ScheduleChange, SiteProblem, SiteProfile, SiteProfileError, dotted, nearest
from cds.content.site_codes import site_codes, site_units
from cds.errors import ContentError

_SHOWN_HASH = 12
_UNSIGNED = "Content not clinically signed off."  # what a sign-off takes the place of in the notice
_SEVERITY = "severity"  # beside the rules, in [tiers]
_WORST = "contraindicated"
# Every open answer of these has a severity, and that gives its tier.
_BY_SEVERITY = frozenset(
    {
        "stop-harmful-drug",
        "interaction",
        "lab-out-of-range",
        "lower-dose",
        "order-limits",
        "order-dose",
        "order-duplicate",
    }
)
_HIGHEST_RISE_PERCENT = 1000.0
_LimitRow = Limit | TreatmentLimit | OutOfRange
_Path = tuple[str | int, ...]
_DAYS = ("opens_after_days", "due_after_days", "grace_days")
LimitRow = TypeVar("LimitRow", Limit, TreatmentLimit, OutOfRange)


def with_site(content: Content, site: SiteProfile) -> Content:
    """Return the content as the site wants it; `content` itself is left as it is.

    Raises SiteProfileError with every name, code or number of the profile that cannot stand; ValueError where a profile
    was laid over `content` before.
    """
    if content.site is not None:
        raise ValueError("a site profile was laid over this content before")
    overlay = _Overlay(content, site)
    tables = overlay.tables()
    wording = overlay.wording()  # cites the rows that `tables` changed
    made = replace(
        content,
        codes=site_codes(content.codes, content.tables, site, overlay.refuse),
        tables=tables,
        wording=wording,
        site=f"{site.name} {site.version} {site.sha256[:_SHOWN_HASH]}",
        signed_off=overlay.signed_off(),
        rules_off=overlay.rules_off(),
        zone=overlay.zone(),
        default_units=site_units(site, overlay.refuse),
    )
    if overlay.problems:
        raise SiteProfileError(site.file, sorted(overlay.problems, key=lambda problem: problem.key))
    return made


@dataclass(slots=True)
class _Overlay:
    """One profile being laid over the content. Each method makes one part and notes what cannot stand."""

    content: Content
    site: SiteProfile
    problems: list[SiteProblem] = field(default_factory=list)
    rests_on: dict[str, Basis] = field(default_factory=dict)  # the rows the site changed, by id

    def refuse(self, path: _Path, problem: str, fix: str) -> None:
        self.problems.append(SiteProblem(key=dotted(path), problem=problem, fix=fix))

    def zone(self) -> str | None:
        if self.site.zone is not None:
            try:
                ZoneInfo(self.site.zone)
            except (ZoneInfoNotFoundError, ValueError, OSError):
                fix = 'Give an IANA name, such as "America/Chicago".'
                self.refuse(("site", "zone"), f"'{self.site.zone}' is no time zone", fix)
        return self.site.zone

    # Tables

    def tables(self) -> ClinicalTables:
        tables = self.content.tables
        limits, treatment, out_of_range = self._limits(tables)
        return replace(
            tables,
            region=self._region(tables),
            limits=limits,
            checks=self._checks(tables),
            safety=replace(tables.safety, treatment_limits=treatment, out_of_range=out_of_range),
        )

    def _region(self, tables: ClinicalTables) -> str:
        if self.site.region is None:
            return tables.region
        known = {tables.region, *(region for row in tables.candidates for region in row.regions)}
        known |= {region for row in tables.doses for region in row.regions}
        known |= {region for row in tables.classes.values() for region in row.closing_regions}
        if self.site.region not in known:
            fix = f"Known are {', '.join(sorted(known))}.{nearest(self.site.region, known)}"
            self.refuse(("site", "region"), f"'{self.site.region}' is no region of the content", fix)
        return self.site.region

    def _limits(
        self, tables: ClinicalTables
    ) -> tuple[tuple[Limit, ...], tuple[TreatmentLimit, ...], tuple[OutOfRange, ...]]:
        by_table: dict[str, tuple[_LimitRow, ...]] = {
            "limit": tables.limits,
            "treatment_limit": tables.safety.treatment_limits,
            "out_of_range": tables.safety.out_of_range,
        }
        changes: dict[tuple[str, str], LimitChange] = {}
        for key, change in self.site.limits.items():
            table, _, row_id = key.rpartition(".")
            found = [
                (name, row)
                for name, rows in by_table.items()
                for row in rows
                if row.id == row_id and table in ("", name)
            ]
            if len(found) != 1:
                self._no_one_limit(key, row_id, [name for name, _ in found], by_table)
                continue
            ((name, row),) = found
            if (name, row_id) in changes:
                self.refuse(("limits", key), "changes a limit that another key changes too", "Keep one of the two.")
            elif self._may_be(("limits", key), row, change):
                changes[name, row_id] = change
        return (
            tuple(self._with_value(row, changes.get(("limit", row.id))) for row in tables.limits),
            tuple(
                self._with_value(row, changes.get(("treatment_limit", row.id)))
                for row in tables.safety.treatment_limits
            ),
            tuple(self._with_value(row, changes.get(("out_of_range", row.id))) for row in tables.safety.out_of_range),
        )

    def _no_one_limit(
        self, key: str, row_id: str, tables: list[str], by_table: Mapping[str, tuple[_LimitRow, ...]]
    ) -> None:
        path = ("limits", key)
        if tables:
            names = " or ".join(f'"{table}.{row_id}"' for table in tables)
            self.refuse(path, "is the id of more than one limit", f"Write {names} in its place, in quotes.")
            return
        known = [row.id for rows in by_table.values() for row in rows]
        fix = f"`gdmt-cards rules` lists the limits.{nearest(row_id, known)}"
        self.refuse(path, f"the content has no limit of the id '{key}'", fix)

    def _may_be(self, path: _Path, row: _LimitRow, change: LimitChange) -> bool:
        """A value a patient can have, and to the less safe side only with a reason."""
        is_rise = isinstance(row, TreatmentLimit) and row.is_rise_percent
        value = change.value if is_rise else units.convert(row.analyte, change.value, row.unit, _canonical(row))
        least, most = (0.0, _HIGHEST_RISE_PERCENT) if is_rise else units.PLAUSIBLE[row.analyte]
        if not least <= value <= most:
            now = f"The content has {show(row.value)} {row.unit}; give the new number in the same unit."
            self.refuse(path, f"is no value of {row.analyte} that a patient can have, in {row.unit}", now)
            return False
        is_looser = change.value > row.value if row.sign in (">", ">=") else change.value < row.value
        if is_looser and change.reason is None:
            fix = f'Write {{ value = {show(change.value)}, reason = "..." }}, or keep to the safer side.'
            self.refuse(path, f"is less safe than {row.sign} {show(row.value)} {row.unit}, the content's limit", fix)
            return False
        cautions = self.content.wording.cautions
        if change.value != row.value and row.id in cautions and row.id not in self.site.cautions:
            fix = f'Write a caution of the site in [cautions]: {row.id} = "...".'
            self.refuse(path, f"would contradict the caution that goes with it: {cautions[row.id]}", fix)
            return False
        return True

    def _with_value(self, row: LimitRow, change: LimitChange | None) -> LimitRow:
        """The row with its new number, which the site gives in one unit only; it rests on the profile then."""
        if change is None or change.value == row.value:
            return row
        now = f"limit {row.id}: {show(change.value)} {row.unit} in place of {show(row.value)}"
        made = replace(row, value=change.value, basis=self._basis(row.id, now, change.reason))
        return made if isinstance(made, OutOfRange) else replace(made, also_value=None, also_unit=None)

    def _checks(self, tables: ClinicalTables) -> tuple[ScheduledCheck, ...]:
        known = {row.id for row in tables.checks}
        for key in self.site.schedule:
            if key not in known:
                fix = f"Known are {', '.join(sorted(known))}.{nearest(key, known)}"
                self.refuse(("schedule", key), f"the content has no timed check of the id '{key}'", fix)
        return tuple(self._with_days(row, self.site.schedule.get(row.id)) for row in tables.checks)

    def _with_days(self, row: ScheduledCheck, change: ScheduleChange | None) -> ScheduledCheck:
        if change is None:
            return row
        days = {name: given for name in _DAYS if (given := getattr(change, name)) is not None}
        made = replace(row, **days)
        if made == row:
            return row
        if made.opens_after_days > made.due_after_days:
            problem = f"would open on day {made.opens_after_days}, after it is due on day {made.due_after_days}"
            self.refuse(("schedule", row.id), problem, "Give opens_after_days and due_after_days that fit together.")
        now = f"check {row.id}: {_window(made)} in place of {_window(row)}"
        return replace(made, basis=self._basis(row.id, now, change.reason))

    def _basis(self, row_id: str, now: str, reason: str | None) -> Basis:
        locator = now if reason is None else f"{now} ({reason})"
        basis = Basis(source="site", locator=locator, checked="read", kind="policy")
        self.rests_on[row_id] = basis
        return basis

    # Words

    def wording(self) -> Wording:
        """The words of the site, and what the rows it changed rest on: so `tables` comes first."""
        wording = self.content.wording
        cards = dict(wording.cards)
        severities = dict(wording.tier_of_severity)
        for key, tier in self.site.tiers.items():
            rule, _, answer = key.partition(".")
            if rule == _SEVERITY:
                if answer not in severities:
                    self._no_answer(("tiers", key), {f"{_SEVERITY}.{known}" for known in severities}, key)
                elif answer == _WORST and tier != "danger":
                    fix = "Remove it, or switch off single rules that the site does not want."
                    self.refuse(("tiers", key), "would make less than a danger of what is contraindicated", fix)
                else:
                    severities[answer] = tier
            elif self._has_tier(("tiers", key), rule, answer):
                cards[rule, answer] = replace(cards[rule, answer], tier=tier)
        for key, headline in self.site.headlines.items():
            rule, _, answer = key.partition(".")
            if (rule, answer) in cards:
                cards[rule, answer] = replace(cards[rule, answer], headline=headline)
            else:
                self._no_answer(("headlines", key), {".".join(known) for known in cards}, key)
        for key in self.site.cautions.keys() - wording.cautions.keys():
            fix = f"Known are {', '.join(sorted(wording.cautions))}.{nearest(key, wording.cautions)}"
            self.refuse(("cautions", key), f"the content has no caution of the key '{key}'", fix)
        title = f"Site profile of {self.site.name}, version {self.site.version}"
        bases = {row_id: _card_basis(basis, title) for row_id, basis in self.rests_on.items()}
        return replace(
            wording,
            cards=cards,
            tier_of_severity=severities,
            cautions={**wording.cautions, **self.site.cautions},
            limit_bases={**wording.limit_bases, **bases},
            notice=self._notice(wording.notice),
        )

    def _has_tier(self, path: _Path, rule: str, answer: str) -> bool:
        if (rule, answer) not in self.content.wording.cards:
            self._no_answer(path, {".".join(known) for known in self.content.wording.cards}, f"{rule}.{answer}")
        elif rule in _BY_SEVERITY and answer != "unknown":
            names = ", ".join(f'"{_SEVERITY}.{known}"' for known in self.content.wording.tier_of_severity)
            fix = f"Set the tier of a severity: {names}."
            self.refuse(path, f"changes nothing: the tier of a {rule} card comes from its severity", fix)
        else:
            return True
        return False

    def _no_answer(self, path: _Path, known: set[str], key: str) -> None:
        fix = f"`gdmt-cards rules` lists the rules with their answers.{nearest(key, known)}"
        self.refuse(path, f"no card has the words '{key}'", fix)

    def rules_off(self) -> frozenset[str]:
        known = {**ANSWERS, **ORDER_ANSWERS}
        for place, rule in enumerate(self.site.rules_off):
            if rule not in known:
                fix = f"Known are {', '.join(known)}.{nearest(rule, known)}"
                self.refuse(("rules_off", place), f"there is no rule '{rule}'", fix)
        return frozenset(self.site.rules_off)

    # Sign-off

    def signed_off(self) -> str | None:
        signed = self.site.sign_off
        if signed is None:
            return None
        if signed.content_version != self.content.version:
            problem = f"the sign-off is for content {signed.content_version}, but the content is {self.content.version}"
            fix = "Have this content reviewed and signed off, or remove [sign_off]: cards then say that nobody did."
            self.refuse(("sign_off", "content_version"), problem, fix)
        return f"{signed.who}, {signed.when.isoformat()}"

    def _notice(self, notice: str) -> str:
        signed = self.site.sign_off
        if signed is None:
            return notice
        if _UNSIGNED not in notice:
            raise ContentError("wording.toml", "notice", f"lacks the sentence '{_UNSIGNED}'", "Restore it.")
        said = f"Content {signed.content_version} signed off for {self.site.name} by {signed.who} on {signed.when.isoformat()}."
        return notice.replace(_UNSIGNED, said)


def _canonical(row: _LimitRow) -> str:
    return units.CANONICAL_UNIT[row.analyte]


def _window(row: ScheduledCheck) -> str:
    return f"day {row.opens_after_days} to {row.due_after_days}, grace {row.grace_days} days"


def _card_basis(basis: Basis, title: str) -> CardBasis:
    return CardBasis(source=basis.source, title=title, locator=basis.locator, checked=basis.checked, kind=basis.kind)
