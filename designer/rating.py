"""What a schedule is worth, from virtual studies: the figures a reader compares plans by."""

from __future__ import annotations

import numpy as np

from designer import steepest, virtual
from designer.allowed import broken_limits, total_time
from designer.layout import arrays_of
from designer.likelihood import Design
from designer.outcomes import Estimate, Precision, Rating, Spread
from designer.records import Schedule
from designer.virtual import Bench, Scores, Truth

FREE_STUDIES = 64  # of each truth, for the mean probability of the free-order alternative
TIE = 1e-9  # probabilities nearer than this are a tie


def padded(bench: Bench, schedule: Schedule, runs: int) -> Design:
    """Arrays of a schedule, filled up to ``runs`` runs of its own by runs in which nothing is read, so
    that schedules of different length share one compilation."""
    design = arrays_of(bench.axes, schedule)
    short = runs - len(schedule.runs)
    if short <= 0:
        return design
    return Design(
        np.concatenate([design.conditions, np.repeat(design.conditions[-1:], short, 0)]),
        np.concatenate([design.times, np.repeat(design.times[-1:], short, 0)]),
        np.concatenate([design.mask, np.zeros((short, *design.mask.shape[1:]))]),
    )


def rate(
    bench: Bench,
    schedule: Schedule,
    design: Design,
    truths: list[Truth],
    free_order: bool = False,
) -> Rating:
    """Simulate ``truths`` under ``design`` and report (fields of ``Rating``); evidence through all gates.

    free_order: also how that alternative fares, from the first FREE_STUDIES of every truth.
    """
    scores = virtual.conclude(bench, design, truths, careful=True)
    alternative = None
    if free_order:
        found = virtual.free_order_evidence(bench, design, truths, FREE_STUDIES)
        alternative = None if found is None else _free_order(bench, scores, found, FREE_STUDIES)
    return summarise(bench, schedule, scores, alternative)


def summarise(bench: Bench, schedule: Schedule, scores: Scores, free_order: Estimate | None) -> Rating:
    p = virtual.probabilities(bench, scores.log_evidence)
    rows = np.arange(len(p))
    own = p[rows, scores.truth]
    top = np.where(own >= p.max(1) - TIE, 1.0 / (p >= p.max(1, keepdims=True) - TIE).sum(1), 0.0)
    reach = (own >= bench.study.aim.probability).astype(float)
    odds = bench.odds
    entropy = float(-(odds * np.log(odds)).sum())
    log_own = np.log(np.maximum(own, 1e-300))
    told = _mean(bench, scores, log_own)
    share = 1 / entropy if entropy > 1e-12 else np.nan
    worth_value, each, _, _ = steepest.worth(bench, scores)
    names = [bench.laws[i].candidate.name for i in bench.listed]
    study = bench.study
    return Rating(
        schedule=schedule,
        studies=len(p),
        worth=Estimate(worth_value, _spread_of_sum(scores, each)),
        top=_mean(bench, scores, top, fraction=True),
        top_by_law=tuple(zip(names, _by_law(scores, top, len(odds)), strict=True)),
        reach=_mean(bench, scores, reach, fraction=True),
        reach_by_law=tuple(zip(names, _by_law(scores, reach, len(odds)), strict=True)),
        mean_probability=_mean(bench, scores, own),
        log_score=told,
        information=Estimate(told.value + entropy, told.error),
        information_share=Estimate((told.value + entropy) * share, told.error * share),
        precision=_precision(bench, scores),
        spreads=_spreads(bench, scores),
        free_order=free_order,
        total_time=total_time(study, schedule),
        broken=broken_limits(study, schedule),
        doubtful=int(scores.doubtful.sum()),
        repaired=int(scores.repaired.sum()),
        unsolved=tuple(
            (law.candidate.name, int(count))
            for law, count in zip(bench.laws, scores.unsolved, strict=True)
            if count
        ),
    )


def fraction_error(share: float, count: int) -> float:
    """Standard error of a fraction, from one success and one failure more than were seen, so that
    0 and 1 out of n are not claimed without error."""
    p = (share * count + 1) / (count + 2)
    return float(np.sqrt(p * (1 - p) / count)) if count else np.nan


def _mean(
    bench: Bench, scores: Scores, values: np.ndarray, fraction: bool = False, odds: np.ndarray | None = None
) -> Estimate:
    """Mean over studies, each true law weighted by its belief."""
    odds = bench.odds if odds is None else odds
    parts = _by_law(scores, values, len(odds), fraction)
    value = sum(w * part.value for w, part in zip(odds, parts, strict=True) if w > 0)
    error = np.sqrt(sum((w * part.error) ** 2 for w, part in zip(odds, parts, strict=True) if w > 0))
    return Estimate(float(value), float(error))


def _by_law(scores: Scores, values: np.ndarray, laws: int, fraction: bool = True) -> list[Estimate]:
    found = []
    for index in range(laws):
        mine = values[scores.truth == index]
        mine = mine[np.isfinite(mine)]
        if len(mine) == 0:
            found.append(Estimate(np.nan, np.nan))
            continue
        mean = float(mine.mean())
        whole = fraction and bool(np.isin(mine, (0.0, 1.0)).all())
        error = fraction_error(mean, len(mine)) if whole else float(mine.std() / np.sqrt(len(mine)))
        found.append(Estimate(mean, error))
    return found


def _spread_of_sum(scores: Scores, each: np.ndarray) -> float:
    """Standard error of a sum of weighted studies, stratified by true law."""
    total = 0.0
    for index in np.unique(scores.truth):
        mine = each[scores.truth == index]
        total += len(mine) * mine.var()
    return float(np.sqrt(total))


def _having(bench: Bench, scores: Scores, column: int) -> np.ndarray:
    """Beliefs among the laws that have the asked constant, summing to 1 (all 0 where none has it)."""
    has = np.array(
        [np.isfinite(scores.spread[scores.truth == i, column]).any() for i in range(len(bench.odds))]
    )
    odds = bench.odds * has
    return odds / odds.sum() if odds.sum() > 0 else odds


def _precision(bench: Bench, scores: Scores) -> tuple[Precision, ...]:
    found = []
    for column, (name, asked) in enumerate(bench.asked):
        odds = _having(bench, scores, column)
        if not odds.any():
            continue
        width = scores.half_width[:, column]
        met = np.where(np.isfinite(width), (width <= asked).astype(float), np.nan)
        mean = _mean(bench, scores, width, odds=odds)
        found.append(Precision(name, asked, mean, _mean(bench, scores, met, fraction=True, odds=odds)))
    return tuple(found)


def _spreads(bench: Bench, scores: Scores) -> tuple[Spread, ...]:
    found = []
    names = [name for name, _ in bench.asked]
    for row, index in enumerate(bench.listed):
        law = bench.laws[index]
        mine = scores.truth == row
        fit = scores.fits[row]
        constants = names or [c.name for c in law.candidate.constants if c.name in law.structural][:1]
        for name in constants:
            slope = virtual.slopes(law, name, fit.u[mine])
            if slope is None:
                continue
            spread = np.sqrt(np.einsum("ni,nij,nj->n", slope, fit.covariance[mine], slope))
            error = float(spread.std() / np.sqrt(len(spread)))
            found.append(Spread(law.candidate.name, name, Estimate(float(spread.mean()), error)))
    return tuple(found)


def _free_order(bench: Bench, scores: Scores, log_evidence: np.ndarray, most: int) -> Estimate:
    """Mean probability the free-order alternative ends with, among all that are carried."""
    place = next(i for i, law in enumerate(bench.laws) if law.candidate.free_order)
    first = np.concatenate([np.flatnonzero(scores.truth == i)[:most] for i in range(len(bench.odds))])
    weight = np.log(bench.prior) + scores.log_evidence[first]
    weight[:, place] = np.log(bench.prior[place]) + log_evidence
    p = np.exp(weight - weight.max(1, keepdims=True))
    share = np.full(len(scores.truth), np.nan)
    share[first] = (p / p.sum(1, keepdims=True))[:, place]
    return _mean(bench, scores, share)
