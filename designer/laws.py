"""Candidates out of the raw record: equations, rates, dimensions, beliefs; every problem noted."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import isfinite

from designer import expressions, stated, units
from designer.dimensions import Clash, Deduction, exponents
from designer.expressions import ExpressionError, Node, Number
from designer.noting import Notes, near
from designer.records import Candidate, Constant, Dimension, Equation, Pilot, Step
from designer.setting import EQUATION, RESERVED, Setting, rate_dimension
from designer.studyfile import Entry, allowed_keys

OWN_KEYS = tuple(allowed_keys(("candidates",)))


@dataclass(frozen=True)
class Listed:
    """A candidate with what only the file says of it."""

    candidate: Candidate
    pilots: tuple[Pilot, ...]
    where: str


@dataclass
class Reader:
    """Reads the candidates one by one."""

    notes: Notes
    setting: Setting
    scene: stated.Scene

    def all(self, entry: Entry | None) -> list[Listed]:
        """Every candidate that can be used; problems with the others are noted."""
        tables = list(entry.each()) if entry is not None else []
        if not tables:
            advice = "Add [[candidates]] with name, rate and belief"
            self.notes.missing(
                self.notes.raw.root, "candidates", "no candidate: nothing to tell apart", advice
            )
        found = [self.one(table, place) for place, table in enumerate(tables, 1) if table.value is not None]
        self._names(tables)
        self._beliefs(tables)
        return [listed for listed in found if listed is not None]

    def _names(self, tables: Sequence[Entry]) -> None:
        seen: set[str] = {"free order"}
        for table in tables:
            inner = table.get("name")
            if inner is None:
                self.notes.missing(table, "name", "a candidate without a name", 'Add name = "..."')
            elif inner.value in seen:
                message = f"the name '{inner.value}' is taken"
                self.notes.problem(inner.where, message, advice="Give each candidate a name of its own")
            else:
                seen.add(inner.value)

    def _beliefs(self, tables: Sequence[Entry]) -> None:
        """Listed beliefs sum to 1; left out everywhere they are equal."""
        given = [table.get("belief") for table in tables]
        wrong = [entry for entry in given if entry is not None and not 0 <= entry.value <= 1]
        for entry in wrong:
            self.notes.problem(entry.where, "out of range", f"{entry.value}", "a chance from 0 to 1")
        lacking = [t for t, entry in zip(tables, given, strict=True) if entry is None]
        if wrong or any(self.notes.lost(f"{t.where}.belief") for t in tables):
            return
        if lacking and len(lacking) < len(tables):
            for table in [t for t in lacking if not _misspelt(t, "belief")]:
                advice = "Give every candidate a belief, or none"
                self.notes.missing(table, "belief", "a candidate without a belief", advice)
            return
        total = sum(entry.value for entry in given if entry is not None)
        if given and not lacking and abs(total - 1) > 2e-3:
            advice = f"Divide each by {total:.6g} to keep their ratios" if total > 0 else ""
            message = "the beliefs of the candidates do not sum to 1"
            self.notes.problem("candidates", message, f"{total:.6g}", "1", advice)

    def one(self, table: Entry, place: int) -> Listed | None:
        """One candidate; None (and problems) where it cannot be used."""
        named = table.get("name")
        name = named.value if named is not None else f"candidate {place}"
        before = len(self.notes.problems)
        steps = self._steps(table, place, name)
        if steps is None:
            return None
        constants, pilots = self._constants(table, steps, name)
        if len(self.notes.problems) > before:
            return None
        belief = table.get("belief")
        share = float(belief.value) if belief is not None else 1.0 / self._count()
        candidate = Candidate(
            name, share, tuple(steps), tuple(constants), overrides=place in self.setting.overriding
        )
        return Listed(candidate, tuple(pilots), table.where)

    def _count(self) -> int:
        entry = self.notes.raw.root.get("candidates")
        return max(1, len(entry.value) if entry is not None else 1)

    def _steps(self, table: Entry, place: int, name: str) -> list[Step] | None:
        rate, rates = table.get("rate"), table.get("rates")
        if (rate is None) == (rates is None):
            message = f"'{name}' has no rate" if rate is None else f"'{name}' has both rate and rates"
            advice = 'Give rate = "..." for one reaction, rates = { step = "..." } for named steps'
            if rate is None:
                self.notes.missing(table, "rate", message, advice)
            else:
                self.notes.problem(table.where, message, advice=advice)
            return None
        if rate is not None:
            equation = self._equation(table, place, name)
            pairs = [(rate, equation)] if equation is not None else []
        else:
            pairs = self._named(table, rates, name)  # type: ignore[arg-type]
        steps = [self._step(entry, equation, name) for entry, equation in pairs]
        good = [step for step in steps if step is not None]
        return good if good and len(good) == len(steps) else None

    def _equation(self, table: Entry, place: int, name: str) -> Equation | None:
        if table.get("equation") is not None:
            return self.setting.overriding.get(place)
        equations = self.setting.equations
        if len(equations) == 1:
            return next(iter(equations.values()))
        if equations:
            advice = f"Give rates = {{ {', '.join(f'{step} = ...' for step in equations)} }}"
            self.notes.problem(
                f"{table.where}.rate", f"'{name}' has one rate for several steps", advice=advice
            )
        return None

    def _named(self, table: Entry, rates: Entry, name: str) -> list[tuple[Entry, Equation]]:
        if table.get("equation") is not None:
            advice = "Give a single rate, or put the equation in [[reactions]]"
            message = f"'{name}' has rates of named steps and an equation of its own"
            self.notes.problem(f"{table.where}.equation", message, advice=advice)
        found = []
        equations = {step: equation for step, equation in self.setting.equations.items() if step}
        for step, entry in rates.items():
            if step in equations:
                found.append((entry, equations[step]))
            else:
                self.notes.problem(
                    entry.where, f"'{step}' is no step in [[reactions]]", advice=near(step, equations)
                )
        if not rates.value and not self.notes.lost(rates.where):
            self.notes.problem(rates.where, f"'{name}' has no step", advice="Name at least one")
        return found

    def _step(self, entry: Entry, equation: Equation, name: str) -> Step | None:
        node = parse(self.notes, entry, f"the rate of '{name}'")
        if node is None or not self._species_known(entry, node, name):
            return None
        return Step(equation, node, entry.value)

    def _species_known(self, entry: Entry, node: Node, name: str) -> bool:
        return species_known(self.notes, self.setting, entry, node, f"the rate of '{name}'")

    # constants

    def _constants(
        self, table: Entry, steps: Sequence[Step], name: str
    ) -> tuple[list[Constant], list[Pilot]]:
        bare = set(self.setting.bare)
        if self.scene.temperature is None:
            bare.discard("temperature")
        used = dict.fromkeys(n for step in steps for n in expressions.names(step.rate))
        needed = [n for n in used if n not in bare]
        given = {key: entry for key, entry in table.items() if key not in OWN_KEYS}
        self._unused(given, needed, bare, name)
        wanted = {n: given[n] for n in needed if n in given}
        self._not_given(table, [n for n in needed if n not in given], name)
        deduction = self._deduce(table, steps, wanted, name)
        if deduction is None:
            return [], []
        orders = frozenset().union(*(exponents(step.rate) for step in steps))
        return self._stated(wanted, steps, deduction, orders, name)

    def _unused(self, given: dict[str, Entry], needed: list[str], bare: set[str], name: str) -> None:
        for key, entry in given.items():
            if key in bare or key in self.setting.species:
                what = "a condition, species or constant of the study"
                message = f"'{key}' is {what} and cannot be a constant of '{name}' too"
                self.notes.problem(entry.where, message, advice="Choose another name")
            elif key not in needed:
                advice = near(key, [*OWN_KEYS, *[n for n in needed if n not in given]])
                message = f"'{key}' stands in no rate of '{name}'"
                self.notes.problem(
                    entry.where, message, advice=f"Leave it out. {advice}" if advice else "Leave it out"
                )

    def _not_given(self, table: Entry, lacking: list[str], name: str) -> None:
        for key in lacking:
            if self.notes.lost(f"{table.where}.{key}"):
                continue
            if key in self.setting.species:
                message, advice = f"'{key}' is a species", f"Write [{key}] for its concentration"
            elif key in RESERVED:
                where = "signals only" if key == "rate" else "a study that has it in [conditions]"
                message, advice = f"'{key}' belongs in {where}", "Take it out of the rate"
            else:
                message = f"'{key}' in the rate of '{name}' is not given"
                advice = f"Add {key} = {{ value = ..., give_or_take = 3 }} to the candidate"
                close = near(key, [*self.setting.bare, *self.setting.species])
                advice += f". {close}" if close.startswith("Perhaps") else ""
            self.notes.problem(
                f"{table.where}.{key}" if key not in RESERVED else table.where, message, advice=advice
            )

    def _deduce(
        self, table: Entry, steps: Sequence[Step], wanted: dict[str, Entry], name: str
    ) -> Deduction | None:
        plain = {n: q.value for n, q in self.setting.constants.items() if q.dimension == units.NONE}
        deduction = Deduction(self.setting.bare, self.setting.species, plain)
        for step in steps:
            what = f"the rate of '{name}'"
            deduction.whole(step.rate, rate_dimension(step.equation, self.setting.species), what)
        if deduction.clashes:
            where = f"{table.where}.rate" if table.get("rate") is not None else f"{table.where}.rates"
            report(self.notes, where, deduction.clashes)
            return None
        for key, entry in wanted.items():
            if deduction.dimension(key) is None:
                dimension = stated.stated_dimension(self.notes, entry)
                if dimension is not None:
                    deduction.state(key, dimension)
        return deduction

    def _stated(
        self,
        wanted: dict[str, Entry],
        steps: Sequence[Step],
        deduction: Deduction,
        orders: frozenset[str],
        name: str,
    ) -> tuple[list[Constant], list[Pilot]]:
        found: dict[str, Constant] = {}
        pilots: list[Pilot] = []
        by_half_life = [k for k, e in wanted.items() if isinstance(e.value, dict) and "half_life" in e.value]
        for key, entry in wanted.items():
            dimension = deduction.dimension(key)
            if dimension is None:
                if not self.notes.lost(entry.where) and self._complete(steps, wanted):
                    message = f"the unit of '{key}' cannot be found from the rate of '{name}'"
                    self.notes.problem(entry.where, message, advice="Give it as a value with a unit")
                continue
            if key not in by_half_life:
                constant = self._constant(key, entry, dimension, key in orders)
                if constant is not None:
                    found[key] = constant
            pilots += self._pilot(entry, steps[0])
        if len(by_half_life) > 1:
            message = f"'{name}' gives {' and '.join(by_half_life)} by a half-life; one at most can be"
            self.notes.problem(wanted[by_half_life[1]].where, message, advice="Give the others as values")
        elif by_half_life and len(found) == len(wanted) - 1 and self._complete(steps, wanted):
            key = by_half_life[0]
            constant = self._by_half_life(key, wanted[key], deduction.dimension(key), steps, found, name)
            if constant is not None:
                found[key] = constant
        return [found[key] for key in wanted if key in found], pilots

    def _complete(self, steps: Sequence[Step], wanted: dict[str, Entry]) -> bool:
        """Whether every name of the rates is known; otherwise units cannot be expected to follow."""
        return all(n in self.setting.bare or n in wanted for s in steps for n in expressions.names(s.rate))

    def _constant(self, key: str, entry: Entry, dimension: Dimension, order: bool) -> Constant | None:
        belief = stated.belief(self.notes, entry, dimension, order)
        if belief is None:
            return None
        return self._joined(key, entry, dimension, belief[0], belief[1])

    def _joined(
        self, key: str, entry: Entry, dimension: Dimension, belief: stated.Belief, unit: str
    ) -> Constant | None:
        inner = entry.get("activation_energy")
        if inner is None:
            return Constant(key, belief, dimension, unit, stated=stated.words(entry))
        energy = stated.energy(self.notes, inner)
        reference = stated.reference_temperature(self.notes, entry, self.scene)
        if energy is None or reference is None:
            return None
        return Constant(key, belief, dimension, unit, energy, reference, stated.words(entry))

    def _by_half_life(
        self,
        key: str,
        entry: Entry,
        dimension: Dimension | None,
        steps: Sequence[Step],
        others: dict[str, Constant],
        name: str,
    ) -> Constant | None:
        keys = stated.BELIEF_KEYS & set(entry.value)
        if dimension is None:
            return None
        if keys not in stated.FORMS:
            stated.belief(self.notes, entry, dimension, False)
            return None
        belief = stated.from_half_life(
            self.notes, entry, key, tuple(steps), tuple(others.values()), self.scene, name
        )
        if belief is None:
            return None
        return self._joined(key, entry, dimension, belief, units.unit_of(dimension, self.scene.time_unit))

    def _pilot(self, entry: Entry, step: Step) -> list[Pilot]:
        if not isinstance(entry.value, dict) or "pilot" not in entry.value:
            return []
        found = stated.pilot(self.notes, entry, step.equation.first_reactant, self.scene)
        return [found] if found is not None else []


def _misspelt(table: Entry, key: str) -> bool:
    """Whether the table holds a key that is nearly this one (reported as a constant in no rate)."""
    return any(near(found, [key]).startswith("Perhaps") for found in table.value if found not in OWN_KEYS)


def parse(notes: Notes, entry: Entry, what: str) -> Node | None:
    """The expression of an entry; None (and a problem with its place) where it is none."""
    try:
        node = expressions.parse(entry.value)
    except ExpressionError as reason:
        text = entry.value if len(entry.value) <= 60 else f"{entry.value[:57]}..."
        place = f'at character {reason.position + 1} of "{text}"'
        advice = "Names, numbers, [species], + - * / ^ ( ) and exp, log, sqrt are all there is"
        notes.problem(entry.where, f"{what} cannot be read: {reason} {place}", advice=advice)
        return None
    if any(isinstance(part, Number) and not isfinite(part.value) for part in expressions.walk(node)):
        notes.problem(entry.where, f"{what} holds a number too large to be one")
        return None
    if not expressions.numbers_exist(node):
        advice = "Look for a division by 0, the log or root of a negative number, or an enormous power"
        notes.problem(entry.where, f"{what} holds a number that does not exist", advice=advice)
        return None
    return node


def species_known(notes: Notes, setting: Setting, entry: Entry, node: Node, what: str) -> bool:
    """Whether every [species] of the expression occurs in an equation; a problem for each that does not."""
    if EQUATION in notes.broken:  # the species are not all known
        return False
    good = True
    for name in dict.fromkeys([*expressions.species(node), *expressions.species(node, initial=True)]):
        if name in setting.species:
            continue
        good = False
        if name in setting.bare:
            message = f"'{name}' in {what} takes part in no equation"
            notes.problem(entry.where, message, advice=f"Write {name} without brackets")
        else:
            message = f"there is no species '{name}', which {what} names"
            notes.problem(entry.where, message, advice=near(name, setting.species))
    return good


def report(notes: Notes, where: str, clashes: Sequence[Clash]) -> None:
    """Note clashes of dimension as problems at ``where``."""
    for clash in clashes:
        advice = clash.advice or "Check the form of the expression and the units it rests on"
        notes.problem(where, f"in {clash.part}: {clash.message}", advice=advice)
