"""Reaction equations as a chemist writes them, and their stoichiometric numbers."""

from __future__ import annotations

import re

from designer.records import Equation

_TERM = re.compile(
    r"(?:(?P<number>\d+(?:\.\d+)?|\.\d+)\s+)?(?P<species>[^\W\d][\w()+\-.',]*(?: [\w()+\-.',]+)*)"
)


class EquationError(ValueError):
    """The text is no reaction equation."""


def _side(text: str, whole: str) -> dict[str, float]:
    """Species and numbers of one side; terms are parted by a plus with spaces around it."""
    numbers: dict[str, float] = {}
    for term in re.split(r"\s+\+\s+", text.strip()) if text.strip() else []:
        match = _TERM.fullmatch(term.strip())
        if match is None:
            joined = re.match(r"[\d.]+(?=[^\W\d])", term.strip())
            hint = f"; part the {joined[0]} from the species by a space" if joined else ""
            raise EquationError(f"'{term.strip()}' is no species in '{whole}'{hint}")
        number = float(match["number"] or 1)
        if number <= 0:
            raise EquationError(f"'{term.strip()}' has no positive number before it")
        numbers[match["species"]] = numbers.get(match["species"], 0.0) + number
    return numbers


def equation(text: str, name: str = "") -> Equation:
    """Equation from text such as ``ester + 2 hydroxide -> acid + phenol``.

    A number before a species is parted from it by a space; nothing need be made. A species on both
    sides counts with the difference and stays in the equation even where that is 0.
    Raises EquationError.
    """
    sides = text.split("->")
    if len(sides) != 2:
        found = "no '->'" if len(sides) == 1 else "more than one '->'"
        raise EquationError(f"{found} in '{text.strip()}'")
    used, made = _side(sides[0], text.strip()), _side(sides[1], text.strip())
    if not used:
        raise EquationError(f"nothing stands before '->' in '{text.strip()}'")
    order = dict.fromkeys([*used, *made])
    numbers = tuple((species, made.get(species, 0.0) - used.get(species, 0.0)) for species in order)
    if not any(number < 0 for _, number in numbers):
        raise EquationError(f"nothing is used up in '{text.strip()}'")
    return Equation(name, text.strip(), numbers)
