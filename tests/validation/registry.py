"""Checks: a published or derived value, where it comes from, and how the program's own is obtained."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from functools import cache, partial
from pathlib import Path
from typing import Any

import numpy as np

REFERENCE = Path(__file__).parent.parent / "reference"
NEAR_ZERO = 1e-9  # where 0 is expected a relative tolerance means this, absolutely
RELATIONS = ("=", ">=", "<=")

Values = tuple[float, ...]
Results = Mapping[str, Any]  # quantity -> number or numbers
Compute = Callable[[], Results]


@dataclass(frozen=True)
class Check:
    """One value beside the program's.

    case: the statement it belongs to ("G1-01", "K-05"); relation: how the program's value must stand to
    ``value``; relative and absolute: tolerances, which add up; find: the program's value, through the
    Python interface. source and provenance (memory, found, computed, common practice) are of ``value``;
    published: the figure as the source prints it, where that has fewer digits.
    """

    case: str
    quantity: str
    statement: str
    value: Values
    find: Callable[[], Values]
    source: str
    provenance: str
    relative: float = 0.0
    absolute: float = 0.0
    relation: str = "="
    published: str = ""

    @property
    def id(self) -> str:
        return f"{self.case} {self.quantity}"

    def allowed(self) -> np.ndarray:
        """Tolerance of each number, in its own unit."""
        value = np.abs(np.array(self.value))
        allowed = self.absolute + self.relative * value
        return np.where(value == 0, np.maximum(allowed, NEAR_ZERO), allowed)

    def beyond(self, found: Values) -> np.ndarray:
        """How far each number is off in the direction that counts; 0 where an inequality holds."""
        off = np.array(found) - np.array(self.value)
        return {"=": np.abs(off), ">=": np.maximum(-off, 0.0), "<=": np.maximum(off, 0.0)}[self.relation]

    def holds(self, found: Values) -> bool:
        """Whether every number of ``found`` stands to ``value`` as it should (nan never does)."""
        if len(found) != len(self.value):
            return False
        return bool(np.all(self.beyond(found) <= self.allowed()))


def numbers(value: Any) -> Values:
    return tuple(float(x) for x in np.atleast_1d(np.asarray(value, dtype=float)).ravel())


def quantity_of(compute: Compute, key: str) -> Values:
    return numbers(compute()[key])


@cache
def remembered(compute: Compute) -> Compute:
    """The same function, computing once however often the list of checks is made."""
    return cache(compute)


def known(
    case: str,
    statement: str,
    compute: Compute,
    values: Mapping[str, Any],
    source: str,
    provenance: str,
    *,
    relative: float = 0.0,
    absolute: float = 0.0,
    relation: str = "=",
) -> list[Check]:
    """Checks of one statement that share a tolerance. compute: quantity -> the program's value."""
    once = remembered(compute)
    return [
        Check(
            case,
            key,
            statement,
            numbers(value),
            partial(quantity_of, once, key),
            source,
            provenance,
            relative,
            absolute,
            relation,
        )
        for key, value in values.items()
    ]


def cases(group: int) -> dict[str, dict[str, Any]]:
    """Check values of a group, by case."""
    text = (REFERENCE / f"cases_group{group}.json").read_text(encoding="utf-8")
    return {case["id"]: case for case in json.loads(text)["cases"]}


def printed(value: Any) -> str:
    """A published figure or figures; "-" for those that the source does not give."""
    if value is None:
        return ""
    figures = value if isinstance(value, list) else [value]
    return ", ".join("-" if figure is None else f"{figure:.9g}" for figure in figures)


def from_file(
    group: int, computing: Mapping[str, Compute], left_out: Iterable[tuple[str, str]]
) -> list[Check]:
    """Checks of every quantity of a group of check values, but for those in ``left_out``.

    computing: case -> function whose result holds every quantity of that case.
    """
    found, skipped = [], set(left_out)
    for name, case in cases(group).items():
        once = remembered(computing[name])
        for key, value in case["expected"].items():
            if (name, key) in skipped:
                continue
            tolerance = case["tolerance"][key]
            found.append(
                Check(
                    name,
                    key.replace("_", " "),
                    case["title"].replace("-optimal", "-best"),  # a page of ours makes no such claim
                    numbers(value),
                    partial(quantity_of, once, key),
                    case["source"],
                    case["provenance_detail"],
                    tolerance.get("rel", 0.0),
                    tolerance.get("abs", 0.0),
                    published=printed(case["published"].get(key)),
                )
            )
    return found
