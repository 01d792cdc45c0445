"""Schedules as arrays: where each reading of each run stands on the time and signal axes.

The time axis of a run holds its samples and, for signals that are recorded continuously, a fixed
grid of readings one memory apart (twice the correlation time: nearer ones add nothing). Real runs
that all virtual studies carry along (pilots) come first on the run axis.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from designer.likelihood import Design, Readings
from designer.records import Run, Schedule, Study
from designer.signals import pilot_readings


@dataclass(frozen=True)
class Layout:
    """samples: most samples of a run; grid: times (s) of continuous readings; sampled, recorded: 1 for
    signals read from samples and for signals on the grid; carried: rows of pilots."""

    samples: int
    grid: np.ndarray
    sampled: np.ndarray
    recorded: np.ndarray
    carried: Design
    carried_readings: Readings

    @property
    def width(self) -> int:
        """Length of the time axis."""
        return self.samples + len(self.grid)


def grid_of(study: Study) -> np.ndarray:
    """Times of the continuous readings of the longest run, s; empty where there are none."""
    steps = [max(r.every, 2 * (r.memory or 0.0)) for r in study.readings if r.every]
    if not steps:
        return np.zeros(0)
    first, step = study.limits.first_sample, max(steps)
    count = int(np.floor((study.limits.longest_run - first) / step + 1e-9)) + 1
    return first + step * np.arange(count)


def layout(study: Study, samples: int | None = None) -> Layout:
    """Axes for plans of ``study`` with up to ``samples`` samples per run (the study's own by default)."""
    grid = grid_of(study)
    recorded = np.array([float(bool(reading.every)) for reading in study.readings])
    pilots = pilot_readings(study)
    none = np.zeros(len(pilots))
    recorded = np.concatenate([recorded, none])
    sampled = np.concatenate([1 - recorded[: len(study.readings)], none])
    count = study.plan.samples if samples is None else samples
    count = count if sampled.any() else 0
    needed = max((len(pilot.readings) for pilot in study.pilots), default=0)
    count = max(count, needed - len(grid))
    blank = Design(
        np.zeros((0, len(study.conditions))), np.zeros((0, count + len(grid))), np.zeros((0, 0, 0))
    )
    empty = Layout(count, grid, sampled, recorded, blank, Readings(np.zeros(0), np.zeros(0)))
    carried, readings = _pilots(study, empty)
    return Layout(count, grid, sampled, recorded, carried, readings)


def _pilots(study: Study, axes: Layout) -> tuple[Design, Readings]:
    shape = (len(study.pilots), axes.width, len(axes.sampled))
    conditions = np.zeros((shape[0], len(study.conditions)))
    times, mask, values = np.zeros(shape[:2]), np.zeros(shape), np.zeros(shape)
    columns = {reading.name: i + len(study.readings) for i, reading in enumerate(pilot_readings(study))}
    kinds = pilot_readings(study)
    for row, pilot in enumerate(study.pilots):
        at = dict(pilot.at)
        conditions[row] = [at.get(c.name, c.middle) for c in study.conditions]
        column = next(
            columns[kind.name]
            for kind in kinds
            if kind.absolute == pilot.error and kind.name == f"conversion of {pilot.species}"
        )
        for index, (time, conversion) in enumerate(pilot.readings):
            times[row, index], mask[row, index, column], values[row, index, column] = time, 1.0, conversion
        times[row, len(pilot.readings) :] = pilot.readings[-1][0]
    return Design(conditions, times, mask), Readings(values, np.zeros(shape))


def arrays_of(axes: Layout, schedule: Schedule) -> Design:
    """Design of a schedule, carried runs first. Runs with fewer samples are padded and masked."""
    conditions, times, masks = [], [], []
    for run in schedule.runs:
        row, seen = _run(axes, run)
        conditions.append([value for _, value in run.conditions])
        times.append(row)
        masks.append(seen)
    carried = axes.carried
    return Design(
        np.concatenate([carried.conditions, np.array(conditions)]),
        np.concatenate([carried.times, np.array(times)]),
        np.concatenate([carried.mask, np.array(masks)]),
    )


def _run(axes: Layout, run: Run) -> tuple[np.ndarray, np.ndarray]:
    samples = np.array(run.times, float)
    pad = axes.samples - len(samples)
    last = samples[-1] if len(samples) else run.end
    row = np.concatenate([samples, np.full(pad, last), axes.grid])
    taken = np.concatenate([np.ones(len(samples)), np.zeros(pad + len(axes.grid))])
    length = run.end if run.length is None else run.length
    recorded = np.concatenate([np.zeros(axes.samples), (axes.grid <= length * (1 + 1e-12)).astype(float)])
    seen = taken[:, None] * axes.sampled + recorded[:, None] * axes.recorded
    return row, seen


def schedule_of(study: Study, axes: Layout, design: Design, name: str = "") -> Schedule:
    """Schedule of a design's own runs (the carried rows are left out)."""
    carried = len(axes.carried.times)
    names = [condition.name for condition in study.conditions]
    runs = []
    for row in range(carried, len(design.times)):
        conditions = tuple(zip(names, (float(x) for x in design.conditions[row]), strict=True))
        taken = design.mask[row, : axes.samples].any(-1)
        times = tuple(float(t) for t in design.times[row, : axes.samples][taken])
        on_grid = design.mask[row, axes.samples :].any(-1)
        length = float(axes.grid[on_grid][-1]) if on_grid.any() else None
        runs.append(Run(conditions, times, length))
    return Schedule(tuple(runs), name)
