"""Plan, limits and aim out of the raw record; limits that no plan can meet, with the least change."""

from __future__ import annotations

from collections.abc import Sequence
from math import ceil, floor

from designer import units
from designer.noting import Notes, near
from designer.records import Aim, Candidate, Limits, PlanSize, Reading, Vessel
from designer.studyfile import Entry

TIMES = ("first_sample", "spacing", "longest_run", "setup_per_run", "booked")
NOTHING = Entry("", {})


def time_unit(notes: Notes) -> str:
    """The unit in which times are written: that of the first sample, the spacing or the longest run."""
    table = notes.raw.root.get("limits") or NOTHING
    for key in ("first_sample", "spacing", "longest_run"):
        entry = table.get(key)
        if entry is not None and isinstance(entry.value, str):
            try:
                found = units.read(entry.value)
            except units.UnitError:
                continue
            if found.dimension == units.TIME:
                return found.unit
    return "min"


def limits(notes: Notes) -> Limits:
    """Ceilings of the file, times in s."""
    table = notes.raw.root.get("limits")
    if table is None:
        advice = 'Add [limits] with at least longest_run = "3 h"'
        notes.missing(notes.raw.root, "limits", "no limits: a run must end some time", advice)
        return Limits()
    if table.get("longest_run") is None:
        notes.missing(
            table, "longest_run", "no longest run: a run must end some time", 'Add longest_run = "3 h"'
        )
    zero = ("first_sample", "spacing", "setup_per_run")
    times = {key: notes.positive(table.get(key), units.TIME, zero=key in zero) or 0.0 for key in TIMES}
    counts = {key: table.value.get(key) for key in ("runs", "samples_per_run", "samples_total")}
    booked = times.pop("booked") or None
    first, spacing, longest, setup = times.values()
    return Limits(
        counts["runs"],
        counts["samples_per_run"],
        counts["samples_total"],
        first,
        spacing,
        longest,
        setup,
        booked,
    )


def plan(notes: Notes, bounds: Limits, readings: Sequence[Reading]) -> PlanSize:
    """Runs and samples to fill; samples of a continuous signal follow from the longest run."""
    table = notes.raw.root.get("plan")
    if table is None:
        notes.missing(notes.raw.root, "plan", "no plan to fill", "Add [plan] with runs and samples")
        return PlanSize(1, 1)
    if table.get("runs") is None:
        notes.missing(table, "runs", "the plan does not say how many runs", "Add runs = 3")
    runs, samples = table.value.get("runs"), table.value.get("samples")
    if samples is None:
        samples = recorded(bounds, readings)
        if samples is None:
            notes.missing(
                table, "samples", "the plan does not say how many samples a run has", "Add samples = 4"
            )
    return PlanSize(runs or 1, samples or 1, bool(table.value.get("assay_at_start", False)))


def recorded(bounds: Limits, readings: Sequence[Reading]) -> int | None:
    """Readings of a continuous signal that fit the longest run; None where a signal is sampled.

    Readings nearer than twice the memory are thinned away.
    """
    gaps = [max(r.every, 2 * (r.memory or 0.0)) for r in readings if r.every is not None]
    if not readings or len(gaps) < len(readings) or not bounds.longest_run:
        return None
    return max(1, floor((bounds.longest_run - bounds.first_sample) / max(gaps) + 1e-9) + 1)


def aim(notes: Notes, listed: Sequence[Candidate]) -> Aim:
    """When the study has done its work; precisions name constants of the candidates."""
    table = notes.raw.root.get("aim")
    if table is None:
        return Aim()
    tables = notes.raw.root.get("candidates")
    written = [key for table in (tables.each() if tables else ()) for key, _ in table.items()]
    names = [constant.name for candidate in listed for constant in candidate.constants]
    precision = []
    for name, entry in (table.get("precision") or NOTHING).items():
        if name not in names and name in written:
            continue  # its candidate has been reported
        if listed and name not in names:
            notes.problem(entry.where, f"'{name}' is no constant of a candidate", advice=near(name, names))
            continue
        share = notes.share(entry)
        if share == 0:
            notes.problem(entry.where, "out of range", f"{entry.value}", "a share above 0")
        if share:
            precision.append((name, share))
    return Aim(
        notes.chance(table.get("probability"), Aim.probability),
        notes.chance(table.get("chance"), Aim.chance),
        tuple(precision),
        notes.chance(table.get("weight_on_law"), Aim.weight_on_law, ends=True),
    )


def feasible(notes: Notes, size: PlanSize, bounds: Limits, vessel: Vessel, unit: str) -> None:
    """Note every limit that the plan cannot meet, with the least change that would do."""
    if any(notes.lost(name) for name in ("plan", "limits")) or notes.problems_in("plan", "limits"):
        return
    _counts(notes, size, bounds)
    shortest = _times(notes, size, bounds, unit)
    _booking(notes, size, bounds, shortest, unit)
    if (
        vessel.volume is not None
        and vessel.sample is not None
        and size.samples * vessel.sample > vessel.volume
    ):
        taken, there = units.show(size.samples * vessel.sample, "mL"), units.show(vessel.volume, "mL")
        advice = f"Take at most {floor(vessel.volume / vessel.sample)} samples, or smaller ones"
        notes.problem(
            "vessel", "the samples of a run use up more than there is", taken, f"at most {there}", advice
        )


def _counts(notes: Notes, size: PlanSize, bounds: Limits) -> None:
    pairs = (
        ("plan.runs", size.runs, "limits.runs", bounds.runs),
        ("plan.samples", size.samples, "limits.samples_per_run", bounds.samples_per_run),
        ("plan", size.runs * size.samples, "limits.samples_total", bounds.samples_total),
    )
    for where, count, ceiling, most in pairs:
        if most is not None and count > most:
            advice = f"Lower {where} or raise {ceiling} to {count}"
            if where == "plan":
                fits = most // size.runs
                advice = f"Raise {ceiling} to {count}" + (f", or plan {fits} samples a run" if fits else "")
            notes.problem(where, f"more than {ceiling} allows", f"{count}", f"at most {most}", advice)


def _times(notes: Notes, size: PlanSize, bounds: Limits, unit: str) -> float:
    """Length of the shortest run that holds the samples, s."""
    after_start = size.samples - size.assay_at_start
    shortest = bounds.first_sample + max(0, after_start - 1) * bounds.spacing if after_start else 0.0
    if shortest <= bounds.longest_run * (1 + 1e-12):
        return shortest
    longest = units.show(bounds.longest_run, unit)
    if bounds.first_sample > bounds.longest_run:
        first = units.show(bounds.first_sample, unit)
        advice = f"Let the longest run be at least {first}, or sample earlier"
        notes.problem(
            "limits.first_sample", "later than the longest run allows", first, f"at most {longest}", advice
        )
        return shortest
    fits = floor((bounds.longest_run - bounds.first_sample) / bounds.spacing + 1e-9) + 1 + size.assay_at_start
    advice = f"Let the longest run be {units.show(shortest, unit)}, or take at most {fits} samples in a run"
    message = f"{size.samples} samples do not fit into the longest run"
    notes.problem("limits.longest_run", message, longest, f"at least {units.show(shortest, unit)}", advice)
    return shortest


def _booking(notes: Notes, size: PlanSize, bounds: Limits, shortest: float, unit: str) -> None:
    if bounds.booked is None:
        return
    each = bounds.setup_per_run + shortest
    needed = size.runs * each
    if needed <= bounds.booked * (1 + 1e-12):
        return
    fit = floor(bounds.booked / each + 1e-9)
    show = "h" if bounds.booked >= 3600 else unit
    book = ceil(units.convert(needed, show) * 100 - 1e-9) / 100
    advice = f"Book {book:g} {show}" + (f", or plan at most {fit} runs" if fit else "")
    message = f"{size.runs} runs with their setting up need more time than is booked"
    found = f"{units.show(bounds.booked, show)} booked"
    notes.problem("limits.booked", message, found, f"at least {book:g} {show}", advice)
