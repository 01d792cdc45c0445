"""docs/validation.md: written from the checks, and compared with fresh values to the digits it prints.

How many digits of the program's value are printed follows from the tolerance alone, so that what
differs between machines does not show.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from itertools import groupby
from math import ceil, log10
from pathlib import Path

import numpy as np

from validation.collection import LEFT_OUT, SECTIONS
from validation.registry import Check, Values

PATH = Path(__file__).parent.parent.parent / "docs" / "validation.md"
COLUMNS = ("quantity", "published or derived", "this program", "difference", "allowed")
OWN, DIFFERENCE = COLUMNS.index("this program"), COLUMNS.index("difference")
NOISE = 1e-9  # differences below are printed as such
MOST_DIGITS = 9
WORDS = {"=": "", ">=": "at least ", "<=": "at most "}
HEAD = """# Check values

Published and derived values beside the program's own, obtained through its Python interface.
`python -m tests.validation` writes this page anew; `tests/test_validation.py` recomputes every value,
judges it, and compares this page with it.

Difference: the largest of the row, relative, or as it stands where the value is 0 or an inequality.
Allowed: relative (rel) or as it stands (abs). Provenance: *memory*, recalled from the source; *found*,
seen in public text; *computed*, worked out by independent means; *derived*, follows from the task;
*common practice*, a rule of the trade with no source. D-best and the like: best by the measure of that
name (`docs/method.md`). Where the source prints fewer digits than were worked out here, its figure follows.
"""


def found_of(check: Check) -> Values:
    return check.find()


def decimals(check: Check) -> list[int]:
    """Decimals printed of each number: two beyond its tolerance, at most nine figures."""
    places = []
    for value, allowed in zip(check.value, check.allowed(), strict=True):
        wanted = 2 if check.relation != "=" else ceil(-log10(allowed)) + 2
        size = ceil(log10(abs(value))) if value else -20
        places.append(min(wanted, MOST_DIGITS - size))
    return places


def written(check: Check, found: Values) -> str:
    texts = []
    for value, places in zip(found, decimals(check), strict=True):
        rounded = round(value, places)
        texts.append(f"{rounded + 0.0:.{MOST_DIGITS}g}")
    return ", ".join(texts)


def expected(check: Check) -> str:
    value = WORDS[check.relation] + ", ".join(f"{value:.{MOST_DIGITS}g}" for value in check.value)
    if not check.published or check.published == value:
        return value
    return f"{value} (published: {check.published})"


def difference(check: Check, found: Values) -> str:
    value = np.abs(np.array(check.value))
    scale = np.where((value == 0) | (check.relation != "="), 1.0, value)
    largest = float(np.max(check.beyond(found) / scale))
    return f"< {NOISE:g}" if largest < NOISE else f"{largest:.1g}"


def allowed(check: Check) -> str:
    parts = [f"{check.relative:g} rel"] if check.relative else []
    parts += [f"{check.absolute:g} abs"] if check.absolute else []
    if check.relation != "=" and not parts:
        return "none"
    if not check.absolute and 0.0 in check.value:
        parts.append("1e-09 abs at 0")
    return ", ".join(parts)


def cells(check: Check, found: Values) -> list[str]:
    return [
        check.quantity,
        expected(check),
        written(check, found),
        difference(check, found),
        allowed(check),
    ]


def line(texts: list[str] | tuple[str, ...]) -> str:
    return f"| {' | '.join(texts)} |"


def case_lines(checks: list[Check], find: Callable[[Check], Values]) -> Iterator[str]:
    first = checks[0]
    yield f"### {first.case}: {first.statement}"
    yield ""
    yield f"Source: {first.source}. Provenance: {first.provenance}."
    yield ""
    yield line(COLUMNS)
    yield line(["---"] * len(COLUMNS))
    yield from (line(cells(check, find(check))) for check in checks)
    yield ""


def lines(find: Callable[[Check], Values] = found_of) -> list[str]:
    """The document. find: the program's value of a check."""
    out = [*HEAD.splitlines(), ""]
    for section in SECTIONS:
        out += [f"## {section.title}", ""]
        by_case = groupby(section.checks(), key=lambda check: (check.case, check.statement))
        for _, checks in by_case:
            out += case_lines(list(checks), find)
    out += ["## Left out", ""]
    out += [f"- {case}, {key.replace('_', ' ')}: {reason}." for (case, key), reason in LEFT_OUT.items()]
    return out


def same_numbers(old: str, new: str) -> bool:
    """Whether two printed rows of numbers agree within one and a half of the last digit printed."""
    first, second = old.split(", "), new.split(", ")
    if len(first) != len(second):
        return False
    return all(
        abs(float(a) - float(b)) <= 1.5 * max(last_digit(a), last_digit(b))
        for a, b in zip(first, second, strict=True)
        if a != b
    )


def last_digit(text: str) -> float:
    """Size of the last digit of a printed number: 0.01 for 3.14, 1e-9 for 2.5e-08."""
    mantissa, _, power = text.partition("e")
    places = len(mantissa.partition(".")[2])
    return float(10.0 ** (int(power or 0) - places))


def out_of_date(old: list[str], new: list[str]) -> list[str]:
    """Lines of ``new`` that ``old`` does not have in their place."""
    wrong = [text for a, text in zip(old, new, strict=False) if not same_line(a, text)]
    return wrong + new[len(old) :] + old[len(new) :]


def same_line(old: str, new: str) -> bool:
    if old == new:
        return True
    first, second = old.split(" | "), new.split(" | ")
    if len(first) != len(COLUMNS) or len(second) != len(COLUMNS):
        return False
    kept = [i for i in range(len(COLUMNS)) if i not in (OWN, DIFFERENCE)]
    if any(first[i] != second[i] for i in kept):
        return False
    try:
        return same_numbers(first[OWN], second[OWN])
    except ValueError:  # not a number in a row of numbers
        return False
