"""Figures of ``check``: predicted curves of every candidate, and where the error of a sample comes from.

Readable in grey: candidates differ by line style and shade as well as by colour.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from designer import units, wording
from designer.findings import Budget, Checkup
from designer.records import Reading, Study

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

# dark to light, so that they stay apart in grey too
STYLES = (
    ("#000000", "-"),
    ("#0b4f8a", "--"),
    ("#b5400f", "-."),
    ("#2f8f5b", ":"),
    ("#8a5aa8", (0, (5, 1, 1, 1, 1, 1))),
    ("#c79a00", (0, (8, 2))),
    ("#888888", (0, (1, 1))),
)
HATCHES = ("", "///", "...", "xxx", "\\\\\\", "+++", "ooo", "---")
WIDTH, HEIGHT = 9.0, 3.4  # inches; height of one reading's row


def check_figure(study: Study, found: Checkup) -> Figure:
    """One row for each reading: curves at the middle of what is on offer (middle of the belief and 5 to 95 %
    fan), and shares of the variance at a typical sample."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH, HEIGHT * len(study.readings) + 0.8), dpi=130, layout="constrained")
    rows = figure.subplots(len(study.readings), 2, squeeze=False, width_ratios=(3, 2))
    for row, reading in zip(rows, study.readings, strict=True):
        _curves(row[0], study, found, reading)
        _budget(row[1], [b for b in found.budgets if b.reading == reading.name], _sources(found))
    handles, labels = rows[0][0].get_legend_handles_labels()
    figure.legend(
        handles, labels, loc="outside lower center", ncols=min(3, max(1, len(labels))), frameon=False
    )
    at = ", ".join(
        f"{name} {wording.amount(value, study.condition(name).unit)}" for name, value in found.middle
    )
    figure.suptitle(f"{found.title}\nat {at}" if found.title else f"at {at}", fontsize=10)
    return figure


def _curves(axes: Axes, study: Study, found: Checkup, reading: Reading) -> None:
    order = [law.candidate.name for law in found.laws]
    for curve in found.curves:
        if curve.reading != reading.name:
            continue
        colour, line = STYLES[order.index(curve.candidate) % len(STYLES)]
        times = [units.convert(t, study.time_unit) for t in curve.times]
        low, middle, high = (
            [units.convert(x, reading.unit) for x in values]
            for values in (curve.low, curve.middle, curve.high)
        )
        axes.fill_between(times, low, high, color=colour, alpha=0.08, linewidth=0)
        axes.plot(times, middle, color=colour, linestyle=line, linewidth=1.6, label=curve.candidate)
    if reading.lowest is not None:
        axes.axhline(units.convert(reading.lowest, reading.unit), color="0.5", linewidth=0.8)
    if reading.highest is not None and units.convert(reading.highest, reading.unit) < axes.get_ylim()[1]:
        axes.axhline(units.convert(reading.highest, reading.unit), color="0.5", linewidth=0.8)
    axes.set_xlim(left=0)
    axes.set_xlabel(f"time / {study.time_unit}")
    axes.set_ylabel(f"{reading.name} / {reading.unit}" if reading.unit else reading.name)
    axes.set_title("middle and 5 to 95 % of the belief", fontsize=8)


def _sources(found: Checkup) -> list[str]:
    """Every source of error, in the order in which all bars show them."""
    return list(dict.fromkeys(share.source for budget in found.budgets for share in budget.shares))


def _budget(axes: Axes, budgets: list[Budget], sources: list[str]) -> None:
    """Stacked bars: one per candidate, shares of the variance in per cent."""
    names = [budget.candidate for budget in budgets]
    start = [0.0] * len(budgets)
    for number, source in enumerate(sources):
        widths = [
            100 * sum(share.share for share in budget.shares if share.source == source) for budget in budgets
        ]
        shade = str(0.35 + 0.6 * number / max(1, len(sources) - 1))
        axes.barh(
            range(len(names)),
            widths,
            left=start,
            color=shade,
            edgecolor="black",
            linewidth=0.5,
            hatch=HATCHES[number % len(HATCHES)],
            label=source,
        )
        start = [a + b for a, b in zip(start, widths, strict=True)]
    axes.set_yticks(range(len(names)), names, fontsize=7)
    axes.invert_yaxis()
    axes.set_xlim(0, 100)
    axes.set_xlabel("share of the variance / %")
    axes.set_title("where the error of a sample comes from", fontsize=8)
    axes.legend(fontsize=6, loc="upper center", bbox_to_anchor=(0.5, -0.22), ncols=2, frameon=False)
