"""Why a plan does better or worse than another, in one sentence each.

Everything is read off the two ratings and the two schedules. Two figures are called different where
they lie more than two standard errors of their difference apart.
"""

from __future__ import annotations

from math import hypot, isfinite

from designer import wording
from designer.outcomes import Estimate, Plan, Rating
from designer.records import Condition, Schedule, Study

APART = 2.0  # standard errors
LOSS = 0.1  # of mean probability, from which a plan that looks good on the constants is called out
SAME_START = 1.001  # starting conditions within this factor are the same
FULLER = 1.5  # a lever spans more where the ratio of its ends is larger by this factor


def difference(first: Estimate, second: Estimate) -> float:
    """first - second in standard errors; 0 where either is not defined."""
    gap, error = first.value - second.value, hypot(first.error, second.error)
    if not isfinite(gap) or gap == 0:
        return 0.0
    return gap / error if error > 0 and isfinite(error) else float("inf") * gap


def pinned(rating: Rating) -> dict[str, Estimate]:
    """How well each constant comes out, under the name a sentence uses: the asked half-widths, or,
    where nothing was asked, the SE of ln k under each true law. Smaller is better."""
    if rating.precision:
        return {precision.constant: precision.half_width for precision in rating.precision}
    return {f"{s.constant} of '{s.candidate}'": s.spread for s in rating.spreads}


def sentences(study: Study, plan: Plan) -> list[str]:
    """The plan against its best rival, then every rival that looks good on the constants and cannot
    name the law."""
    if not plan.alternatives:
        return []
    best = max(plan.alternatives, key=lambda rating: _order(rating.mean_probability))
    found = [_against(study, plan.rating, best)]
    traps = [rating for rating in plan.alternatives if is_trap(plan.rating, rating)]
    return found + [_trap(study, plan.rating, rating) for rating in traps]


def _order(figure: Estimate) -> float:
    return figure.value if isfinite(figure.value) else -1.0


def closer(rating: Rating, other: Rating) -> list[tuple[str, str]]:
    """(candidate, constant) pairs whose SE of ln k is clearly smaller under ``other`` when that
    candidate is true."""
    its = {(s.candidate, s.constant): s.spread for s in other.spreads}
    return [
        (s.candidate, s.constant)
        for s in rating.spreads
        if (s.candidate, s.constant) in its and difference(its[s.candidate, s.constant], s.spread) < -APART
    ]


def is_trap(rating: Rating, other: Rating) -> bool:
    """Whether ``other`` pins the constants down more closely under half of the laws or more, each taken
    for true, and yet gives the right law a mean probability lower by ``LOSS`` and beyond its error."""
    gap = rating.mean_probability.value - other.mean_probability.value
    if not gap > LOSS or difference(other.mean_probability, rating.mean_probability) > -APART:
        return False
    return bool(rating.spreads) and len(closer(rating, other)) >= len(rating.spreads) / 2


def _against(study: Study, rating: Rating, best: Rating) -> str:
    gap = difference(rating.mean_probability, best.mean_probability)
    figures = f"{wording.estimate(rating.mean_probability)} against {wording.estimate(best.mean_probability)}"
    if abs(gap) <= APART:
        return (
            f"No clear gain over the nearest rival, '{best.name}': the mean probability of the right law is "
            f"{figures}, a difference within its error{_on_constants(rating, best)}."
        )
    if gap < 0:
        return (
            f"'{best.name}' does better than this plan: the mean probability of the right law is {figures}"
            f"{_broken(best)}{_contrast(study, best.schedule, rating.schedule, ('it', 'this plan'))}."
        )
    contrast = _contrast(study, rating.schedule, best.schedule, ("this plan", "the other"))
    return (
        f"Better than the nearest rival, '{best.name}': the mean probability of the right law is "
        f"{figures}{contrast}."
    )


def _broken(rating: Rating) -> str:
    return ", though it breaks limits" if rating.broken else ""


def _on_constants(rating: Rating, other: Rating) -> str:
    """What decides where the chance of naming the law does not."""
    mine, its = pinned(rating), pinned(other)
    shared = [name for name in mine if name in its]
    better = [name for name in shared if difference(mine[name], its[name]) < -APART]
    worse = [name for name in shared if difference(mine[name], its[name]) > APART]
    parts = []
    for names, word in ((better, "more"), (worse, "less")):
        if names:
            figures = [f"{_size(rating, mine[n])} against {_size(other, its[n])}" for n in names]
            parts.append(f"it pins {wording.listed(names)} down {word} closely ({'; '.join(figures)})")
    return f"; {' and '.join(parts)}" if parts else ""


def _size(rating: Rating, figure: Estimate) -> str:
    return wording.percent(figure) if rating.precision else wording.estimate(figure)


def _trap(study: Study, rating: Rating, other: Rating) -> str:
    mine = {(s.candidate, s.constant): s.spread for s in rating.spreads}
    its = {(s.candidate, s.constant): s.spread for s in other.spreads}
    shown = [
        f"{constant} {wording.estimate(its[name, constant])} against "
        f"{wording.estimate(mine[name, constant])} if '{name}' is true"
        for name, constant in closer(rating, other)
    ]
    chance = f"{wording.estimate(other.mean_probability)} against {wording.estimate(rating.mean_probability)}"
    return (
        f"'{other.name}' looks better on the constants (SE of ln {'; '.join(shown)}) but gives the right law "
        f"a mean probability of {chance}: {_cause(study, rating.schedule, other.schedule)}, so it measures a "
        "constant closely under a law that is taken for granted and cannot tell which law that is."
    )


def _cause(study: Study, mine: Schedule, other: Schedule) -> str:
    if len(other.runs) > 1 and not _spans(study, other):
        return "its runs all start from the same conditions"
    narrow = _narrower(study, other, mine)
    if narrow:
        return f"its runs cover less ({narrow})"
    return "its samples fall where the laws agree"


def _levers(study: Study) -> list[Condition]:
    return [condition for condition in study.conditions if not condition.is_fixed]


def span(condition: Condition, schedule: Schedule) -> tuple[float, float]:
    """Lowest and highest value of a condition over the runs of a schedule."""
    values = [dict(run.conditions)[condition.name] for run in schedule.runs]
    return min(values), max(values)


def _spans(study: Study, schedule: Schedule) -> list[Condition]:
    """The levers that a schedule moves at all."""
    found = []
    for condition in _levers(study):
        low, high = span(condition, schedule)
        if high > low * SAME_START:
            found.append(condition)
    return found


def _ratio(condition: Condition, schedule: Schedule) -> float:
    low, high = span(condition, schedule)
    return high / low if low > 0 else float("inf") if high > low else 1.0


def _words(condition: Condition, schedule: Schedule) -> str:
    low, high = span(condition, schedule)
    if high <= low * SAME_START:
        return f"only {wording.amount(high, condition.unit)}"
    return f"{wording.amount(low, condition.unit)} to {wording.amount(high, condition.unit)}"


def _narrower(study: Study, other: Schedule, mine: Schedule) -> str:
    """The levers over which ``other`` spans clearly less than ``mine``, with both spans."""
    found = [
        f"{condition.name} {_words(condition, other)}, here {_words(condition, mine)}"
        for condition in _levers(study)
        if _ratio(condition, mine) > FULLER * _ratio(condition, other)
    ]
    return "; ".join(found)


def _contrast(study: Study, fuller: Schedule, other: Schedule, names: tuple[str, str]) -> str:
    """Which levers the better of two schedules spans more fully; else nothing."""
    found = [
        f"{condition.name} ({_words(condition, fuller)}, {names[1]} {_words(condition, other)})"
        for condition in _levers(study)
        if _ratio(condition, fuller) > FULLER * _ratio(condition, other)
    ]
    return f"; {names[0]} spans more of {wording.listed(found)}" if found else ""
