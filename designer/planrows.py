"""From the text of a plan CSV to runs, noting every problem with its line and column."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass, field
from difflib import get_close_matches

from designer import units
from designer.errors import Problem
from designer.records import Run, Study

END = "end"  # the sample of the row that holds the length of a recorded run
ADVICE = "Start from the plan.csv of a plan of this study"


@dataclass(frozen=True)
class Column:
    """A column that is understood: its place, its name and what turns its numbers internal."""

    place: int
    name: str
    head: str
    unit: str

    def internal(self, number: float) -> float:
        if self.unit == "degC":
            return number + units.ZERO_CELSIUS
        return number * units.scale(self.unit)[0]


@dataclass
class Gathered:
    """What the rows of one run say. line: its first row."""

    line: int
    times: list[float] = field(default_factory=list)
    length: float | None = None
    conditions: dict[str, float] = field(default_factory=dict)


@dataclass
class _Reader:
    study: Study
    decimal_comma: bool = False
    problems: list[Problem] = field(default_factory=list)
    columns: dict[str, Column] = field(default_factory=dict)
    gathered: dict[int, Gathered] = field(default_factory=dict)

    def problem(
        self, where: str, message: str, found: str = "", expected: str = "", advice: str = ""
    ) -> None:
        self.problems.append(Problem(where, message, found, expected, advice))


def runs(text: str, study: Study) -> tuple[tuple[Run, ...], list[Problem]]:
    """Runs in the order of their numbers, and every problem found (then the runs are no use)."""
    first = next((line for line in text.splitlines() if line.strip()), "")
    delimiter = max(",;\t", key=first.count)
    reader = _Reader(study, decimal_comma=delimiter != ",")
    try:
        table = csv.reader(text.splitlines(), delimiter=delimiter, strict=True)
        rows = [(table.line_num, row) for row in table if any(cell.strip() for cell in row)]
    except csv.Error as reason:
        return (), [Problem("", f"not written as CSV: {reason}", advice=ADVICE)]
    if not rows:
        return (), [Problem("", "an empty file", expected="a row of column names and a row for each sample")]
    _heads(reader, rows[0][1])
    if reader.problems:
        return (), reader.problems
    for line, row in rows[1:]:
        _row(reader, line, row)
    if len(rows) == 1:
        reader.problem("", "column names but no row of a sample", advice=ADVICE)
    found = [_run(reader, number) for number in sorted(reader.gathered)]
    return (() if reader.problems else tuple(found)), reader.problems


def _dimensions(study: Study) -> dict[str, tuple[float, ...]]:
    """Dimension of each column that carries a unit."""
    return {"time": units.TIME} | {c.name: c.dimension for c in study.conditions}


def _heads(reader: _Reader, heads: list[str]) -> None:
    """Understand the row of column names."""
    known = ["run", "sample", *_dimensions(reader.study)]
    meant: set[str] = set()  # misspelt names, which are then not said to be missing as well
    for place, head in enumerate(heads):
        name = _named(head.strip(), known)
        if name is None:
            near = get_close_matches(head.split(" (")[0].strip(), known, n=1, cutoff=0.6)
            meant.update(near)
            advice = f"Perhaps '{near[0]}' is meant" if near else f"Known here: {', '.join(known)}"
            reader.problem(f"column {place + 1}", f"'{head.strip()}' is no column of a plan", advice=advice)
        elif name in reader.columns:
            reader.problem(f"column {place + 1}", f"'{name}' stands in two columns", advice="Leave one")
        else:
            reader.columns[name] = Column(place, name, head.strip(), _unit(reader, place, head.strip(), name))
    fixed = {condition.name for condition in reader.study.conditions if condition.is_fixed}
    for name in known:
        if name not in reader.columns and name not in fixed | meant:
            reader.problem("", f"there is no column '{name}'", advice=ADVICE)


def _named(head: str, known: list[str]) -> str | None:
    """The known name that a head begins with, alone or before its unit in brackets."""
    fitting = [
        name for name in known if head == name or (head.startswith(f"{name} (") and head.endswith(")"))
    ]
    return max(fitting, key=len, default=None)


def _unit(reader: _Reader, place: int, head: str, name: str) -> str:
    """The unit in the head of a column, checked against what the column holds."""
    unit = head[len(name) :].strip().removeprefix("(").removesuffix(")").strip()
    if name in ("run", "sample"):
        if unit:
            reader.problem(f"column {place + 1}", f"'{name}' carries no unit", found=f"'{unit}'")
        return ""
    dimension = _dimensions(reader.study)[name]
    where, expected = f"column {place + 1}", units.dimension_words(dimension)
    if unit in ("degC", "°C"):
        found: tuple[float, ...] = units.TEMPERATURE
        unit = "degC"
    else:
        try:
            found = units.scale(unit)[1]
        except units.UnitError as reason:
            reader.problem(where, f"the unit of '{name}': {reason}", expected=expected)
            return ""
    if found != dimension:
        advice = f"Write '{name} (unit)' in the first row" if not unit else ""
        words = units.dimension_words(found)
        reader.problem(where, f"the unit of '{name}' is of the wrong kind", words, expected, advice)
    return unit


def _row(reader: _Reader, line: int, row: list[str]) -> None:
    """Add one row to its run."""
    before = len(reader.problems)
    heads = max(column.place for column in reader.columns.values()) + 1
    if len(row) > heads and any(cell.strip() for cell in row[heads:]):
        reader.problem(f"line {line}", "more cells than columns", found=f"{len(row)}", expected=f"{heads}")
        return
    number = _count(reader, line, "run", row)
    sample = _cell(reader.columns["sample"], row)
    time = _number(reader, line, reader.columns["time"], row)
    if sample.lower() != END:
        _count(reader, line, "sample", row, f"a whole number from 1, or '{END}'")
    conditions = {
        name: _number(reader, line, column, row)
        for name, column in reader.columns.items()
        if name not in ("run", "sample", "time")
    }
    if len(reader.problems) > before or number is None or time is None:
        return
    run = reader.gathered.setdefault(number, Gathered(line))
    if sample.lower() == END:
        if run.length is not None:
            reader.problem(f"line {line}", f"run {number} ends twice", advice=f"Leave one row '{END}'")
        run.length = time
    else:
        run.times.append(time)
    _agree(reader, line, number, run, {k: v for k, v in conditions.items() if v is not None})


def _agree(reader: _Reader, line: int, number: int, run: Gathered, conditions: dict[str, float]) -> None:
    """Every row of a run states the same conditions."""
    if not run.conditions:
        run.conditions = conditions
    for name, value in conditions.items():
        if not math.isclose(value, run.conditions[name], rel_tol=1e-9, abs_tol=1e-15):
            unit = reader.columns[name].unit
            reader.problem(
                f"line {line}, column {reader.columns[name].head}",
                f"run {number} starts from two values of {name}",
                units.show(value, unit, 6),
                f"{units.show(run.conditions[name], unit, 6)} as in line {run.line}",
                "Give a run of its own to each mixture",
            )


def _cell(column: Column, row: list[str]) -> str:
    return row[column.place].strip() if column.place < len(row) else ""


def _count(
    reader: _Reader, line: int, name: str, row: list[str], expected: str = "a whole number from 1"
) -> int | None:
    """A whole number from 1, of at most four digits."""
    text = _cell(reader.columns[name], row)
    if text.isdecimal() and len(text) <= 4 and int(text) > 0:
        return int(text)
    reader.problem(f"line {line}, column {name}", "not understood", f"'{text[:40]}'", expected)
    return None


def _number(reader: _Reader, line: int, column: Column, row: list[str]) -> float | None:
    """A finite number, not below zero (absolute zero for a temperature), in internal units."""
    text = _cell(column, row)
    where = f"line {line}, column {column.head}"
    plain = text.replace(",", ".") if reader.decimal_comma else text
    try:
        number = float(plain) if "_" not in plain else math.nan
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        reader.problem(where, "not understood", f"'{text[:40]}'", "a number without its unit")
        return None
    value = column.internal(number)
    if value < 0:
        reader.problem(where, "below zero", f"'{text}'", "zero or more")
        return None
    return value


def _run(reader: _Reader, number: int) -> Run:
    """The run that its rows describe; whether it is drawn or recorded must fit the study's readings."""
    run, study = reader.gathered[number], reader.study
    recorded = any(reading.every for reading in study.readings)
    sampled = any(not reading.every for reading in study.readings)
    where = f"run {number}"
    if recorded and run.length is None:
        reader.problem(where, "no length", advice=f"Its signal is recorded: add a row with sample '{END}'")
    if not recorded and run.length is not None:
        reader.problem(where, f"a row '{END}', but nothing is recorded continuously", advice="Leave it out")
    if run.times and not sampled:
        advice = f"Leave only its row '{END}'"
        reader.problem(where, "samples, but the study reads only recorded signals", advice=advice)
    if run.length is not None and run.times and max(run.times) > run.length * (1 + 1e-9):
        reader.problem(
            where, "a sample after its end", advice=f"Put the row '{END}' at the last sample or later"
        )
    stated = {c.name: run.conditions.get(c.name, c.low) for c in study.conditions}
    return Run(tuple(stated.items()), tuple(sorted(run.times)), run.length)
