"""Choosing a plan: a coarse look at many, then ascent of the best few, noise held fixed.

Worth is ``steepest.worth`` over a fixed set of virtual studies (common random numbers), so a plan
is compared with its neighbour on the same truths and the same noise. Where every law has cheap second
derivatives the ascent follows the gradient; elsewhere each lever and time is moved in turn. Nothing
stops by the clock: the same seed gives the same plan.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from designer import steepest, usual, virtual
from designer.allowed import Allowed, fit_conditions, fit_times
from designer.evidence import Point
from designer.likelihood import Design
from designer.virtual import Bench, Truth

RATE_LEVER, RATE_TIME = 0.06, 0.12  # first steps of the ascent: of a lever's way, and in ln t
BEGINNINGS = (0.0, 0.1, 0.3)  # of the run: where the first sample of a coarse proposal lies
MEMORY_FIRST, MEMORY_SECOND = 0.8, 0.95  # of the running means of gradient and square


@dataclass(frozen=True)
class Effort:
    """How hard to search. studies: virtual studies in all; the rest are counts of designs and steps."""

    studies: int = 256
    looks: int = 28
    starts: int = 2
    short_steps: int = 10
    long_steps: int = 24
    sweeps: int = 3

    def for_dear_laws(self) -> Effort:
        """Less of everything, where a look at a plan takes seconds rather than hundredths."""
        return Effort(min(self.studies, 96), min(self.looks, 16), 1, 0, 0, min(self.sweeps, 2))

    @staticmethod
    def small() -> Effort:
        """The setting of the continuous tests."""
        return Effort(studies=64, looks=10, starts=1, short_steps=4, long_steps=6, sweeps=1)


@dataclass(frozen=True)
class Proposal:
    """A plan as arrays: conditions (run, condition), sampling times (run, sample) in s, lengths (run,)
    in s of runs that are recorded continuously."""

    conditions: np.ndarray
    times: np.ndarray
    lengths: np.ndarray


@dataclass
class Found:
    """A proposal with its worth and the optima of its fits, from which its neighbours start."""

    proposal: Proposal
    worth: float
    points: list[Point | None]


def design_of(bench: Bench, proposal: Proposal) -> Design:
    """Arrays of a proposal, carried runs first."""
    axes = bench.axes
    runs = len(proposal.conditions)
    samples = proposal.times if axes.samples else np.zeros((runs, 0))
    taken = np.ones((runs, samples.shape[1]))
    short = axes.samples - samples.shape[1]
    if short > 0:
        samples = np.concatenate([samples, np.tile(proposal.lengths[:, None], (1, short))], axis=1)
        taken = np.concatenate([taken, np.zeros((runs, short))], axis=1)
    grid = np.tile(axes.grid, (runs, 1))
    recorded = (grid <= proposal.lengths[:, None] * (1 + 1e-12)).astype(float)
    times = np.concatenate([samples, grid], axis=1)
    zero_samples, zero_grid = np.zeros_like(taken), np.zeros_like(recorded)
    is_sample = np.concatenate([taken, zero_grid], axis=1)
    is_grid = np.concatenate([zero_samples, recorded], axis=1)
    mask = is_sample[..., None] * axes.sampled + is_grid[..., None] * axes.recorded
    carried = axes.carried
    return Design(
        np.concatenate([carried.conditions, proposal.conditions]),
        np.concatenate([carried.times, times]),
        np.concatenate([carried.mask, mask]),
    )


def is_dear(bench: Bench) -> bool:
    """Whether looks are dear: a listed law without cheap second derivatives, or continuous records."""
    return len(bench.axes.grid) > 0 or not all(bench.laws[i].second_order for i in bench.listed)


class Hill:
    """The worth of proposals over one fixed set of virtual studies."""

    def __init__(self, bench: Bench, offer: Allowed, studies: int, seed: int, purpose: str) -> None:
        self.bench, self.offer = bench, offer
        self.count = max(studies // len(bench.listed), 8)
        self.seed, self.purpose = seed, purpose
        self.truths: list[Truth] | None = None
        self.gradient_works = not is_dear(bench)

    def look(self, proposal: Proposal, points: list[Point | None] | None = None) -> Found:
        return self._look(proposal, points)[0]

    def _look(
        self, proposal: Proposal, points: list[Point | None] | None
    ) -> tuple[Found, Design, virtual.Scores, tuple[np.ndarray, np.ndarray]]:
        design = design_of(self.bench, proposal)
        if self.truths is None:
            self.truths = virtual.draw(self.bench, design, self.count, self.seed, self.purpose)
        scores = virtual.conclude(self.bench, design, self.truths, points)
        value, _, d_evidence, d_spread = steepest.worth(self.bench, scores)
        optima: list[Point | None] = [None] * len(self.bench.laws)
        for index, fit in zip(self.bench.listed, scores.fits, strict=True):
            optima[index] = Point(fit.u, fit.z)
        return Found(proposal, value, optima), design, scores, (d_evidence, d_spread)

    def slope(
        self, proposal: Proposal, points: list[Point | None] | None
    ) -> tuple[Found, np.ndarray, np.ndarray]:
        """Worth and its gradient in the levers' ways (run, lever) and in ln t (run, sample)."""
        found, design, scores, weights = self._look(proposal, points)
        assert self.truths is not None
        conditions, times = steepest.gradient(self.bench, design, self.truths, scores, weights)
        own = slice(len(self.bench.axes.carried.times), None)
        d_levers = [
            conditions[own, lever.index] * lever.slope(proposal.conditions[:, lever.index])
            for lever in self.offer.levers
        ]
        d_times = times[own, : proposal.times.shape[1]] * proposal.times
        levers = np.stack(d_levers, axis=1) if d_levers else np.zeros((len(proposal.times), 0))
        return found, levers, d_times


def climb(hill: Hill, start: Found, steps: int, advance: Callable[[], None] | None = None) -> Found:
    """Gradient ascent (with running means of gradient and square, step falling to a tenth), each proposal
    put back within the limits; the best one seen is returned."""
    offer, best, at = hill.offer, start, start
    shape = (len(start.proposal.times), len(offer.levers))
    means = [np.zeros(shape), np.zeros_like(start.proposal.times)]
    squares = [np.zeros(shape), np.zeros_like(start.proposal.times)]
    points = start.points
    proposal = at.proposal
    for step in range(steps):
        found, *slopes = hill.slope(proposal, points)
        points = found.points
        if found.worth > best.worth:
            best = found
        fade = 10 ** (-step / max(steps - 1, 1))
        moves = []
        for kind, (slope, rate) in enumerate(zip(slopes, (RATE_LEVER, RATE_TIME), strict=True)):
            slope = np.where(np.isfinite(slope), slope, 0.0)
            means[kind] = MEMORY_FIRST * means[kind] + (1 - MEMORY_FIRST) * slope
            squares[kind] = MEMORY_SECOND * squares[kind] + (1 - MEMORY_SECOND) * slope**2
            mean = means[kind] / (1 - MEMORY_FIRST ** (step + 1))
            square = squares[kind] / (1 - MEMORY_SECOND ** (step + 1))
            moves.append(rate * fade * mean / (np.sqrt(square) + 1e-12))
        proposal = _moved(offer, proposal, *moves)
        if advance:
            advance()
    last = hill.look(proposal, points)
    return last if last.worth > best.worth else best


def _moved(offer: Allowed, proposal: Proposal, levers: np.ndarray, times: np.ndarray) -> Proposal:
    conditions = proposal.conditions.copy()
    for column, lever in enumerate(offer.levers):
        if not lever.levels:
            place = np.clip(lever.place(conditions[:, lever.index]) + levers[:, column], 0, 1)
            conditions[:, lever.index] = lever.value(place)
    moved = proposal.times * np.exp(np.clip(times, -0.5, 0.5))
    return Proposal(fit_conditions(offer, conditions), fit_times(offer, moved), proposal.lengths)


def sweep(hill: Hill, start: Found, size: float, advance: Callable[[], None] | None = None) -> Found:
    """Move each lever of each run, each time, and all times of a run together in turn, both ways by
    ``size`` (of a lever's way; in ln t); keep what improves. Lengths of recorded runs stay as they are."""
    best = start
    for run in range(len(start.proposal.conditions)):
        for trial in _neighbours(hill, best.proposal, run, size):
            found = hill.look(trial(best.proposal), best.points)
            if found.worth > best.worth:
                best = found
        if advance:
            advance()
    return best


def _neighbours(
    hill: Hill, proposal: Proposal, run: int, size: float
) -> list[Callable[[Proposal], Proposal]]:
    offer = hill.offer
    moves: list[Callable[[Proposal], Proposal]] = []
    for lever in offer.levers:
        if lever.levels:
            moves += [_set_level(offer, run, lever.index, level) for level in lever.levels]
        else:
            moves += [_shift(offer, run, lever, way * size) for way in (1, -1)]
    count = proposal.times.shape[1] if hill.bench.axes.samples else 0  # none in a run that is recorded
    for column in range(count):
        moves += [_stretch(offer, run, [column], way * size) for way in (1, -1)]
    if count > 1:
        moves += [_stretch(offer, run, list(range(count)), way * size) for way in (1, -1)]
    return moves


def _set_level(offer: Allowed, run: int, index: int, level: float) -> Callable[[Proposal], Proposal]:
    def move(proposal: Proposal) -> Proposal:
        conditions = proposal.conditions.copy()
        conditions[run, index] = level
        return Proposal(fit_conditions(offer, conditions), proposal.times, proposal.lengths)

    return move


def _shift(offer: Allowed, run: int, lever, by: float) -> Callable[[Proposal], Proposal]:  # type: ignore[no-untyped-def]
    def move(proposal: Proposal) -> Proposal:
        conditions = proposal.conditions.copy()
        place = np.clip(lever.place(conditions[run, lever.index]) + by, 0, 1)
        conditions[run, lever.index] = lever.value(place)
        return Proposal(fit_conditions(offer, conditions), proposal.times, proposal.lengths)

    return move


def _stretch(offer: Allowed, run: int, columns: list[int], by: float) -> Callable[[Proposal], Proposal]:
    def move(proposal: Proposal) -> Proposal:
        times = proposal.times.copy()
        times[run, columns] *= np.exp(2 * by)
        return Proposal(proposal.conditions, fit_times(offer, times), proposal.lengths)

    return move


def run_lengths(bench: Bench, offer: Allowed) -> np.ndarray:
    """Lengths of continuously recorded runs: the longest that the booking allows, s."""
    longest = offer.longest
    booked = offer.study.limits.booked
    if booked is not None:
        longest = min(longest, booked / offer.runs - offer.study.limits.setup_per_run)
    return np.full(offer.runs, longest if len(bench.axes.grid) else 0.0)


def coarse_proposals(bench: Bench, offer: Allowed, count: int, seed: int) -> list[Proposal]:
    """The usual schedules, then ``count`` designs with levers at low, middle or high and times spread
    equally or logarithmically over half, one or two times what 90 % conversion takes, from the first
    possible sample or a late one: an early sample that tells little often lies in a hollow of its own,
    out of which no small step leads."""
    random = np.random.default_rng([seed, 7])
    lengths = run_lengths(bench, offer)
    found = [Proposal(c, t, lengths) for _, c, t in usual.usual_schedules(bench, offer)]
    known: dict[bytes, float] = {}
    for _ in range(count):
        conditions = usual.conditions_at(offer, np.full(offer.runs, 0.5))
        for lever in offer.levers:
            places = random.permutation(np.resize(random.permutation([0.0, 0.5, 1.0]), offer.runs))
            conditions[:, lever.index] = lever.value(places)
        conditions = fit_conditions(offer, conditions)
        rows = []
        for row in conditions:
            key = row.tobytes()
            if key not in known:
                known[key] = usual.conversion_time(bench, row, offer)
            end = min(known[key] * random.choice([0.5, 1.0, 2.0]), offer.longest)
            begin = end * random.choice(BEGINNINGS)
            rows.append(usual.spaced(offer, end, bool(random.random() < 0.6), begin))
        found.append(Proposal(conditions, fit_times(offer, np.stack(rows)), lengths))
    return found


def best_plan(
    bench: Bench,
    offer: Allowed,
    seed: int,
    effort: Effort,
    extra: list[Proposal] | None = None,
    advance: Callable[[str, int, int], None] | None = None,
) -> Found:
    """Coarse look, ascent of the best few, long ascent of the best (module docstring)."""
    tell = advance or (lambda stage, done, total: None)
    hill = Hill(bench, offer, effort.studies, seed, "search")
    proposals = coarse_proposals(bench, offer, effort.looks, seed) + list(extra or [])
    looked = []
    for number, proposal in enumerate(proposals, 1):
        looked.append(hill.look(proposal))
        tell("looking at many plans", number, len(proposals))
    looked.sort(key=lambda found: -found.worth)
    chosen = looked[: effort.starts]
    refine = _climbing if hill.gradient_works else _sweeping
    return refine(hill, chosen, effort, tell)


def _climbing(
    hill: Hill, chosen: list[Found], effort: Effort, tell: Callable[[str, int, int], None]
) -> Found:
    total, done = effort.short_steps * len(chosen) + effort.long_steps, 0

    def advance() -> None:
        nonlocal done
        done += 1
        tell("improving the best", done, total)

    risen = [climb(hill, start, effort.short_steps, advance) for start in chosen]
    top = max(risen, key=lambda found: found.worth)
    top = climb(hill, top, effort.long_steps, advance)
    if any(lever.levels for lever in hill.offer.levers):
        top = sweep(hill, top, 0.05)
    return top


def _sweeping(
    hill: Hill, chosen: list[Found], effort: Effort, tell: Callable[[str, int, int], None]
) -> Found:
    runs = len(chosen[0].proposal.conditions)
    total, done = (effort.sweeps + len(chosen) - 1) * runs, 0

    def advance() -> None:
        nonlocal done
        done += 1
        tell("improving the best", done, total)

    sizes = 0.25 / 2 ** np.arange(effort.sweeps)
    risen = [sweep(hill, start, sizes[0], advance) for start in chosen]
    top = max(risen, key=lambda found: found.worth)
    for size in sizes[1:]:
        top = sweep(hill, top, float(size), advance)
    return top
