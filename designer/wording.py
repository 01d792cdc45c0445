"""Numbers and times as a person writes them: never more digits than the error supports.

A figure from virtual studies is printed to the first significant digit of its Monte-Carlo error, a
predicted reading to that of the instrument's. A time is printed as one reads it off a clock.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Sequence
from math import floor, isfinite, log10

from designer import units
from designer.outcomes import Estimate

WIDTH = 100  # columns of a printed sheet
NONE = "–"  # where a figure is not defined
HELD = "\N{NO-BREAK SPACE}"

MINUTE, HOUR, DAY = 60.0, 3600.0, 86400.0


def decimals(error: float) -> int:
    """Places after the point at which the first significant digit of ``error`` stands; negative for an
    error of ten or more. 0.013 -> 2, 0.0096 -> 2 (it rounds to 0.01), 14 -> -1."""
    return -floor(log10(float(f"{error:.0e}")))


def to_error(value: float, error: float) -> str:
    """``value`` to the digits that ``error`` supports; three digits where there is no error."""
    if not isfinite(value):
        return NONE
    if not isfinite(error) or error <= 0:
        return f"{value:.3g}"
    places = decimals(error)
    shown = f"{round(value, places):.{max(places, 0)}f}"
    return shown.removeprefix("-") if float(shown) == 0 else shown


def estimate(figure: Estimate, factor: float = 1.0, unit: str = "") -> str:
    """``0.97 ± 0.01``: value and one standard error, both times ``factor``, to the digits of the error."""
    value, error = figure.value * factor, figure.error * factor
    if not isfinite(value):
        return NONE
    if not isfinite(error) or error <= 0:
        return f"{value:.3g} {unit}".strip()
    return f"{to_error(value, error)} ± {to_error(error, error)} {unit}".strip()


def percent(figure: Estimate) -> str:
    return estimate(figure, 100, "%")


def reading(value: float, error: float, unit: str) -> str:
    """A predicted reading in ``unit`` (number alone), to the digits its error supports."""
    return to_error(units.convert(value, unit), error / units.scale(unit)[0])


def _whole(value: float) -> str:
    """A number without needless zeros: whole where it is whole, else one decimal at most two."""
    return f"{round(value, 2):g}"


def clock(seconds: float, unit: str = "min") -> str:
    """A time as written on a bench sheet: ``45 s``, ``1 min 30 s``, ``90 min``, ``2 h 30``, ``3 d 4 h``.

    ``unit``, that of the study's own limits, decides from where hours are used: 2 h in a study of
    minutes, 1 h otherwise. Rounded to 0.01 s below a minute, to the second below two hours, to the
    minute below two days, then to the hour.
    """
    longest = HOUR if unit in ("h", "d", "week", "month") else 2 * HOUR
    if seconds < MINUTE - 0.005:
        return f"{_whole(seconds)} s"
    if seconds < longest - 0.5:
        minutes, rest = divmod(round(seconds), 60)
        return f"{minutes} min {rest} s" if rest else f"{minutes} min"
    if seconds < 2 * DAY - 30:
        hours, rest = divmod(round(seconds / MINUTE), 60)
        return f"{hours} h {rest:02d}" if rest else f"{hours} h"
    days, hours = divmod(round(seconds / HOUR), 24)
    return f"{days} d {hours} h" if hours else f"{days} d"


def amount(value: float, unit: str) -> str:
    """A condition as it is prepared: four digits at most, ``5 mM``, ``25 degC``."""
    return units.show(value, unit, 4)


def listed(words: Iterable[str], last: str = "and") -> str:
    """``a``, ``a and b``, ``a, b and c``."""
    words = list(words)
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} {last} {words[-1]}"


def wrapped(text: str, indent: str = "", hanging: str | None = None) -> list[str]:
    """Lines of at most ``WIDTH`` columns; later lines begin with ``hanging`` (default: ``indent``). A
    figure stays on one line with its error and its per cent."""
    lines = textwrap.wrap(
        text.replace(" ± ", f"{HELD}±{HELD}").replace(" %", f"{HELD}%"),
        WIDTH,
        initial_indent=indent,
        subsequent_indent=indent if hanging is None else hanging,
        break_on_hyphens=False,
    )
    return [line.replace(HELD, " ") for line in lines]


def columns(
    head: Sequence[str], rows: Sequence[Sequence[str]], kept: int = 1, indent: str = "  "
) -> list[str]:
    """An aligned table. Where it would be wider than ``WIDTH``, the columns after the first ``kept`` go
    on in a further table below, under the same first columns."""
    widths = [max(len(row[i]) for row in [head, *rows]) for i in range(len(head))]
    room = WIDTH - len(indent) - sum(widths[:kept]) - 2 * (kept - 1)
    blocks: list[list[int]] = [[]]
    used = 0
    for i in range(kept, len(head)):
        if blocks[-1] and used + 2 + widths[i] > room:
            blocks.append([])
            used = 0
        blocks[-1].append(i)
        used += 2 + widths[i]
    lines = []
    for block in blocks:
        order = [*range(kept), *block]
        for row in [head, *rows]:
            lines.append((indent + "  ".join(row[i].ljust(widths[i]) for i in order)).rstrip())
    return lines
