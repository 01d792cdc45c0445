"""``check``: a study said back in the program's own understanding, before anything is planned."""

from __future__ import annotations

from collections.abc import Callable
from itertools import product

import numpy as np

from designer import beliefs, readback, signals, virtual
from designer.arrays import jnp
from designer.budget import budget
from designer.cautions import cautions
from designer.courses import LANES, POINTS, Course, log_range, spread_out
from designer.findings import Budget, Checkup, HalfLife, KnownConstant, LawFound, Range
from designer.outcomes import Curve
from designer.records import Z90, Belief, Candidate, Condition, Constant, Study

HORIZON = 100  # longest runs within which a half-life is looked for
MOST_CORNERS = 64
SHOWN = 4.0  # half-lives of the slowest candidate that the figure shows, if the longest run allows
SEED = 1

Progress = Callable[[str], None]


class _Mind:
    """One candidate with draws of the belief about it. u (draw, structural), errors of stocks and of the
    noise level at 0; middle (structural,)."""

    def __init__(self, study: Study, law: signals.Law, standing: float, drawn: np.ndarray | None) -> None:
        self.study, self.law, self.standing, self.drawn = study, law, standing, drawn
        self.course = Course(law)
        known = {c.name for c in law.candidate.constants}
        own = np.array([name.removeprefix("activation energy of ") in known for name in law.structural], bool)
        self.u = np.zeros((LANES, len(own)))
        self.u[:, own] = spread_out(int(own.sum())) if drawn is None else drawn[:, own]
        self.middle = np.zeros(len(own)) if drawn is None else self.u.mean(0)

    @property
    def candidate(self) -> Candidate:
        return self.law.candidate


def checkup(study: Study, progress: Progress | None = None) -> Checkup:
    """Say back what ``study`` means: laws, half-lives, curves, budget of error, cautions.

    progress(candidate) is called before each candidate. Pilots are counted where there are any.
    """
    tell = progress or (lambda name: None)
    minds = _minds(study)
    middle = np.array([_middle(condition) for condition in study.conditions])
    laws = []
    for mind in minds:
        tell(mind.candidate.name)
        laws.append(_law(mind, middle))
    end = _shown(study, laws)
    highest = {condition.name: condition.high for condition in study.conditions}
    return Checkup(
        title=study.title,
        question=study.question,
        time_unit=study.time_unit,
        middle=_named(study, middle),
        first_sample=study.limits.first_sample,
        longest_run=study.limits.longest_run,
        laws=tuple(laws),
        curves=tuple(curve for mind in minds for curve in _curves(mind, middle, end)),
        budgets=tuple(found for mind in minds for found in _budgets(mind, middle)),
        read_as=readback.read_as(study),
        defaults=readback.defaults(study),
        cautions=cautions(study, [highest]),
        warnings=study.warnings,
    )


def _middle(condition: Condition) -> float:
    """The middle of what is on offer; of discrete levels the one nearest to it."""
    return min(condition.levels or (condition.middle,), key=lambda level: abs(level - condition.middle))


def _minds(study: Study) -> list[_Mind]:
    if not study.pilots:
        return [_Mind(study, signals.law(study, c), c.belief, None) for c in study.candidates]
    bench = virtual.ready(study)
    found = []
    for index, law in enumerate(bench.laws):
        random = virtual.stream(SEED, law.candidate, "check")
        drawn = virtual.truth_draws(bench, index, LANES, random)
        found.append(_Mind(study, law, float(bench.standing[index]), drawn))
    return found


def _named(study: Study, values: np.ndarray) -> tuple[tuple[str, float], ...]:
    return tuple((c.name, float(x)) for c, x in zip(study.conditions, values, strict=True))


# laws


def _law(mind: _Mind, middle: np.ndarray) -> LawFound:
    study = mind.study
    horizon = HORIZON * study.limits.longest_run
    corners = _corners(study)
    at_corners, _ = mind.course.fall(mind.middle[None], corners, horizon)
    order = np.argsort(at_corners, kind="stable")
    ends = [corners[order[0]], corners[order[-1]]] if len(corners) > 1 else []
    half_lives, trouble = [], np.zeros(len(mind.u))
    for conditions in [middle, *ends]:
        times, wrong = mind.course.fall(mind.u, conditions[None], horizon)
        trouble = np.maximum(trouble, wrong)
        reached = float(np.isfinite(times).mean())
        half_lives.append(HalfLife(_named(study, conditions), Range(*log_range(times)), reached, horizon))
    first, end = _gone(mind, middle)
    return LawFound(
        candidate=mind.candidate,
        belief=mind.candidate.belief,
        after=mind.standing,
        constants=tuple(_constant(mind, constant) for constant in mind.candidate.constants),
        half_life=half_lives[0],
        fastest=half_lives[1] if ends else None,
        slowest=half_lives[2] if ends else None,
        gone_at_first=first,
        gone_at_end=end,
        unsolved=int((trouble > 0).sum()),
        draws=len(mind.u),
    )


def _corners(study: Study) -> np.ndarray:
    """Every combination of the ends of what is on offer: (corner, condition)."""
    ends = [(c.low,) if c.is_fixed else (c.low, c.high) for c in study.conditions]
    found = np.array(list(product(*ends)))
    return found[:: -(-len(found) // MOST_CORNERS)]


def _gone(mind: _Mind, middle: np.ndarray) -> tuple[float, float]:
    limits = mind.study.limits
    times = np.array([[0.0, limits.first_sample, limits.longest_run]])
    start, first, end = mind.course.see(mind.middle[None], middle[None], times).amount[0]
    return (float(1 - first / start), float(1 - end / start)) if start > 0 else (0.0, 0.0)


def _constant(mind: _Mind, constant: Constant) -> KnownConstant:
    energy = constant.activation_energy
    return KnownConstant(
        constant.name,
        constant.dimension,
        constant.unit,
        constant.stated,
        _range(constant.belief),
        _after(mind, constant),
        None if energy is None else _range(energy),
        constant.reference_temperature,
    )


def _range(belief: Belief) -> Range:
    low, middle, high = (beliefs.quantile(belief, u) for u in (-Z90, 0.0, Z90))
    return Range(low, middle, high)


def _after(mind: _Mind, constant: Constant) -> Range | None:
    if mind.drawn is None or constant.name not in mind.law.structural:
        return None
    u = mind.u[:, mind.law.structural.index(constant.name)]
    values = np.asarray(beliefs.value(constant.belief, jnp.asarray(u)))
    return Range(*(float(x) for x in np.quantile(values, [0.05, 0.5, 0.95], method="hazen")))


# curves and budget


def _shown(study: Study, laws: list[LawFound]) -> float:
    """How far the figure goes, s."""
    times = [law.half_life.time.middle for law in laws if not law.candidate.free_order]
    finite = [time for time in times if np.isfinite(time)]
    longest = study.limits.longest_run
    return min(longest, SHOWN * max(finite)) if finite else longest


def _curves(mind: _Mind, middle: np.ndarray, end: float) -> list[Curve]:
    times = np.linspace(0.0, end, POINTS)
    seen = mind.course.see(mind.u, middle[None], times[None])
    centre = mind.course.see(mind.middle[None], middle[None], times[None]).mean[0]
    solved = seen.mean[seen.trouble == 0]
    curves = []
    for column, reading in enumerate(mind.study.readings if len(solved) else ()):
        fan = np.quantile(solved[:, :, column], [0.05, 0.95], axis=0, method="hazen")
        low, high, line = (tuple(float(x) for x in row) for row in (*fan, centre[:, column]))
        curves.append(Curve(1, mind.candidate.name, reading.name, tuple(times.tolist()), line, low, high))
    return curves


def _budgets(mind: _Mind, middle: np.ndarray) -> list[Budget]:
    """Budgets at half conversion, or half way to what the longest run converts where that is less."""
    if mind.candidate.free_order:
        return []
    limits = mind.study.limits
    _, gone = _gone(mind, middle)
    left = 0.5 if gone >= 0.5 else 1 - gone / 2
    (time,), _ = mind.course.fall(mind.middle[None], middle[None], limits.longest_run * 1.001, left)
    time = float(np.clip(time, limits.first_sample, limits.longest_run))
    return [
        budget(mind.study, mind.course, mind.middle, middle, time, column)
        for column in range(len(mind.study.readings))
    ]
