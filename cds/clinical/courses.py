"""Medication entries -> one course a drug: running or not, its dose, when it began and last changed.

Day 0 of a start or change is the first evidence of exposure: administration, else dispense, else the start a statement
gives, else the date of the order. The newest order is the current one; orders of one day are lines of one regimen.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import date, datetime
from typing import Literal

from cds.clinical.doses import Dose, add_up, dose_starts, resolve_dose
from cds.clinical.medication_entries import (
    EXPOSURES,
    began_on,
    is_episode,
    newest_first,
    oldest_first,
    regimen_key,
    runs_out_on,
    tells_start,
    written_on,
)
from cds.clinical.record import CourseNote, CourseState, DoseStep, DrugCourse, MedicationEntry, PatientRecord
from cds.clinical.tables import SupplyLimits
from cds.clinical.timeline import PartialDate, recency


def build_courses(record: PatientRecord, as_of: datetime, supply: SupplyLimits) -> tuple[DrugCourse, ...]:
    """One course for each drug of the record, sorted by drug; what is given into the vein is one of its own.

    `record` must hold nothing dated after `as_of`.
    """
    by_drug: dict[tuple[str, bool], list[MedicationEntry]] = defaultdict(list)
    for entry in record.medications:
        by_drug[entry.drug, is_episode(entry, supply)].append(entry)
    return tuple(_Builder(by_drug[key], as_of, supply).course() for key in sorted(by_drug))


@dataclass(frozen=True, slots=True)
class _Order:
    """One order (or statement) and what it means on `as_of`."""

    entry: MedicationEntry
    state: CourseState
    begins: PartialDate | None
    over: PartialDate | None  # when an ended one ended, None where nobody said
    day: date | None  # the calendar day it was written: same-day orders are one regimen


class _Builder:
    """Builds one drug's course. Holds the sorted entries; every method only reads them."""

    def __init__(self, entries: Sequence[MedicationEntry], as_of: datetime, supply: SupplyLimits) -> None:
        self.as_of, self.today, self.supply = as_of, as_of.date(), supply
        self.is_episode = is_episode(entries[0], supply)
        self.witnesses = sorted((e for e in entries if tells_start(e)), key=oldest_first)
        self.exposures = [e for e in self.witnesses if e.kind in EXPOSURES]
        ordering = [e for e in entries if e.kind not in EXPOSURES]
        if not ordering:
            ordering = [e for e in entries if e.kind in EXPOSURES]
        orders = sorted((self._order(e) for e in ordering), key=lambda o: newest_first(o.entry), reverse=True)
        self.planned = [o for o in orders if o.state == "planned"]
        self.orders = [o for o in orders if o.state != "planned"]  # newest first; undated ones last

    def course(self) -> DrugCourse:
        if not self.orders:
            return self._planned_course()
        current = self._current()
        first, state = current[0], current[0].state
        dose, notes = self._dose(current)
        history = self._history()
        started, changed, changed_by = self._run(history, first)
        stale = state == "active" and self._is_stale(current)
        older = self._older_running(current) if state in ("active", "unclear", "paused") else []
        newer_end = self._stopped_after(current) if state == "active" else None
        if stale or newer_end is not None:
            notes.append(_stale_note(first, newer_end))
        notes.extend(_superseded_note(order) for order in older)
        sources = dict.fromkeys([*(o.entry.source for o in current), *(o.entry.source for o in self.orders)])
        exposed = dict.fromkeys(e.source for e in reversed(self.exposures))
        return DrugCourse(
            drug=first.entry.drug,
            drug_class=first.entry.drug_class,
            state=state,
            matched_by=first.entry.matched_by,
            sources=tuple({**sources, **exposed}),
            possible_classes=first.entry.possible_classes,
            part_of=first.entry.part_of,
            route=first.entry.route,
            daily_dose_mg=dose.daily_mg,
            max_daily_dose_mg=dose.max_daily_mg,
            daily_dose_other=dose.other,
            dose_note=dose.note,
            ordered=written_on(first.entry),
            started=started,
            changed=changed,
            changed_by=changed_by,
            ended=self._ended() if state == "ended" else None,
            as_needed=dose.as_needed,
            stale=stale or newer_end is not None,
            is_episode=self.is_episode,
            reasons=first.entry.reasons,
            history=history,
            notes=tuple(notes),
        )

    def _order(self, entry: MedicationEntry) -> _Order:
        begins = entry.starts if entry.starts is not None else entry.authored
        written = entry.authored if entry.authored is not None else entry.starts
        day = written.latest if written is not None and written.is_day else None
        if entry.status == "planned" or (begins is not None and not begins.is_known_by(self.as_of)):
            return _Order(entry, "planned", begins, None, day)
        state, over = self._state(entry, begins)
        return _Order(entry, state, begins, over, day)

    def _state(self, entry: MedicationEntry, begins: PartialDate | None) -> tuple[CourseState, PartialDate | None]:
        has_ended = entry.ends is not None and self._is_past(entry.ends)
        if entry.kind == "administration":
            last = entry.ends if entry.ends is not None else begins
            is_recent = last is not None and (self.today - last.latest).days < self.supply.hold_restart_days
            return ("active", None) if is_recent else ("ended", last)
        if entry.kind == "dispense":
            return self._dispensed(entry, begins)
        if self.is_episode and entry.ends is None:
            return self._episode(entry, begins)
        match entry.status:
            case "active":
                return ("ended", entry.ends) if has_ended else ("active", None)
            case "on-hold":
                return ("ended", entry.ends) if has_ended else ("paused", None)
            case "completed":
                runs_out = runs_out_on(entry, begins)
                if entry.ends is None and runs_out is not None and runs_out.latest >= self.today:
                    return "active", None
                if entry.ends is not None and not has_ended:
                    return "active", None
                return "ended", entry.ends or runs_out
            case "stopped":
                return "ended", entry.ends if has_ended else self._updated(entry)
            case _:
                return ("ended", entry.ends) if has_ended else ("unclear", None)

    def _episode(self, entry: MedicationEntry, begins: PartialDate | None) -> tuple[CourseState, PartialDate | None]:
        """An order for the vein is over after some days, whatever its status says."""
        is_recent = begins is not None and (self.today - begins.latest).days <= self.supply.parenteral_episode_days
        return ("active", None) if is_recent and entry.status in ("active", "completed") else ("ended", begins)

    def _dispensed(self, entry: MedicationEntry, begins: PartialDate | None) -> tuple[CourseState, PartialDate | None]:
        """A supply nobody wrote an order for: running while it lasts, and as long again as late refills are usual."""
        runs_out = runs_out_on(entry, begins) or begins
        if runs_out is None:
            return "unclear", None
        is_covered = (self.today - runs_out.latest).days <= self.supply.past_supply_days
        return ("active", None) if is_covered else ("ended", runs_out)

    def _is_past(self, end: PartialDate) -> bool:
        return end.at <= self.as_of if end.at is not None else end.latest < self.today

    def _updated(self, entry: MedicationEntry) -> PartialDate | None:
        """When the resource was last changed, as the date of its stop: R4 has no other (policy)."""
        if entry.last_updated is None or entry.last_updated > self.as_of:
            return None
        return PartialDate.of_instant(entry.last_updated.astimezone(self.as_of.tzinfo))

    def _current(self) -> list[_Order]:
        """The orders that make up the regimen now: the newest running one, with the others of its day."""
        running = [o for o in self.orders if o.state in ("active", "paused", "unclear")]
        replaced = {o.entry.replaces for o in running if o.entry.replaces is not None}
        kept = [o for o in running if o.entry.source not in replaced] or running
        if not kept:
            return self.orders[:1]
        sure = [o for o in kept if o.state != "unclear"]
        newest = (sure or kept)[0]
        if newest.day is None:
            return [newest]
        same_day = [o for o in kept if o.day == newest.day and o.state == newest.state]
        if any(o.entry.kind == "order" for o in same_day):  # a statement of the same visit repeats the order
            same_day = [o for o in same_day if o.entry.kind == "order"]
        return list({regimen_key(o.entry): o for o in reversed(same_day)}.values())[::-1]

    def _dose(self, current: list[_Order]) -> tuple[Dose, list[CourseNote]]:
        on = self.today
        if current[0].state == "ended" and current[0].over is not None:
            on = min(on, current[0].over.latest)
        dose = add_up(resolve_dose(o.entry.lines, on) for o in current)
        has_dated = any(o.day is not None for o in current)
        undated = [o for o in self.orders if o.state == "active" and written_on(o.entry) is None and o not in current]
        if not has_dated or not undated or current[0].state != "active":
            return dose, []
        note = "an undated active order stands beside a dated one, so which holds is not known"
        problem = "is active and has no date, so whether it or a dated order of the drug holds cannot be told"
        fix = "Send authoredOn, or end the order that no longer holds"
        notes = [CourseNote(source=o.entry.source, path="authoredOn", problem=problem, fix=fix) for o in undated]
        return replace(dose, daily_mg=None, note=note), notes

    def _older_running(self, current: list[_Order]) -> list[_Order]:
        sources = {o.entry.source for o in current}
        replaced = {o.entry.replaces for o in self.orders}
        same_days = {None, *(o.day for o in current)}
        return [
            o
            for o in self.orders
            if o.state == "active" and o.entry.kind == "order"
            if o.day not in same_days and o.entry.source not in sources | replaced
        ]

    def _stopped_after(self, current: list[_Order]) -> _Order | None:
        """A newer order of the drug that was stopped while this older one was left active."""
        newest = current[0].day
        if newest is None:
            return None
        return next(
            (o for o in self.orders if o.entry.status == "stopped" and o.day is not None and o.day > newest), None
        )

    def _is_stale(self, current: list[_Order]) -> bool:
        """True if the supply ran out long ago, or without a known supply the last sign of the drug is old (ruling 38)."""
        run_outs = [runs_out_on(o.entry, o.begins) for o in current]
        run_outs += [runs_out_on(e, began_on(e)) for e in self.exposures]
        known = [when.latest for when in run_outs if when is not None]
        if known:
            return (self.today - max(known)).days > self.supply.past_supply_days
        seen = [when.latest for o in current if (when := o.begins or written_on(o.entry)) is not None]
        seen += [when.latest for e in self.exposures if (when := began_on(e)) is not None]
        return bool(seen) and (self.today - max(seen)).days > self.supply.without_supply_days

    def _ended(self) -> PartialDate | None:
        """When the last of the ended orders ended; a later administration is the better witness of the last dose."""
        ends = [o.over for o in self.orders if o.over is not None]
        given = [
            when for e in self.exposures if e.kind == "administration" and (when := e.ends or began_on(e)) is not None
        ]
        newest = self.orders[0]
        if newest.over is None and not given:
            return None
        return max([*ends, *given], key=recency)

    def _history(self) -> tuple[DoseStep, ...]:
        """The dose steps of the current run, oldest first: one for each day on which orders were written or steps begin."""
        days: dict[date, list[_Order]] = defaultdict(list)
        undated: list[_Order] = []
        for order in self.orders:
            begins = order.begins
            (undated if begins is None else days[begins.latest]).append(order)
        steps: list[tuple[DoseStep, list[_Order]]] = []
        for day in sorted(days):
            for step in self._steps_of(days[day]):
                if not steps or not self._repeats(step, steps[-1]):
                    steps.append(step)
        if not steps and undated:
            dose = resolve_dose(undated[0].entry.lines, self.today)
            return (DoseStep(daily_mg=dose.daily_mg, since=None, source=undated[0].entry.source),)
        first = 0
        for position in range(1, len(steps)):
            if self._is_gap(steps[position - 1][1], steps[position][0].since):
                first = position
        run = [step for step, _ in steps[first:]]
        return tuple(
            self._with_exposure(step, run[n + 1].since if n + 1 < len(run) else None) for n, step in enumerate(run)
        )

    def _steps_of(self, orders: list[_Order]) -> list[tuple[DoseStep, list[_Order]]]:
        """The steps that orders beginning on one day give: one, or one for each bounded step of a single order."""
        written = [o for o in orders if o.entry.kind == "order"] or orders
        unique = list({regimen_key(o.entry): o for o in written}.values())
        newest = unique[0]
        if len(unique) == 1 and len(starts := dose_starts(newest.entry.lines)) > 1:
            return [
                (
                    DoseStep(
                        daily_mg=resolve_dose(newest.entry.lines, line.starts.latest).daily_mg,
                        since=line.starts,
                        source=newest.entry.source,
                    ),
                    orders,
                )
                for line in starts
                if line.starts is not None and line.starts.is_known_by(self.as_of)
            ]
        on = min(newest.begins.latest, self.today) if newest.begins is not None else self.today
        together = [o for o in unique if o.day == newest.day]
        dose = add_up(resolve_dose(o.entry.lines, on) for o in together)
        reasons = tuple(sorted({reason for o in orders for reason in o.entry.reasons}))
        step = DoseStep(daily_mg=dose.daily_mg, since=newest.begins, source=newest.entry.source, reasons=reasons)
        return [(step, orders)]

    def _is_gap(self, before: list[_Order], since: PartialDate | None) -> bool:
        """True if the drug was off between two steps: ended or on hold for a week or more, or out of supply for long."""
        if since is None:
            return False
        over = [o.over for o in before if o.over is not None]
        if over and all(o.state == "ended" for o in before):
            allowed = self.supply.hold_restart_days
            if all(o.entry.status == "completed" or o.entry.kind == "dispense" for o in before):
                allowed = self.supply.past_supply_days
            return (since.earliest - max(when.latest for when in over)).days >= allowed
        held = [self._updated(o.entry) for o in before if o.state == "paused"]
        if held and len(held) == len(before):
            return any(
                when is not None and (since.earliest - when.latest).days >= self.supply.hold_restart_days
                for when in held
            )
        seen = [when.latest for o in before if (when := o.begins) is not None]
        return bool(seen) and (since.earliest - max(seen)).days > self.supply.without_supply_days

    def _with_exposure(self, step: DoseStep, until: PartialDate | None) -> DoseStep:
        """The step with its day 0: the first administration, else dispense, else stated start, of it or in its time."""
        order = next(o for o in self.orders if o.entry.source == step.source)
        if step.since is None or order.entry.kind in EXPOSURES:
            return step
        kinds = EXPOSURES if order.entry.kind == "statement" else (*EXPOSURES, "statement")
        found = [
            when
            for kind in kinds
            for e in self.witnesses
            if e.kind == kind and e.based_on in (None, step.source) and (when := began_on(e)) is not None
            if when.latest >= step.since.earliest and (until is None or when.earliest < until.latest)
        ]
        return replace(step, since=found[0]) if found else step

    def _repeats(self, step: tuple[DoseStep, list[_Order]], before: tuple[DoseStep, list[_Order]]) -> bool:
        """True if statements alone repeat the dose of the step before: evidence of that step, no step of their own."""
        is_same = all(o.entry.kind == "statement" for o in step[1]) and step[0].daily_mg == before[0].daily_mg
        return is_same and not self._is_gap(before[1], step[0].since)

    def _run(
        self, history: tuple[DoseStep, ...], first: _Order
    ) -> tuple[PartialDate | None, PartialDate | None, Literal["start", "increase", "decrease"] | None]:
        """When the run began, when its present dose began, and by what."""
        if not history:
            return None, None, None
        started = history[0].since
        if started is None or first.begins is None:
            return started, None, None
        known = [step for step in history if step.daily_mg is not None]
        if not known:
            return started, started, "start"
        if len(known) < len(history):  # whether the dose changed cannot be told
            return (started, started, "start") if len(history) == 1 else (started, None, None)
        for before, after in zip(reversed(history[:-1]), reversed(history[1:]), strict=True):
            if before.daily_mg != after.daily_mg:
                has_grown = (after.daily_mg or 0.0) > (before.daily_mg or 0.0)
                return started, after.since, "increase" if has_grown else "decrease"
        return started, started, "start"

    def _planned_course(self) -> DrugCourse:
        first = self.planned[0]
        dose = resolve_dose(first.entry.lines, first.begins.latest if first.begins is not None else self.today)
        return DrugCourse(
            drug=first.entry.drug,
            drug_class=first.entry.drug_class,
            state="planned",
            matched_by=first.entry.matched_by,
            sources=tuple(o.entry.source for o in self.planned),
            possible_classes=first.entry.possible_classes,
            part_of=first.entry.part_of,
            route=first.entry.route,
            daily_dose_mg=dose.daily_mg,
            max_daily_dose_mg=dose.max_daily_mg,
            daily_dose_other=dose.other,
            dose_note=dose.note,
            as_needed=dose.as_needed,
        )


def _stale_note(order: _Order, newer_end: _Order | None) -> CourseNote:
    source = order.entry.source
    if newer_end is not None:
        problem = f"is active though a newer order of the drug ({newer_end.entry.source}) was stopped"
    else:
        problem = "is active, long past its supply or a year old without one, and nobody ended it"
    return CourseNote(
        source=source, path="status", problem=problem, fix="Ask whether the drug is taken, and end or renew the order"
    )


def _superseded_note(order: _Order) -> CourseNote:
    problem = "is an older order left active beside a newer one of the same drug; it is not added to the dose"
    return CourseNote(
        source=order.entry.source, path="status", problem=problem, fix="End the order that the newer one replaced"
    )
