"""What the limits of a study allow: ranges of the levers, times, and the nearest plan within them."""

from __future__ import annotations

from dataclasses import dataclass
from math import floor, log

import numpy as np

from designer.errors import InfeasibleError
from designer.records import Condition, Schedule, Study

CLOSE = 1e-9  # relative slack when a limit is judged, so that a plan may lie on it


@dataclass(frozen=True)
class Lever:
    """A condition that may be chosen: a range, or discrete levels (low and high are then their ends)."""

    index: int
    name: str
    low: float
    high: float
    levels: tuple[float, ...]

    @property
    def logarithmic(self) -> bool:
        return self.low > 0 and self.high / self.low > 3

    def value(self, place: np.ndarray) -> np.ndarray:
        """Value at ``place`` in 0..1 along the lever."""
        if self.logarithmic:
            return self.low * (self.high / self.low) ** place
        return self.low + (self.high - self.low) * place

    def place(self, value: np.ndarray) -> np.ndarray:
        """Inverse of ``value``."""
        if self.logarithmic:
            return np.log(value / self.low) / log(self.high / self.low)
        return (value - self.low) / (self.high - self.low)

    def slope(self, value: np.ndarray) -> np.ndarray:
        """d value / d place."""
        way = log(self.high / self.low) if self.logarithmic else self.high - self.low
        return value * way if self.logarithmic else np.full_like(value, way)

    def nearest(self, value: np.ndarray) -> np.ndarray:
        """Nearest allowed value."""
        if self.levels:
            levels = np.array(self.levels)
            return levels[np.abs(np.asarray(value)[..., None] - levels).argmin(-1)]
        return np.clip(value, self.low, self.high)


@dataclass(frozen=True)
class Allowed:
    """Everything a plan of this study may choose from. Times in s."""

    study: Study
    levers: tuple[Lever, ...]
    runs: int
    samples: int
    first: float
    spacing: float
    longest: float
    at_start: bool


def allowed(study: Study) -> Allowed:
    """Levers and times within limits, caps, and what can be pipetted.

    Raises InfeasibleError where nothing is left.
    """
    levers = []
    for index, condition in enumerate(study.conditions):
        low, high, levels = _bounds(study, condition)
        if low < high:
            levers.append(Lever(index, condition.name, low, high, levels))
    limits, plan = study.limits, study.plan
    found = Allowed(
        study,
        tuple(levers),
        plan.runs,
        plan.samples,
        limits.first_sample,
        limits.spacing,
        limits.longest_run,
        plan.assay_at_start,
    )
    _check(found)
    return found


def _bounds(study: Study, condition: Condition) -> tuple[float, float, tuple[float, ...]]:
    """Least and most of a condition, and the levels left between them (none where it is a range)."""
    low, high = condition.low, min(condition.high, dict(study.caps).get(condition.name, np.inf))
    stock = dict(study.stocks).get(condition.name)
    smallest, volume = study.vessel.smallest_pipetted, study.vessel.volume
    if stock is not None:
        high = min(high, stock)
        if smallest is not None and volume is not None:
            low = max(low, stock * smallest / volume)
    levels = tuple(level for level in condition.levels if low * (1 - CLOSE) <= level <= high * (1 + CLOSE))
    if low > high * (1 + CLOSE) or (condition.levels and not levels):
        raise InfeasibleError(
            f"no {condition.name} can be chosen: the least is {low:g} and the most {high:g} (internal units) "
            "once caps, stocks and the smallest volume that can be pipetted are counted; "
            "raise the cap or use a weaker stock"
        )
    return (levels[0], levels[-1], levels) if levels else (low, max(low, high), ())


def _check(offer: Allowed) -> None:
    _check_vessel(offer)
    taken = offer.samples - offer.at_start
    needed = offer.first + (taken - 1) * offer.spacing if taken > 0 else 0.0
    if needed > offer.longest * (1 + CLOSE):
        raise InfeasibleError(
            f"{offer.samples} samples {offer.spacing:g} s apart from {offer.first:g} s take {needed:g} s, "
            f"longer than the longest run of {offer.longest:g} s; {_fewer(offer)}"
        )
    booked, setup = offer.study.limits.booked, offer.study.limits.setup_per_run
    if booked is not None and offer.runs * (setup + needed) > booked * (1 + CLOSE):
        fit = floor(booked / (setup + needed) + CLOSE)
        raise InfeasibleError(
            f"{offer.runs} runs need at least {offer.runs * (setup + needed) / 3600:.3g} h and "
            f"{booked / 3600:.3g} h are booked; book that much longer"
            + (f" or plan at most {fit} run{'s' if fit > 1 else ''}" if fit else "")
        )


def _fewer(offer: Allowed) -> str:
    """The least change that makes room for the samples of a run."""
    if offer.first > offer.longest:
        return f"allow a run of {offer.first:g} s or sample earlier"
    fit = floor((offer.longest - offer.first) / offer.spacing + CLOSE) + 1 + offer.at_start
    return f"take at most {fit} samples or allow the longer run"


def _check_vessel(offer: Allowed) -> None:
    least = sum(_bounds(offer.study, condition)[0] / stock for condition, stock in _from_stocks(offer.study))
    if least > 1 + CLOSE:
        raise InfeasibleError(
            f"the least amounts from the stocks together fill {least:.3g} times the vessel; "
            "use a stronger stock or allow lower amounts"
        )


def _from_stocks(study: Study) -> list[tuple[Condition, float]]:
    """Conditions that are drawn from a stock, with its strength."""
    stocks = dict(study.stocks)
    return [(condition, stocks[condition.name]) for condition in study.conditions if condition.name in stocks]


def fit_times(offer: Allowed, times: np.ndarray) -> np.ndarray:
    """Nearest sampling times (run, sample) that keep first sample, spacing, longest run and booking."""
    if not times.size:
        return times
    fitted = np.stack([_fit_run(offer, row) for row in np.sort(times, axis=1)])
    booked = offer.study.limits.booked
    if booked is None:
        return fitted
    room = booked - len(fitted) * offer.study.limits.setup_per_run
    if fitted[:, -1].sum() <= room:
        return fitted
    low, high = 0.0, 1.0  # factor on all times; bisection keeps the plan's shape
    for _ in range(60):
        middle = (low + high) / 2
        shorter = np.stack([_fit_run(offer, row * middle) for row in fitted])
        low, high = (middle, high) if shorter[:, -1].sum() <= room else (low, middle)
    return np.stack([_fit_run(offer, row * low) for row in fitted])


def _fit_run(offer: Allowed, times: np.ndarray) -> np.ndarray:
    row = np.array(times, float)
    begin = int(offer.at_start)
    row[:begin] = 0.0
    for i in range(begin, len(row)):
        earliest = offer.first if i == begin else max(offer.first, row[i - 1] + offer.spacing)
        row[i] = max(row[i], earliest)
    for back, i in enumerate(range(len(row) - 1, begin - 1, -1)):
        row[i] = min(row[i], offer.longest - back * offer.spacing)
    return row


def fit_conditions(offer: Allowed, conditions: np.ndarray) -> np.ndarray:
    """Nearest conditions (run, condition) on the levers; the others are set to their value. Where the
    stocks together would overfill the vessel, the amounts that come from stocks shrink together, each
    towards the least that is allowed of it."""
    fitted = np.array(conditions, float)
    for index, condition in enumerate(offer.study.conditions):
        low, high, _ = _bounds(offer.study, condition)
        fitted[:, index] = np.clip(fitted[:, index], low, high)
    for lever in offer.levers:
        fitted[:, lever.index] = lever.nearest(fitted[:, lever.index])
    if offer.study.stocks:
        for row in fitted:
            _fit_vessel(offer, row)
    return fitted


def _fit_vessel(offer: Allowed, row: np.ndarray) -> None:
    """Shrink what a run draws from its stocks until the vessel holds it; levels step down first."""
    stocks = dict(offer.study.stocks)
    drawn = [lever for lever in offer.levers if lever.name in stocks and not lever.levels]
    stepped = [lever for lever in offer.levers if lever.name in stocks and lever.levels]
    ranged = [lever.index for lever in drawn]
    strength = np.array([stocks[lever.name] for lever in drawn])
    least = np.array([lever.low for lever in drawn]) / strength
    places = {condition.name: i for i, condition in enumerate(offer.study.conditions)}
    while True:
        parts = {name: row[places[name]] / stock for name, stock in stocks.items() if name in places}
        room = 1 - sum(part for name, part in parts.items() if places[name] not in ranged) - least.sum()
        lower = [lever for lever in stepped if row[lever.index] > lever.levels[0]]
        if room >= -CLOSE or not lower:
            break
        greatest = max(lower, key=lambda lever: parts[lever.name])
        row[greatest.index] = max(x for x in greatest.levels if x < row[greatest.index])
    above = row[ranged] / strength - least
    if above.sum() > max(room, 0.0):
        row[ranged] = (least + above * max(room, 0.0) / above.sum()) * strength


def total_time(study: Study, schedule: Schedule) -> float:
    """Set-up and length of all runs, s."""
    return sum(study.limits.setup_per_run + run.end for run in schedule.runs)


def broken_limits(study: Study, schedule: Schedule) -> tuple[str, ...]:
    """The limits a schedule breaks, in words (none for a plan of our own)."""
    limits, found = study.limits, []
    for number, run in enumerate(schedule.runs, 1):
        found += [f"run {number}: {text}" for text in _broken_by_run(study, run.times, run.end)]
        for name, value in run.conditions:
            if text := _broken_by_value(study, study.condition(name), value):
                found.append(f"run {number}: {name} {text}")
        if sum(dict(run.conditions)[c.name] / stock for c, stock in _from_stocks(study)) > 1 + CLOSE:
            found.append(f"run {number}: needs more from the stocks than the vessel holds")
    count = sum(len(run.times) for run in schedule.runs)
    if limits.runs is not None and len(schedule.runs) > limits.runs:
        found.append(f"{len(schedule.runs)} runs, more than the limit of {limits.runs}")
    if limits.samples_total is not None and count > limits.samples_total:
        found.append(f"{count} samples in all, more than the limit of {limits.samples_total}")
    if limits.booked is not None and total_time(study, schedule) > limits.booked * (1 + CLOSE):
        found.append("takes longer than the time booked")
    return tuple(found)


def _broken_by_value(study: Study, condition: Condition, value: float) -> str:
    low, high = condition.low, min(condition.high, dict(study.caps).get(condition.name, np.inf))
    if value > high * (1 + CLOSE) or value < low * (1 - CLOSE):
        return "is outside what is on offer"
    if condition.levels and not np.isclose(value, condition.levels, rtol=CLOSE, atol=0).any():
        return "is none of the levels on offer"
    smallest, volume = study.vessel.smallest_pipetted, study.vessel.volume
    stock = dict(study.stocks).get(condition.name)
    if stock is None or smallest is None or volume is None or value == 0:
        return ""
    return "needs less than can be pipetted" if value < stock * smallest / volume * (1 - CLOSE) else ""


def _broken_by_run(study: Study, times: tuple[float, ...], end: float) -> list[str]:
    limits, found = study.limits, []
    row = [t for t in times if not (study.plan.assay_at_start and t == 0.0)]
    if row and row[0] < limits.first_sample * (1 - CLOSE):
        found.append("the first sample comes before the earliest possible")
    gaps = np.diff(row)
    if len(gaps) and gaps.min() < limits.spacing * (1 - 1e-6):
        found.append("two samples are nearer than the spacing allows")
    if end > limits.longest_run * (1 + CLOSE):
        found.append("longer than the longest run")
    if limits.samples_per_run is not None and len(times) > limits.samples_per_run:
        found.append(f"{len(times)} samples, more than {limits.samples_per_run} a run")
    return found
