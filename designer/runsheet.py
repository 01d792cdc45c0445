"""The run sheet: what to do, in what order, what to expect, and why, as plain text.

The decision comes first, then the number, then the reason. Candidates go by letters in tables. Nothing
is computed here but differences of figures that stand in the record.
"""

from __future__ import annotations

from collections.abc import Sequence

from designer import wording
from designer.expectations import expectations
from designer.outcomes import Plan, PlannedRun, Portion
from designer.records import Study
from designer.sampletable import BLANK, letters, sample_table
from designer.wording import WIDTH, clock, columns, wrapped


def text(study: Study, plan: Plan) -> str:
    """The whole run sheet: lines of at most 100 columns, ending in a line feed."""
    parts = [
        _head(study, plan),
        _candidates(study, plan),
        *(_run(study, plan, run) for run in plan.runs),
        _used_up(study, plan),
        expectations(study, plan, letters(study)),
        _small_print(plan),
    ]
    return "\n\n".join("\n".join(part) for part in parts if part) + "\n"


def size(plan: Plan) -> str:
    """``3 runs of 4 samples, 12 samples in all``, or for recorded runs their number alone."""
    counts = [len(run.times) for run in plan.rating.schedule.runs]
    runs = f"{len(counts)} run{'s' if len(counts) > 1 else ''}"
    if not sum(counts):
        return f"{runs}, recorded continuously"
    each = f"{counts[0]}" if len(set(counts)) == 1 else f"{min(counts)} to {max(counts)}"
    return f"{runs} of {each} sample{'s' if each != '1' else ''}, {sum(counts)} in all"


def booking(plan: Plan) -> str:
    """``fits 3 h 40 of your 4 h``, ``needs 5 h 10, 70 min more than booked``, or what it takes."""
    needed = plan.rating.total_time
    time = clock(needed, "h")
    if plan.booked is None:
        return f"takes {time}"
    if needed <= plan.booked * (1 + 1e-9):
        return f"fits: {time} of your {clock(plan.booked, 'h')}"
    return f"needs {time}, {clock(needed - plan.booked)} more than booked ({clock(plan.booked, 'h')})"


def _head(study: Study, plan: Plan) -> list[str]:
    lines = wrapped(f"RUN SHEET   {plan.title}")
    if study.question:
        lines += wrapped(study.question, " " * 12)
    lines.append("=" * WIDTH)
    rating = plan.rating
    order = ", in the order given" if len(plan.runs) > 1 else ""
    lines += wrapped(f"Recommended: {size(plan)}{order}. It {booking(plan)}.")
    chance = f"The right law comes out on top in {wording.percent(rating.top)} of virtual studies"
    for precision in rating.precision:
        width = f"{precision.constant} comes out within {wording.percent(precision.half_width)}"
        chance += f"; {width} (half of its 95 % range; aim {100 * precision.asked:g} %)"
    lines += wrapped(f"{chance}.")
    lines += [line for text in _shortfalls(study, plan) for line in wrapped(text)]
    lines += wrapped(
        "± stands for one standard error of the virtual studies behind a figure. "
        "The first run is worth most, should you have to stop early."
        if len(plan.runs) > 1
        else "± stands for one standard error of the virtual studies behind a figure."
    )
    return lines


def _shortfalls(study: Study, plan: Plan) -> list[str]:
    """What was asked for and is not reached, named up front."""
    found, aim = [], study.aim
    hardest = min(plan.rating.reach_by_law, key=lambda pair: _number(pair[1].value), default=None)
    if hardest and _number(hardest[1].value) < aim.chance:
        found.append(
            f"Short of the aim: a probability of {aim.probability:g} is reached in "
            f"{wording.percent(hardest[1])} of studies when '{hardest[0]}' is true; "
            f"{100 * aim.chance:g} % was asked for."
        )
    for precision in plan.rating.precision:
        if precision.half_width.value > precision.asked:
            found.append(
                f"Short of the aim: {precision.constant} within {wording.percent(precision.half_width)}; "
                f"{100 * precision.asked:g} % was asked for."
            )
    return found


def _number(value: float) -> float:
    return value if value == value else 2.0  # what is not defined is never the hardest


def _candidates(study: Study, plan: Plan) -> list[str]:
    """Names, laws and beliefs, the belief after pilots only where it differs."""
    moved = any(abs(stated - after) > 5e-4 for _, stated, after in plan.beliefs)
    stated_by = {name: (stated, after) for name, stated, after in plan.beliefs}
    head = ["", "candidate", "belief", *(["after pilots"] if moved else []), "rate"]
    rows = []
    for name, letter in letters(study).items():
        candidate = next(c for c in study.candidates if c.name == name)
        stated, after = stated_by.get(name, (candidate.belief, candidate.belief))
        shown = [f"{100 * stated:.3g} %", *([f"{100 * after:.2g} %"] if moved else [])]
        rates = "; ".join(f"{step.equation.name} {step.text}".strip() for step in candidate.steps)
        if candidate.overrides:
            rates += f", with {wording.listed(step.equation.text for step in candidate.steps)}"
        rows.append([letter, name + (" (added)" if candidate.free_order else ""), *shown, rates])
    if max(len(row[-1]) for row in rows) > WIDTH // 2:
        table = columns(head[:-1], [row[:-1] for row in rows], kept=2)
        return ["CANDIDATES", *table, *(line for row in rows for line in _rate(row))]
    return ["CANDIDATES", *columns(head, rows, kept=2)]


def _rate(row: Sequence[str]) -> list[str]:
    return wrapped(f"rate of {row[0]}: {row[-1]}", "  ", " " * 6)


def _levers(study: Study, run: PlannedRun, fixed: bool) -> str:
    return ", ".join(
        f"{name} {wording.amount(value, study.condition(name).unit)}"
        for name, value in run.conditions
        if study.condition(name).is_fixed == fixed
    )


def _run(study: Study, plan: Plan, run: PlannedRun) -> list[str]:
    title = f"RUN {run.number} of {len(plan.runs)}   {_levers(study, run, fixed=False)}"
    lines = ["-" * WIDTH, *wrapped(title, hanging=" " * 13)]
    fixed = _levers(study, run, fixed=True)
    if fixed:
        lines += wrapped(f"at {fixed}", "  ")
    lines += [line for mark in run.marks for line in wrapped(mark, "  ", " " * 4)]
    lines += _pipetting(study, run.portions)
    if run.length is not None:
        lines += wrapped(f"Record for {clock(run.length, study.time_unit)}{_recording(study)}.", "  ")
    lines += [f"  started at {BLANK}   ended at {BLANK}   by {BLANK}", ""]
    return lines + sample_table(study, run)


def _recording(study: Study) -> str:
    """How often a recorded signal is read, and how far apart readings must be to add anything."""
    reading = next((r for r in study.readings if r.every), None)
    if reading is None or reading.every is None:
        return ""
    told = f", a reading every {clock(reading.every)}"
    if reading.memory:
        told += f" (nearer than {clock(2 * reading.memory)} they add nothing)"
    return told


def _pipetting(study: Study, portions: Sequence[Portion]) -> list[str]:
    """What goes into the vessel; the solvent last."""
    if not portions:
        return []
    drawn = [
        f"{volume(portion.volume)} of {portion.name} {_stock(study, portion)}"
        for portion in portions
        if portion.stock is not None
    ]
    solvent = [f"{volume(p.volume)} of {p.name}" for p in portions if p.stock is None]
    total = volume(sum(portion.volume for portion in portions))
    return wrapped(f"Pipette {wording.listed([*drawn, *solvent])}; {total} in all.", "  ", " " * 4)


def _stock(study: Study, portion: Portion) -> str:
    assert portion.stock is not None
    return f"stock ({wording.amount(portion.stock, study.condition(portion.name).unit)})"


def volume(litres: float) -> str:
    """A volume as it is set on a pipette: three digits, in mL, or in uL below a tenth of one."""
    unit, scale = ("mL", 1e3) if litres >= 1e-4 or litres == 0 else ("uL", 1e6)
    number = litres * scale
    shown = f"{number:#.3g}".rstrip(".") if number < 1000 else f"{number:.0f}"
    return f"{shown} {unit}"


def _used_up(study: Study, plan: Plan) -> list[str]:
    """Stocks that the whole plan uses up."""
    totals: dict[str, float] = {}
    for run in plan.runs:
        for portion in run.portions:
            totals[portion.name] = totals.get(portion.name, 0.0) + portion.volume
    if not totals:
        return []
    told = wording.listed(f"{volume(amount)} of {name}" for name, amount in totals.items())
    return ["-" * WIDTH, *wrapped(f"Needed for all runs, without spills: {told}.")]


def _small_print(plan: Plan) -> list[str]:
    """What it takes to get the same plan again."""
    versions = ", ".join(f"{name} {version}" for name, version in plan.versions)
    effort = ", ".join(f"{name.replace('_', ' ')} {count}" for name, count in plan.effort)
    return ["-" * WIDTH, *wrapped(f"seed {plan.seed}; search: {effort}; {versions}", hanging="  ")]
