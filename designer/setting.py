"""What a study takes place in: reactions, conditions and known numbers, out of the raw record."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from designer import expressions, reactions, units
from designer.noting import Notes
from designer.records import Condition, Dimension, Equation
from designer.studyfile import Entry

EQUATION = "->"  # stands among broken things for an equation; no condition can have this name
RESERVED = ("time", "temperature", "rate", *expressions.FUNCTIONS)


@dataclass(frozen=True)
class Setting:
    """Equations by name of step, conditions, and the study's constants with their dimensions."""

    equations: dict[str, Equation]
    overriding: dict[int, Equation]  # by place of the candidate, from 1
    conditions: tuple[Condition, ...]
    constants: dict[str, units.Quantity]
    species: dict[str, Dimension] = field(default_factory=dict)

    @property
    def known(self) -> dict[str, float]:
        """Study constant -> internal value."""
        return {name: quantity.value for name, quantity in self.constants.items()}

    @property
    def bare(self) -> dict[str, Dimension]:
        """Dimension of every name that may stand bare in a rate, the candidates' constants aside."""
        found: dict[str, Dimension] = {name: q.dimension for name, q in self.constants.items()}
        found |= {c.name: c.dimension for c in self.conditions if not c.is_species}
        return found | {"time": units.TIME}


def build(notes: Notes) -> Setting:
    """Reactions, conditions and constants of the file; every problem goes into ``notes``."""
    root = notes.raw.root
    equations = _equations(notes, root.get("reactions"))
    overriding = _overriding(notes, root.get("candidates"))
    names = {s for e in [*equations.values(), *overriding.values()] for s, _ in e.stoichiometry}
    conditions = _conditions(notes, root, names)
    constants = _constants(notes, root.get("constants"), {c.name for c in conditions} | names)
    species = _species(notes, [*equations.values(), *overriding.values()], conditions)
    return Setting(equations, overriding, conditions, constants, species)


def _one_equation(notes: Notes, entry: Entry, name: str) -> Equation | None:
    try:
        return reactions.equation(entry.value, name)
    except reactions.EquationError as reason:
        expected = 'an equation such as "ester + 2 hydroxide -> acid + phenol"'
        notes.problem(entry.where, str(reason), expected=expected)
        notes.broken.add(EQUATION)
        return None


def _equations(notes: Notes, entry: Entry | None) -> dict[str, Equation]:
    tables = [table for table in entry.each() if table.value is not None] if entry is not None else []
    if not tables:
        notes.missing(
            notes.raw.root, "reactions", "no reaction", 'Add [[reactions]] with equation = "A + B -> C"'
        )
    found: dict[str, Equation] = {}
    for table in tables:
        inner, named = table.get("equation"), table.get("name")
        name = named.value if named else ""
        if len(tables) > 1 and not name:
            notes.missing(
                table, "name", "a step without a name", "Where there are several steps each needs a name"
            )
        if inner is None:
            notes.missing(table, "equation", "a reaction without an equation", 'Add equation = "A + B -> C"')
            continue
        if name in found:
            notes.problem(
                table.where, f"a second step called '{name}'", advice="Give each step a name of its own"
            )
        equation = _one_equation(notes, inner, name)
        if equation is not None:
            found[name] = equation
    return found


def _overriding(notes: Notes, entry: Entry | None) -> dict[int, Equation]:
    found: dict[int, Equation] = {}
    for place, table in enumerate(entry.each() if entry is not None else (), 1):
        inner = table.get("equation")
        if inner is not None:
            equation = _one_equation(notes, inner, "")
            if equation is not None:
                found[place] = equation
    return found


def _conditions(notes: Notes, root: Entry, species: set[str]) -> tuple[Condition, ...]:
    entry = root.get("conditions")
    if entry is None or not entry.value:
        example = 'ester = { from = "5 mM", to = "100 mM" }'
        advice = f"Add [conditions] with the starting concentrations, such as {example}"
        notes.missing(root, "conditions", "no conditions: a run must start from something", advice)
        return ()
    found = {name: _condition(notes, name, inner, name in species) for name, inner in entry.items()}
    notes.broken |= {name for name, condition in found.items() if condition is None}
    return tuple(condition for condition in found.values() if condition is not None)


def _condition(notes: Notes, name: str, entry: Entry, is_species: bool) -> Condition | None:
    if name in RESERVED and name != "temperature":
        notes.problem(entry.where, f"'{name}' has a meaning of its own", advice="Choose another name")
        return None
    values = _offers(notes, entry)
    if values is None:
        return None
    dimension, numbers = values[0].dimension, [value.value for value in values]
    where = entry.where
    if name == "temperature" and dimension != units.TEMPERATURE:
        notes.problem(where, "the unit does not fit", _shown(entry), 'a temperature such as "25 degC"')
        return None
    allowed = (units.CONCENTRATION, units.MASS_CONCENTRATION, units.NONE)
    if is_species and (dimension not in allowed or (dimension == units.NONE and not values[0].unit)):
        notes.problem(
            where, "the unit does not fit", _shown(entry), 'a concentration such as "5 mM" or "2 g/L"'
        )
        return None
    if min(numbers) < 0:
        notes.problem(where, "below 0", _shown(entry), "0 or more")
        return None
    is_list = isinstance(entry.value, dict) and "one_of" in entry.value and len(set(numbers)) > 1
    levels = tuple(sorted(set(numbers))) if is_list else ()
    return Condition(name, is_species, dimension, values[0].unit, min(numbers), max(numbers), levels)


def _shown(entry: Entry) -> str:
    if not isinstance(entry.value, dict):
        return f'"{entry.value}"'
    one_of = entry.value.get("one_of")
    return str(one_of) if one_of is not None else f'"{entry.value.get("from")}" to "{entry.value.get("to")}"'


def _offers(notes: Notes, entry: Entry) -> list[units.Quantity] | None:
    """What is on offer: one value, two ends of a range, or the levels."""
    if not isinstance(entry.value, dict):
        found = notes.read(entry)
        return [found] if found else None
    keys = set(entry.value)
    if keys not in ({"from", "to"}, {"one_of"}):
        if not notes.lost(entry.where):
            expected = 'a value, { from = "...", to = "..." } or { one_of = ["...", "..."] }'
            notes.problem(
                entry.where, "not a condition", ", ".join(sorted(keys)) or "an empty table", expected
            )
        return None
    inner = [entry.get("from"), entry.get("to")] if "from" in keys else list(entry.get("one_of").each())  # type: ignore[union-attr]
    values = [notes.read(each) for each in inner if each is not None and each.value is not None]
    good = [value for value in values if value is not None]
    if len(good) < len(values) or not good:
        if not values:
            notes.problem(entry.where, "nothing on offer", expected="at least one value")
        return None
    if any(value.dimension != good[0].dimension for value in good):
        notes.problem(entry.where, "units of different kinds", _shown(entry), "one kind of unit throughout")
        return None
    if "from" in keys and good[0].value > good[1].value:
        notes.problem(
            entry.where, "the range is reversed", _shown(entry), "from below to", "Exchange the two ends"
        )
        return None
    return good


def _constants(notes: Notes, entry: Entry | None, taken: set[str]) -> dict[str, units.Quantity]:
    found: dict[str, units.Quantity] = {}
    for name, inner in entry.items() if entry is not None else ():
        if name in taken or name in RESERVED:
            what = "a condition or species" if name in taken else "a word with a meaning of its own"
            notes.problem(inner.where, f"'{name}' is {what} already", advice="Choose another name")
            continue
        quantity = notes.read(inner)
        if quantity is not None:
            found[name] = quantity
    return found


def _species(
    notes: Notes, equations: list[Equation], conditions: tuple[Condition, ...]
) -> dict[str, Dimension]:
    """Dimension of each species: that of its condition, or of what it reacts with, or mol/L."""
    given = {c.name: c.dimension for c in conditions if c.is_species}
    found: dict[str, Dimension] = dict(given)
    for equation in equations:
        kinds = {given[name] for name, _ in equation.stoichiometry if name in given}
        if len(kinds) > 1:
            names = ", ".join(name for name, _ in equation.stoichiometry if name in given)
            advice = "Give all species of one equation in mol/L or all in g/L"
            notes.problem(
                "conditions", f"'{equation.text}' mixes kinds of concentration ({names})", advice=advice
            )
        kind = next(iter(sorted(kinds)), units.CONCENTRATION)
        for name, _ in equation.stoichiometry:
            found.setdefault(name, kind)
    return found


def rate_dimension(equation: Equation, species: Mapping[str, Dimension]) -> Dimension:
    """Concentration per time, in the kind of concentration that the equation's species have."""
    kind = species[equation.stoichiometry[0][0]]
    return (kind[0] - 1, *kind[1:])
