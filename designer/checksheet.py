"""The sheet that ``check`` prints: what the program understood, in the words of the trade."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from math import isfinite

from designer import units, wording
from designer.findings import Budget, Checkup, HalfLife, KnownConstant, LawFound, Range, ReadAs
from designer.records import Study

SMALL = 0.005  # a share below this is shown as "<1 %"
SAME = 1e-3  # half-lives that differ by less than this share are one
CURES = {
    "sample": "comes afresh with each sample and shrinks with more samples",
    "run": "is shared by all samples of a run and shrinks only with more runs",
    "stock": "is shared by all runs from one stock and shrinks only with another stock",
}
NARROW = 12  # columns that are left at least for a text beside a table
HEAD = 14  # columns of a heading before it goes on in the next line


def check_sheet(study: Study, found: Checkup) -> str:
    """The whole sheet as text, lines of at most ``wording.WIDTH`` columns."""
    parts = [
        list(_head(study, found)),
        list(_laws(study, found)),
        list(_half_lives(study, found)),
        *(list(_budget(found, reading.name)) for reading in study.readings),
        list(_read_as(found.read_as, "Read from the file")),
        list(_read_as(found.defaults, "Not in the file, so taken as")),
        list(_list("Warnings", found.warnings)),
        list(_list("Cautions", found.cautions)),
    ]
    return "\n\n".join("\n".join(line.rstrip() for line in part) for part in parts if part)


def _head(study: Study, found: Checkup) -> Iterator[str]:
    count, warned = len(study.listed), len(found.warnings)
    yield from wording.wrapped(found.title or "A study without a title")
    if found.question:
        yield from wording.wrapped(found.question)
    odd = f", {warned} warning{'s' * (warned != 1)} (below)" if warned else ", no warnings"
    yield f"The file can be used: {count} candidate{'s' * (count != 1)}{odd}."


# candidates


def _laws(study: Study, found: Checkup) -> Iterator[str]:
    yield "CANDIDATES"
    for law in found.laws:
        yield f"  {law.candidate.name} ({_belief(study, law)})"
        yield from _steps(law)
        rows = [row for constant in law.constants for row in _constant_rows(constant, found.time_unit)]
        if rows:
            head = ("", "unit from the rate", "middle and 90 % range", "as stated")
            yield from _table(head, rows)


def _belief(study: Study, law: LawFound) -> str:
    text = f"belief {100 * law.belief:.3g} %"
    if study.pilots:
        text += f", {100 * law.after:.2g} % after the pilots"
    return f"added for 'none of these', {text}" if law.candidate.free_order else text


def _steps(law: LawFound) -> Iterator[str]:
    several = len(law.candidate.steps) > 1
    for step in law.candidate.steps:
        name = f"{step.equation.name}: " if several and step.equation.name else ""
        own = "   (an equation of its own)" if law.candidate.overrides else ""
        yield from wording.wrapped(f"{name}{step.equation.text}{own}", "    ", "        ")
        numbers = ", ".join(f"{species} {number:+g}" for species, number in step.equation.stoichiometry)
        yield from wording.wrapped(f"per mole of reaction: {numbers}", "      ", "        ")
        yield from _rate(step.text)


def _rate(text: str) -> Iterator[str]:
    """The rate as written; a long one goes on after a ``*``."""
    room = wording.WIDTH - 6
    lines = textwrap.wrap(f"rate of reaction = {text}".replace("*", "*\0 "), room, subsequent_indent="  ")
    yield from ("      " + line.replace("*\0 ", "*").replace("*\0", "*") for line in lines)


def _constant_rows(constant: KnownConstant, time_unit: str) -> Iterator[tuple[str, ...]]:
    deduced = units.unit_of(constant.dimension, time_unit) or "plain number"
    unit = constant.unit or units.unit_of(constant.dimension, time_unit)
    stated = constant.stated
    if constant.energy is not None and constant.reference_temperature is not None:
        if "at temperature" not in stated:
            stated += f", at {units.show(constant.reference_temperature, 'degC')}"
        stated += f"; activation energy {_range(constant.energy, 'kJ/mol')}"
    yield constant.name, deduced, _range(constant.value, unit), stated
    if constant.after is not None:
        yield "", "", _range(constant.after, unit, 2), "after the pilots"


def _range(value: Range, unit: str, digits: int = 3) -> str:
    if value.low == value.high:
        return f"{units.show(value.middle, unit, digits)} (exact)"
    numbers = [_number(units.convert(x, unit), digits) for x in (value.middle, value.low, value.high)]
    return f"{numbers[0]} ({numbers[1]} to {numbers[2]}) {unit}".rstrip()


def _number(value: float, digits: int) -> str:
    """A number to so many significant digits, written out between 0.001 and 100 000."""
    rounded = float(f"{value:.{digits}g}")
    return f"{rounded:.15g}" if 1e-3 <= abs(rounded) < 1e5 else f"{value:.{digits}g}"


def _table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> Iterator[str]:
    """Aligned columns; the last one wraps."""
    widths = [max(len(row[i]) for row in [head, *rows]) for i in range(len(head) - 1)]
    for row in [head, *rows]:
        lead = "      " + "".join(f"{cell:<{width}}  " for cell, width in zip(row, widths, strict=False))
        room = max(wording.WIDTH - len(lead), NARROW)
        yield from _hung(lead, row[-1], room)


def _hung(lead: str, text: str, room: int) -> Iterator[str]:
    lines = textwrap.wrap(text, room, break_on_hyphens=False) or [""]
    yield lead + lines[0]
    yield from (" " * len(lead) + line for line in lines[1:])


# half-lives


def _half_lives(study: Study, found: Checkup) -> Iterator[str]:
    yield "HALF-LIFE UNDER THE WHOLE LAW (middle and 90 % range of the belief)"
    at = f"at {_conditions(study, found.middle)}, the middle of what is on offer:"
    yield from wording.wrapped(at, "  ", "    ")
    first, longest = (wording.clock(t, found.time_unit) for t in (found.first_sample, found.longest_run))
    reactants = {law.reactant for law in found.laws}
    of = f"half-life of {reactants.pop()}" if len(reactants) == 1 else ""
    heads, over = _stacked(("candidate", of or "half-life", f"gone by {first}", f"gone by {longest}"))
    rows = [_half_life_row(law, found.time_unit, not of) for law in found.laws]
    yield from wording.columns(heads, [*over, *rows], indent="    ")
    yield from _ends(study, found)
    for law in found.laws:
        if law.unsolved:
            yield from wording.wrapped(
                f"under '{law.candidate.name}' {law.unsolved} of {law.draws} draws could not be computed "
                "and are left out",
                "  ! ",
                "    ",
            )


def _half_life_row(law: LawFound, unit: str, named: bool) -> tuple[str, ...]:
    gone = [_percent(share) for share in (law.gone_at_first, law.gone_at_end)]
    time = _time(law.half_life, unit)
    return law.candidate.name, f"{law.reactant} {time}" if named else time, *gone


def _time(found: HalfLife, unit: str) -> str:
    far = f"never, or not within {wording.clock(found.horizon, unit)}"
    if not isfinite(found.time.middle):
        return far if found.reached == 0 else f"{far}, in {100 * (1 - found.reached):.2g} % of the belief"
    if found.time.low == found.time.high:
        return units.show(found.time.middle, _unit(found.time.middle, unit))
    unit = _unit(found.time.middle, unit)
    low, middle, high = (
        _number(units.convert(t, unit), 2) if isfinite(t) else "never" for t in _triple(found.time)
    )
    return f"{middle} ({low} to {high}) {unit}"


def _triple(value: Range) -> tuple[float, float, float]:
    return value.low, value.middle, value.high


def _unit(seconds: float, unit: str) -> str:
    """The study's unit of time, or a nearer one where numbers would be awkward."""
    if 0.1 <= units.convert(seconds, unit) < 1000:
        return unit
    return next((u for u in ("d", "h", "min", "s") if units.convert(seconds, u) >= 1), "s")


def _ends(study: Study, found: Checkup) -> Iterator[str]:
    """Half-lives at the ends of the ranges, with the conditions that make them."""
    laws = [law for law in found.laws if law.fastest is not None and not law.candidate.free_order]
    if laws:
        yield "  at the ends of the ranges:"
    for law in laws:
        said = _shortest_and_longest(study, law, found.time_unit)
        yield from wording.wrapped(f"{law.candidate.name}: {said}", "    ", "      ")


def _shortest_and_longest(study: Study, law: LawFound, unit: str) -> str:
    if law.fastest is None or law.slowest is None:
        return ""
    short, long = law.fastest.time.middle, law.slowest.time.middle
    if short == long or abs(long - short) < SAME * short:
        return f"{_time(law.fastest, unit)} at every mixture on offer"
    parts = [f"{_time(end, unit)} at {_free(study, end)}" for end in (law.fastest, law.slowest)]
    return "; ".join(parts)


def _conditions(study: Study, conditions: Sequence[tuple[str, float]]) -> str:
    return ", ".join(f"{name} {_amount(x, study.condition(name).unit)}" for name, x in conditions)


def _amount(value: float, unit: str) -> str:
    return units.show(value, unit) if unit == "degC" else f"{_number(units.convert(value, unit), 3)} {unit}"


def _free(study: Study, found: HalfLife) -> str:
    return _conditions(study, [(n, x) for n, x in found.conditions if not study.condition(n).is_fixed])


# errors


def _budget(found: Checkup, reading: str) -> Iterator[str]:
    budgets = [budget for budget in found.budgets if budget.reading == reading]
    if budgets:
        yield f"WHERE THE ERROR OF A TYPICAL SAMPLE COMES FROM: {reading}"
        yield from wording.wrapped(_said(budgets[0], found.time_unit), "  ")
    if len(budgets) > 1:
        yield from _budget_table(budgets, found.time_unit)


def _said(budget: Budget, unit: str) -> str:
    """The first candidate's budget as a sentence."""
    parts = [f"{100 * s.share:.0f} % is {s.source}" for s in budget.shares if s.share >= SMALL]
    deviation = units.show(budget.deviation, budget.unit, 2)
    mean = units.show(budget.mean, budget.unit)
    return (
        f"Under '{budget.candidate}', {wording.clock(budget.time, unit)} into a run at the middle conditions "
        f"({100 * budget.left:.0f} % left), a reading of {mean} has an error of {deviation} (1 SD). "
        f"Of its variance {wording.listed(parts)}. {_cure(budget)}"
    )


def _cure(budget: Budget) -> str:
    """More samples mend one part of the error, only more runs (or another stock) the other."""
    parts = {kind: sum(s.share for s in budget.shares if s.comes_with == kind) for kind in CURES}
    return "; ".join(f"{_percent(share)} {CURES[kind]}" for kind, share in parts.items() if share) + "."


def _budget_table(budgets: Sequence[Budget], unit: str) -> Iterator[str]:
    sources = list(dict.fromkeys(share.source for budget in budgets for share in budget.shares))
    rows = []
    for budget in budgets:
        shares = {share.source: share.share for share in budget.shares}
        time, error = wording.clock(budget.time, unit), units.show(budget.deviation, budget.unit, 2)
        rows.append((budget.candidate, time, error, *(_percent(shares.get(s)) for s in sources)))
    heads, over = _stacked(("candidate", "at", "1 SD", *sources))
    yield from wording.columns(heads, [*over, *rows], indent="    ")


def _stacked(heads: Sequence[str]) -> tuple[list[str], list[list[str]]]:
    """Headings over several lines: the first line, and the further ones as rows."""
    parts = [textwrap.wrap(head, HEAD) for head in heads]
    deep = max(len(part) for part in parts)
    lines = [[part[i] if i < len(part) else "" for part in parts] for i in range(deep)]
    return lines[0], lines[1:]


def _percent(share: float | None) -> str:
    if share is None:
        return wording.NONE
    if 1 - SMALL < share < 1:
        return ">99 %"
    return f"{100 * share:.0f} %" if share >= SMALL else "<1 %"


# the rest


def _read_as(lines: Sequence[ReadAs], title: str) -> Iterator[str]:
    if not lines:
        return
    yield title.upper()
    width = max(len(line.where) for line in lines)
    for line in lines:
        text = f"{line.written}: {line.meaning}" if line.written else line.meaning
        lead = f"  {line.where:<{width}}  "
        yield from _hung(lead, text, max(wording.WIDTH - len(lead), NARROW))


def _list(title: str, lines: Sequence[str]) -> Iterator[str]:
    if not lines:
        return
    yield title.upper()
    for line in lines:
        yield from wording.wrapped(line, "  - ", "    ")
