"""A raw study file made into a Study, or every problem of it at once."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace

from designer import freeorder, laws, limits, measuring, oddities, setting, stated, units
from designer.errors import Problem, StudyFileError
from designer.laws import Listed
from designer.noting import Notes, near
from designer.records import Candidate, Condition, Dimension, Heat, Pilot, Study, Vessel
from designer.setting import Setting
from designer.studyfile import Entry, Raw

FREE_ORDER = 0.05  # belief of the alternative where the file says nothing
NOTHING = limits.NOTHING


def build(raw: Raw) -> Study:
    """The study of a raw file, in internal units, with its warnings.

    Raises StudyFileError with every problem found, in the order of the file.
    """
    notes = Notes(raw, list(raw.problems))
    there = setting.build(notes)
    unit = limits.time_unit(notes)
    scene = stated.Scene(there.conditions, there.known, unit)
    listed = laws.Reader(notes, there, scene).all(raw.root.get("candidates"))
    candidates = [one.candidate for one in listed]
    readings = measuring.readings(notes, there, candidates)
    errors = measuring.run_errors(notes, there, readings)
    bounds = limits.limits(notes)
    size = limits.plan(notes, bounds, readings)
    aim = limits.aim(notes, candidates)
    vessel = _vessel(notes)
    limits.feasible(notes, size, bounds, vessel, unit)
    pilots = _pilots(notes, there, scene, listed)
    others = _others(notes, there)
    share = _free_order_share(notes)
    if notes.problems:
        raise StudyFileError(_in_order(raw, notes.problems), raw.name)
    oddities.look(notes, there, candidates, readings, errors, bounds, unit)
    carried, references = _carried(notes, there, candidates, share, unit)
    return Study(
        title=_text(raw, "title"),
        question=_text(raw, "question"),
        candidates=carried,
        conditions=there.conditions,
        constants=(*there.known.items(), *references),
        readings=readings,
        run_errors=errors,
        plan=size,
        limits=bounds,
        aim=aim,
        pilots=pilots,
        vessel=vessel,
        time_unit=unit,
        warnings=tuple(notes.warnings),
        source=raw.text,
        **others,  # type: ignore[arg-type]
    )


def _text(raw: Raw, key: str) -> str:
    entry = raw.root.get(key)
    return entry.value if entry is not None else ""


def _in_order(raw: Raw, problems: Sequence[Problem]) -> list[Problem]:
    """Problems in the order in which their tables stand in the file."""
    tables = {name: place for place, name in enumerate(raw.root.value)}

    def place(problem: Problem) -> tuple[int, int]:
        match = re.match(r"(\w+)(?:\[(\d+)\])?", problem.where)
        if match is None:
            return len(tables), 0
        return tables.get(match[1], len(tables)), int(match[2] or 0)

    return sorted(problems, key=place)


# the free-order alternative


def _free_order_share(notes: Notes) -> float:
    entry = notes.raw.root.get("free_order")
    if entry is None:
        return FREE_ORDER
    if entry.value is False:
        return 0.0
    if 0 <= entry.value < 1:
        return float(entry.value)
    notes.problem(entry.where, "out of range", f"{entry.value}", "a chance from 0 to below 1, or false")
    return FREE_ORDER


def _carried(
    notes: Notes, there: Setting, listed: Sequence[Candidate], share: float, unit: str
) -> tuple[tuple[Candidate, ...], tuple[tuple[str, float], ...]]:
    """Every candidate that is carried, beliefs summing to 1, and the constants the alternative adds."""
    total = sum(candidate.belief for candidate in listed)
    even = tuple(replace(c, belief=c.belief / total) for c in listed)
    if len(there.equations) != 1 or any(len(c.steps) != 1 for c in listed):
        notes.warn(
            "no free-order alternative: it is carried only where there is a single reaction. "
            "A law that is not on the list can go unnoticed"
        )
        return even, ()
    if not share:
        notes.warn(
            "the free-order alternative is left out (free_order): "
            "a law that is not on the list can go unnoticed"
        )
        return even, ()
    (equation,) = there.equations.values()
    dimension = setting.rate_dimension(equation, there.species)
    middle = freeorder.Middle(there.conditions, there.known)
    built = freeorder.build(even, equation, middle, share, dimension, units.unit_of(dimension, unit))
    if built is None:
        notes.warn(
            "no free-order alternative: no listed law has a rate above 0 at the middle of what is on offer"
        )
        return even, ()
    scaled = tuple(replace(c, belief=c.belief * (1 - share)) for c in even)
    return (*scaled, built.candidate), built.constants


# pilots and the smaller tables


def _pilots(notes: Notes, there: Setting, scene: stated.Scene, listed: Sequence[Listed]) -> tuple[Pilot, ...]:
    """Pilots of the candidates and of [[pilots]]; one that is written twice counts once."""
    found = [pilot for one in listed for pilot in one.pilots]
    entry = notes.raw.root.get("pilots")
    first = next(iter(there.equations.values()), None)
    for table in entry.each() if entry is not None else ():
        if table.value is not None and first is not None:
            pilot = stated.pilot(notes, table, first.first_reactant, scene)
            found += [pilot] if pilot is not None else []
    return tuple(dict.fromkeys(found))


def _vessel(notes: Notes) -> Vessel:
    table = notes.raw.root.get("vessel") or NOTHING
    keys = ("volume", "sample", "smallest_pipetted")
    return Vessel(**{key: notes.positive(table.get(key), units.VOLUME) for key in keys})


def _others(notes: Notes, there: Setting) -> dict[str, object]:
    root = notes.raw.root
    conditions = {c.name: c for c in there.conditions}
    caps = _by_condition(notes, root.get("caps"), {n: c.dimension for n, c in conditions.items()})
    _caps(notes, caps, conditions)
    run_before = root.get("already_run")
    known = {n: c.dimension for n, c in conditions.items()} | {"volume": units.VOLUME}
    stocks = {n: c.dimension for n, c in conditions.items() if n != "temperature"}
    return {
        "caps": caps,
        "already_run": None if run_before is None else _by_condition(notes, run_before, known),
        "stocks": _by_condition(notes, root.get("stocks"), stocks),
        "heat": _heat(notes),
        "costs": _costs(notes),
        "stop": _stop(notes),
        "floors": tuple((root.get("floors") or Entry("", ())).value),
    }


def _by_condition(
    notes: Notes, entry: Entry | None, known: dict[str, Dimension]
) -> tuple[tuple[str, float], ...]:
    found = []
    for name, inner in entry.items() if entry is not None else ():
        if name not in known and notes.excused(name):
            continue
        if name not in known:
            notes.problem(inner.where, f"'{name}' is no condition of this study", advice=near(name, known))
            continue
        value = notes.positive(inner, known[name])
        if value is not None:
            found.append((name, value))
    return tuple(found)


def _caps(notes: Notes, caps: tuple[tuple[str, float], ...], conditions: dict[str, Condition]) -> None:
    for name, cap in caps:
        if name not in conditions:
            continue
        condition = conditions[name]
        if condition.high > cap * (1 + 1e-12):
            shown, highest = units.show(cap, condition.unit), units.show(condition.high, condition.unit)
            message = f"what is on offer goes beyond caps.{name}"
            advice = f"Lower the range to {shown}, or raise the cap if it is known to be higher"
            notes.problem(f"conditions.{name}", message, highest, f"at most {shown}", advice)


def _heat(notes: Notes) -> Heat:
    table = notes.raw.root.get("heat") or NOTHING
    reaction = notes.quantity(table.get("reaction"), units.MOLAR_ENERGY)
    return Heat(
        reaction.value if reaction is not None else None,
        notes.positive(table.get("density"), units.MASS_CONCENTRATION),
        notes.positive(table.get("heat_capacity"), units.HEAT_CAPACITY),
    )


def _costs(notes: Notes) -> tuple[tuple[str, float], ...]:
    table = notes.raw.root.get("costs") or NOTHING
    found = [(name, notes.read(entry), entry) for name, entry in table.items()]
    kinds = {quantity.dimension for _, quantity, _ in found if quantity is not None}
    if len(kinds) > 1:
        advice = "Give both as times, or both as numbers"
        notes.problem("costs", "a run and a sample cost in different measures", advice=advice)
    for _, quantity, entry in found:
        if quantity is not None and quantity.value < 0:
            notes.problem(entry.where, "out of range", f"{entry.value}", "0 or more")
    return tuple((name, quantity.value) for name, quantity, _ in found if quantity is not None)


def _stop(notes: Notes) -> tuple[tuple[str, float], ...]:
    table = notes.raw.root.get("stop") or NOTHING
    least, most = table.value.get("least_runs"), table.value.get("most_runs")
    if least is not None and most is not None and least > most:
        advice = "Exchange them"
        notes.problem("stop", "least_runs lies above most_runs", f"{least} and {most}", advice=advice)
    return tuple((name, float(entry.value)) for name, entry in table.items())
