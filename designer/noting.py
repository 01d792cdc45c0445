"""Take values out of a raw record, noting every problem instead of stopping at the first."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field
from difflib import get_close_matches

from designer import units
from designer.errors import Problem
from designer.records import Dimension
from designer.studyfile import Entry, Raw

_SUCH_AS = {
    units.TIME: '"5 min"',
    units.CONCENTRATION: '"5 mM"',
    units.MASS_CONCENTRATION: '"0.5 g/L"',
    units.TEMPERATURE: '"25 degC"',
    units.PRESSURE: '"2 bar"',
    units.MOLAR_ENERGY: '"75 kJ/mol"',
    units.VOLUME: '"0.5 mL"',
    units.HEAT_CAPACITY: '"4.18 J/(g*K)"',
}


def near(word: str, words: Iterable[str]) -> str:
    """Advice naming the nearest of ``words``, or all of them where none is near."""
    words = list(dict.fromkeys(words))
    found = get_close_matches(word, words, n=1, cutoff=0.6)
    if found:
        return f"Perhaps '{found[0]}' is meant"
    return f"Known here: {', '.join(words)}" if words else ""


def expected_words(dimension: Dimension) -> str:
    """What is expected, with an example where one is usual."""
    words = units.dimension_words(dimension)
    example = _SUCH_AS.get(dimension)
    return f"{words} such as {example}" if example else words


@dataclass
class Notes:
    """Problems (the file cannot be used) and warnings (odd, but used) found so far."""

    raw: Raw
    problems: list[Problem] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    broken: set[str] = field(default_factory=set)  # conditions and equations reported already

    def problem(
        self, where: str, message: str, found: str = "", expected: str = "", advice: str = ""
    ) -> None:
        """Note a problem (see ``errors.Problem``), once."""
        problem = Problem(where, message, found, expected, advice)
        if problem not in self.problems:
            self.problems.append(problem)

    def warn(self, text: str) -> None:
        """Note a warning, once."""
        if text not in self.warnings:
            self.warnings.append(text)

    def lost(self, where: str) -> bool:
        """Whether something at or below this path was no use and has been reported already."""
        return any(path == where or path.startswith((f"{where}.", f"{where}[")) for path in self.raw.dropped)

    def excused(self, condition: str) -> bool:
        """Whether this condition is in the file, but so that it has been reported already."""
        return condition in self.broken or self.lost(f"conditions.{condition}")

    def problems_in(self, *tables: str) -> bool:
        """Whether a problem of one of these tables has been noted."""
        heads = tuple(f"{table}." for table in tables)
        return any(p.where in tables or p.where.startswith(heads) for p in self.problems)

    def missing(self, parent: Entry, key: str, message: str, advice: str = "") -> None:
        """Report a value that is not there, unless it was there and has been reported."""
        where = f"{parent.where}.{key}" if parent.where else key
        table = parent.where or "\0"
        if not self.lost(where) and table not in self.raw.dropped and not self._misspelt(parent):
            self.problem(parent.where or key, message, advice=advice)

    def _misspelt(self, parent: Entry) -> bool:
        """A key of this very table was dropped: the missing one is most likely the same."""
        head = f"{parent.where}." if parent.where else ""
        return any(path.startswith(head) and "." not in path[len(head) :] for path in self.raw.dropped)

    def read(self, entry: Entry) -> units.Quantity | None:
        """The quantity of an entry, whatever its dimension."""
        if isinstance(entry.value, int | float):
            return units.Quantity(float(entry.value), units.NONE, "")
        try:
            return units.read(entry.value)
        except units.UnitError as reason:
            advice = 'Write a number, a space and a unit, such as "5 mM"'
            self.problem(entry.where, str(reason), advice=advice)
            return None

    def quantity(self, entry: Entry | None, dimension: Dimension) -> units.Quantity | None:
        """The quantity of an entry that must have this dimension; None (and a problem) if it has not."""
        if entry is None:
            return None
        found = self.read(entry)
        if found is None or found.dimension == dimension:
            return found
        bare = found.dimension == units.NONE
        shown = f'"{entry.value}"' if isinstance(entry.value, str) else f"{entry.value}"
        if not bare:
            shown += f", {units.dimension_words(found.dimension)}"
        message = "the unit is missing" if bare and not found.unit else "the unit does not fit"
        self.problem(entry.where, message, shown, expected_words(dimension))
        return None

    def positive(self, entry: Entry | None, dimension: Dimension, zero: bool = False) -> float | None:
        """Internal value above 0 (or 0, if ``zero``)."""
        found = self.quantity(entry, dimension)
        if entry is None or found is None:
            return None
        if found.value > 0 or (zero and found.value == 0):
            return found.value
        expected = "0 or more" if zero else "a value above 0"
        self.problem(entry.where, "out of range", f"{entry.value}", expected)
        return None

    def share(self, entry: Entry | None, what: str = 'a share such as "1.5 %"') -> float | None:
        """A relative error or width: 0 or more and below 1."""
        found = self.quantity(entry, units.NONE)
        if entry is None or found is None:
            return None
        if 0 <= found.value < 1:
            return found.value
        advice = (
            f'Write "{found.value:g} %" if percent is meant' if found.value >= 1 and not found.unit else ""
        )
        self.problem(entry.where, "out of range", f"{entry.value}", f"{what}, from 0 to below 1", advice)
        return None

    def difference(self, entry: Entry | None) -> float | None:
        """A difference of temperature in K."""
        if (
            entry is not None
            and isinstance(entry.value, str)
            and entry.value.rstrip().endswith(("degC", "°C"))
        ):
            self.problem(entry.where, "a difference of temperature", entry.value, 'kelvin, such as "0.2 K"')
            return None
        return self.positive(entry, units.TEMPERATURE, zero=True)

    def factor(self, entry: Entry | None) -> float | None:
        """A factor above 1 that spans 90 %."""
        found = self.quantity(entry, units.NONE)
        if entry is None or found is None:
            return None
        if found.value > 1 and math.isfinite(found.value):
            return found.value
        self.problem(entry.where, "out of range", f"{entry.value}", "a factor above 1, such as 3")
        return None

    def chance(self, entry: Entry | None, default: float, ends: bool = False) -> float:
        """A probability between 0 and 1 (the ends only where allowed)."""
        if entry is None:
            return default
        value = float(entry.value)
        if 0 < value < 1 or (ends and value in (0.0, 1.0)):
            return value
        expected = "a number from 0 to 1" if ends else "a number between 0 and 1"
        self.problem(entry.where, "out of range", f"{entry.value}", expected)
        return default
