"""Times a person would write on a bench sheet, and concentrations a person would prepare.

Common practice: two significant figures for amounts in the file's own unit; times to the half minute
up to ten minutes, the minute up to an hour, five minutes up to three hours, then quarters of an hour
(in s, h or d by the same proportions).
"""

from __future__ import annotations

from math import ceil, floor, log10

import numpy as np

from designer import units
from designer.allowed import CLOSE, Allowed, fit_times
from designer.records import Study
from designer.search import Proposal

ZERO_CELSIUS = units.ZERO_CELSIUS
# (up to, step), s: what is written on a bench sheet
STEPS = (
    (10.0, 0.5),
    (60.0, 5.0),
    (600.0, 30.0),
    (3600.0, 60.0),
    (3 * 3600.0, 300.0),
    (12 * 3600.0, 900.0),
    (3 * 86400.0, 3600.0),
    (30 * 86400.0, 6 * 3600.0),
    (float("inf"), 86400.0),
)


def time_step(time: float) -> float:
    """Step to which a time (s) is written."""
    return next(step for up_to, step in STEPS if time <= up_to * (1 + CLOSE))


def round_time(time: float) -> float:
    step = time_step(time)
    return round(time / step) * step


def round_amount(value: float, scale: float, low: float, high: float, digits: int = 2) -> float:
    """``value`` to ``digits`` significant figures in a unit of size ``scale``, inside low..high."""
    if value == 0:
        return 0.0
    shown = value / scale
    step = 10.0 ** (floor(log10(abs(shown))) - digits + 1)
    rounded = round(shown / step) * step
    if rounded * scale > high * (1 + CLOSE):
        rounded = floor(high / scale / step * (1 + CLOSE)) * step
    if rounded * scale < low * (1 - CLOSE):
        rounded = ceil(low / scale / step * (1 - CLOSE)) * step
    inside = low * (1 - CLOSE) <= rounded * scale <= high * (1 + CLOSE)
    return float(f"{rounded:.10g}") * scale if inside else value


def round_temperature(value: float, low: float, high: float) -> float:
    """A temperature (K) to the whole degree Celsius, inside low..high."""
    whole = round(value - ZERO_CELSIUS) + ZERO_CELSIUS
    return whole if low * (1 - CLOSE) <= whole <= high * (1 + CLOSE) else value


def scales(study: Study) -> dict[str, float]:
    """Size of each condition's unit in internal units (temperatures are written in whole degrees)."""
    named = ((condition.name, condition.unit) for condition in study.conditions)
    return {name: units.scale(unit)[0] for name, unit in named if name != "temperature"}


def rounded(offer: Allowed, proposal: Proposal) -> Proposal:
    """The proposal as a person would write it, still within every limit."""
    sizes = scales(offer.study)
    conditions = proposal.conditions.copy()
    for lever in offer.levers:
        if lever.levels:
            continue
        column = conditions[:, lever.index]
        if lever.name == "temperature":
            conditions[:, lever.index] = [round_temperature(v, lever.low, lever.high) for v in column]
        else:
            scale = sizes[lever.name]
            conditions[:, lever.index] = [round_amount(v, scale, lever.low, lever.high) for v in column]
    conditions = _not_overfull(offer, conditions, sizes)
    times = np.array([_round_run(offer, row) for row in proposal.times])
    return Proposal(conditions, _within_booking(offer, times.reshape(proposal.times.shape)), proposal.lengths)


def _not_overfull(offer: Allowed, conditions: np.ndarray, sizes: dict[str, float]) -> np.ndarray:
    """Step amounts drawn from stocks down until they fit the vessel together."""
    stocks = dict(offer.study.stocks)
    drawn = [lever for lever in offer.levers if lever.name in stocks and not lever.levels]
    every = [(i, stocks[c.name]) for i, c in enumerate(offer.study.conditions) if c.name in stocks]
    for row in conditions:
        for _ in range(100):
            if sum(row[index] / stock for index, stock in every) <= 1 + CLOSE:
                break
            for lever in drawn:
                less = max(row[lever.index] * 0.98, lever.low)
                row[lever.index] = round_amount(less, sizes[lever.name], lever.low, less)
    return conditions


def _round_run(offer: Allowed, times: np.ndarray) -> np.ndarray:
    """Round each time; where two then come too near or too early, move on to the next step that does."""
    row = times.copy()
    begin = int(offer.at_start)
    for i in range(begin, len(row)):
        earliest = offer.first if i == begin else max(offer.first, row[i - 1] + offer.spacing)
        at = round_time(row[i])
        if at < earliest * (1 - CLOSE):
            step = time_step(earliest)
            at = ceil(earliest / step - 1e-9) * step
        row[i] = at
    for back, i in enumerate(range(len(row) - 1, begin - 1, -1)):
        latest = offer.longest if back == 0 else row[i + 1] - offer.spacing
        if row[i] > latest * (1 + CLOSE):
            step = time_step(latest)
            at = floor(latest / step + 1e-9) * step
            earliest = offer.first + (i - begin) * offer.spacing
            row[i] = at if at >= earliest * (1 - CLOSE) else latest
    return row


def _within_booking(offer: Allowed, times: np.ndarray) -> np.ndarray:
    booked = offer.study.limits.booked
    if booked is None or not times.size:
        return times
    room = booked - len(times) * offer.study.limits.setup_per_run
    for _ in range(1000):
        over = times[:, -1].sum() - room
        if over <= CLOSE * booked:
            return times
        gaps = times[:, -1] - np.maximum(
            times[:, -2] + offer.spacing if times.shape[1] > 1 else 0.0, offer.first
        )
        run = int(gaps.argmax())
        if gaps[run] <= 0:
            break
        times[run, -1] -= min(time_step(times[run, -1]), gaps[run])
    return fit_times(offer, times)  # no room to the last sample: all of them move, whatever is written
