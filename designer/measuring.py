"""Readings and the errors that runs share, out of the raw record."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from designer import expressions, units
from designer.dimensions import Deduction
from designer.laws import parse, report, species_known
from designer.noting import Notes, near
from designer.records import Candidate, Dimension, Prepared, Reading, RunErrors
from designer.setting import Setting, rate_dimension
from designer.studyfile import Entry


def readings(notes: Notes, setting: Setting, listed: Sequence[Candidate]) -> tuple[Reading, ...]:
    """What is read, with its errors, in internal units."""
    entry = notes.raw.root.get("readings")
    tables = [table for table in entry.each() if table.value is not None] if entry is not None else []
    if not tables:
        advice = 'Add [[readings]] with signal = "[ester]" and its errors'
        notes.missing(notes.raw.root, "readings", "no reading: nothing is measured", advice)
    found = [_reading(notes, setting, listed, table) for table in tables]
    good = [reading for reading in found if reading is not None]
    _names(notes, tables, good)
    return tuple(good)


def _names(notes: Notes, tables: Sequence[Entry], found: Sequence[Reading]) -> None:
    names = [reading.name for reading in found]
    for name in dict.fromkeys(n for n in names if names.count(n) > 1):
        advice = "Give each a name of its own"
        notes.problem("readings", f"two readings are called '{name}'", advice=advice)


def _reading(notes: Notes, setting: Setting, listed: Sequence[Candidate], table: Entry) -> Reading | None:
    signal = table.get("signal")
    if signal is None:
        notes.missing(table, "signal", "a reading without a signal", 'Add signal = "[ester]"')
        return None
    before = len(notes.problems)
    node = parse(notes, signal, "the signal")
    if node is None or not species_known(notes, setting, signal, node, "the signal"):
        return None
    dimension = _dimension(notes, setting, listed, signal, node)
    if dimension is None:
        return None
    if not expressions.species(node) and "rate" not in expressions.names(node):
        advice = "Let it depend on a concentration or on rate"
        notes.problem(signal.where, "the signal does not change with the reaction", advice=advice)
    values = _errors(notes, table, dimension)
    if len(notes.problems) > before:
        return None
    name = table.get("name")
    text = signal.value
    plain = text.strip("[] ") if text.strip("[] ") in setting.species else text
    unit = _unit(table, setting, node, dimension)
    return Reading(name.value if name else plain, node, text, dimension, unit, **values)


def _dimension(
    notes: Notes,
    setting: Setting,
    listed: Sequence[Candidate],
    entry: Entry,
    node: expressions.Node,
) -> Dimension | None:
    """Dimension of the signal. Its names are known numbers: it must mean the same under every law."""
    known = dict(setting.bare)
    unknowns = {constant.name for candidate in listed for constant in candidate.constants}
    if len(setting.equations) == 1:
        (equation,) = setting.equations.values()
        known["rate"] = rate_dimension(equation, setting.species)
    unknown = [name for name in expressions.names(node) if name not in known]
    for name in unknown:
        if name in setting.species:
            notes.problem(
                entry.where, f"'{name}' is a species", advice=f"Write [{name}] for its concentration"
            )
        elif name == "rate":
            message = "which step's rate? the study has several"
            notes.problem(entry.where, message, advice="Write the signal with concentrations")
        elif name in unknowns:
            message = f"'{name}' is an unknown of a candidate, and a signal must mean the same under all"
            advice = (
                "Give the signal a known number in [constants]; [run_errors] scale says how well it is known"
            )
            notes.problem(entry.where, message, advice=advice)
        else:
            message = f"'{name}' in the signal is not known"
            notes.problem(entry.where, message, advice=f"Add {name} to [constants]. {near(name, known)}")
    if unknown:
        return None
    plain = {n: q.value for n, q in setting.constants.items() if q.dimension == units.NONE}
    deduction = Deduction(known, setting.species, plain)
    found = deduction.of(node)
    report(notes, entry.where, deduction.clashes)
    return None if deduction.clashes else found.dimension


def _unit(table: Entry, setting: Setting, node: expressions.Node, dimension: Dimension) -> str:
    """Unit of the signal as the file writes it: of the absolute error, a limit, or the species read."""
    for key in ("absolute", "lowest", "highest"):
        entry = table.get(key)
        if entry is not None and isinstance(entry.value, str):
            return units.read(entry.value).unit
    for condition in setting.conditions:
        if condition.is_species and condition.dimension == dimension:
            return condition.unit
    return units.unit_of(dimension)


def _errors(notes: Notes, table: Entry, dimension: Dimension) -> dict[str, Any]:
    found: dict[str, float | None] = {
        "relative": notes.share(table.get("relative")) or 0.0,
        "absolute": notes.positive(table.get("absolute"), dimension, zero=True) or 0.0,
        "time_error": notes.positive(table.get("time_error"), units.TIME, zero=True) or 0.0,
        "every": notes.positive(table.get("every"), units.TIME),
        "memory": notes.positive(table.get("memory"), units.TIME, zero=True),
        "uncertain": notes.factor(table.get("uncertain")),
    }
    for key in ("lowest", "highest"):
        entry = table.get(key)
        quantity = notes.quantity(entry, dimension)
        found[key] = quantity.value if quantity is not None else None
    low, high = found["lowest"], found["highest"]
    if low is not None and high is not None and low >= high:
        shown = f"{table.value['lowest']} and {table.value['highest']}"
        notes.problem(table.where, "the trusted range is reversed or empty", shown, "lowest below highest")
    if not found["relative"] and not found["absolute"] and not notes.lost(table.where):
        stated = [key for key in ("relative", "absolute") if table.get(key) is not None]
        advice = 'Add relative = "1 %" or absolute, from repeated injections of one sample'
        message = "a reading without an error" if not stated else "a reading whose error is 0"
        notes.problem(table.where, message, advice=advice)
    return found


def run_errors(notes: Notes, setting: Setting, found: Sequence[Reading]) -> RunErrors:
    """Errors shared by all samples of a run; relative, K, s or the unit of the signal."""
    entry = notes.raw.root.get("run_errors")
    if entry is None:
        return RunErrors()
    return RunErrors(
        rate=notes.share(entry.get("rate")) or 0.0,
        prepared=_prepared(notes, setting, entry.get("prepared")),
        temperature=notes.difference(entry.get("temperature")) or 0.0,
        time_zero=notes.positive(entry.get("time_zero"), units.TIME, zero=True) or 0.0,
        scale=_per_reading(notes, entry.get("scale"), found, lambda inner, _: notes.share(inner)),
        baseline=_per_reading(
            notes,
            entry.get("baseline"),
            found,
            lambda inner, reading: notes.positive(inner, reading.dimension, zero=True),
        ),
    )


def _prepared(notes: Notes, setting: Setting, entry: Entry | None) -> tuple[Prepared, ...]:
    names = [c.name for c in setting.conditions if c.name != "temperature"]
    found = []
    for name, inner in entry.items() if entry is not None else ():
        if name not in names and notes.excused(name):
            continue
        if name not in names:
            notes.problem(inner.where, f"'{name}' is no condition that is prepared", advice=near(name, names))
        elif isinstance(inner.value, dict):
            stock, each = notes.share(inner.get("stock")), notes.share(inner.get("each_run"))
            found.append(Prepared(name, stock or 0.0, each or 0.0))
        else:
            found.append(Prepared(name, 0.0, notes.share(inner) or 0.0))
    return tuple(found)


def _per_reading(
    notes: Notes,
    entry: Entry | None,
    found: Sequence[Reading],
    take: Callable[[Entry, Reading], float | None],
) -> tuple[tuple[str, float], ...]:
    """(name of reading, size) pairs; "" stands for every reading."""
    if entry is None or not found:
        return ()
    if not isinstance(entry.value, dict):
        sizes = [take(entry, reading) for reading in found]
        return (("", sizes[0]),) if all(size is not None for size in sizes) and sizes[0] is not None else ()
    known = {reading.name: reading for reading in found}
    pairs = []
    for name, inner in entry.items():
        if name not in known:
            notes.problem(inner.where, f"there is no reading '{name}'", advice=near(name, known))
            continue
        size = take(inner, known[name])
        if size is not None:
            pairs.append((name, size))
    return tuple(pairs)
