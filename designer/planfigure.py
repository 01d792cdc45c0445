"""Figure of a plan: what every candidate predicts in each run, when samples fall, and how often the
plan names the right law beside what people usually do.

Readable in grey: candidates differ by line style and shade as well as by colour.
"""

from __future__ import annotations

import io
from math import ceil
from typing import TYPE_CHECKING

from designer import units, wording
from designer.figures import STYLES
from designer.outcomes import Plan, PlannedRun, Rating
from designer.records import Reading, Study

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

ACROSS = 3  # panels in a row
WIDE, HIGH = 4.2, 3.0  # inches of one panel
BAR = 0.34  # inches of one plan in the comparison
SMALL = 8


def plan_figure(study: Study, plan: Plan) -> Figure:
    """One panel for each run and reading: middle of the belief and 5 to 95 % fan of every candidate,
    ticks where samples fall; below, the chance of naming the right law for this plan and the others."""
    from matplotlib.figure import Figure

    readings = list(study.readings)
    across = min(ACROSS, len(plan.runs))
    rows = ceil(len(plan.runs) / across) * len(readings)
    ratings = (plan.rating, *plan.alternatives)
    last = 1.0 + BAR * len(ratings)
    size = (max(WIDE * across, 7.5), HIGH * rows + last + 0.9)
    figure = Figure(figsize=size, dpi=130, layout="constrained")
    grid = figure.add_gridspec(rows + 1, across, height_ratios=[*([HIGH] * rows), last])
    for place, run in enumerate(plan.runs):
        for number, reading in enumerate(readings):
            row = (place // across) * len(readings) + number
            _run(figure.add_subplot(grid[row, place % across]), study, plan, run, reading)
    _chances(figure.add_subplot(grid[rows, :]), ratings)
    _named(figure, plan)
    return figure


def _named(figure: Figure, plan: Plan) -> None:
    """Title and key of the candidates in one block, which a separate title would run into."""
    handles, labels = figure.axes[0].get_legend_handles_labels()
    figure.legend(
        handles,
        labels,
        title=f"{plan.title} (middle of the belief, shaded 5 to 95 %)",
        title_fontsize=11,
        loc="outside upper center",
        ncols=2,
        frameon=False,
        fontsize=SMALL + 1,
    )


def png(figure: Figure) -> bytes:
    """The figure as a PNG that carries neither time nor version, so that equal plans give equal bytes."""
    stream = io.BytesIO()
    figure.savefig(stream, format="png", metadata={"Software": None})
    return stream.getvalue()


def _run(axes: Axes, study: Study, plan: Plan, run: PlannedRun, reading: Reading) -> None:
    order = [candidate.name for candidate in study.candidates]
    for curve in plan.curves:
        if (curve.run, curve.reading) != (run.number, reading.name):
            continue
        colour, line = STYLES[order.index(curve.candidate) % len(STYLES)]
        times = [units.convert(time, study.time_unit) for time in curve.times]
        low, middle, high = (
            [units.convert(value, reading.unit) for value in row]
            for row in (curve.low, curve.middle, curve.high)
        )
        axes.fill_between(times, low, high, color=colour, alpha=0.08, linewidth=0)
        axes.plot(times, middle, color=colour, linestyle=line, linewidth=1.6, label=curve.candidate)
    _trusted(axes, reading)
    _ticks(axes, study, plan, run, reading)
    axes.set_xlim(left=0)
    axes.set_xlabel(f"time / {study.time_unit}", fontsize=SMALL)
    axes.set_ylabel(f"{reading.name} / {reading.unit}" if reading.unit else reading.name, fontsize=SMALL)
    axes.tick_params(labelsize=SMALL)
    levers = ", ".join(
        f"{name} {wording.amount(value, study.condition(name).unit)}"
        for name, value in run.conditions
        if not study.condition(name).is_fixed
    )
    axes.set_title(
        f"run {run.number}: {levers}" if levers else f"run {run.number}", fontsize=SMALL + 1, pad=14
    )


def _trusted(axes: Axes, reading: Reading) -> None:
    """The lowest and highest reading that is trusted, where they lie within the panel."""
    bottom, top = axes.get_ylim()
    for limit in (reading.lowest, reading.highest):
        value = None if limit is None else units.convert(limit, reading.unit)
        if value is not None and bottom < value < top:
            axes.axhline(value, color="0.5", linewidth=0.8, zorder=0)
    axes.set_ylim(bottom, top)


def _ticks(axes: Axes, study: Study, plan: Plan, run: PlannedRun, reading: Reading) -> None:
    """A line for each sample, numbered; a shaded stretch for a run that is recorded."""
    scheduled = plan.rating.schedule.runs[run.number - 1]
    if reading.every and run.length is not None:
        axes.axvspan(0, units.convert(run.length, study.time_unit), color="0.93", zorder=0, linewidth=0)
        return
    before = None
    for number, time in enumerate(scheduled.times, 1):
        at = units.convert(time, study.time_unit)
        axes.axvline(at, color="0.35", linewidth=0.7, linestyle=(0, (2, 2)), zorder=0.5)
        close = before is not None and at - before < 0.035 * units.convert(scheduled.end, study.time_unit)
        if not close:
            axes.annotate(
                f"{number}",
                (at, 1.01),
                xycoords=("data", "axes fraction"),
                ha="center",
                va="bottom",
                fontsize=SMALL - 1,
            )
            before = at


def _chances(axes: Axes, ratings: tuple[Rating, ...]) -> None:
    """How often the right law comes out on top (filled) and its mean probability (open), one row each."""
    rows = range(len(ratings))
    for shift, marker, face, label, figures in (
        (-0.13, "o", "black", "right law on top", [rating.top for rating in ratings]),
        (0.13, "s", "white", "mean probability of the right law", [r.mean_probability for r in ratings]),
    ):
        axes.errorbar(
            [figure.value for figure in figures],
            [row + shift for row in rows],
            xerr=[figure.error for figure in figures],
            fmt=marker,
            color="black",
            markerfacecolor=face,
            markersize=5,
            capsize=2,
            linestyle="none",
            label=label,
        )
    labels = [rating.name + (" (breaks limits)" if rating.broken else "") for rating in ratings]
    axes.set_yticks(rows, labels, fontsize=SMALL)
    axes.invert_yaxis()
    axes.set_ylim(len(ratings) - 0.5, -0.5)
    axes.set_xlim(right=1.01)
    axes.grid(axis="x", color="0.9", linewidth=0.6)
    axes.tick_params(axis="x", labelsize=SMALL)
    axes.set_xlabel("share of virtual studies, mean probability (bars: 1 standard error)", fontsize=SMALL)
    axes.legend(loc="best", fontsize=SMALL, frameon=False)
