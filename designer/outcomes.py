"""What planning concludes, as frozen records in internal units: everything a report, a figure or a
notebook shows is here, and nothing in them is computed again."""

from __future__ import annotations

from dataclasses import dataclass, field

from designer.records import Schedule


@dataclass(frozen=True)
class Estimate:
    """A figure from virtual studies and its Monte-Carlo error (one standard error). nan = not defined."""

    value: float
    error: float


@dataclass(frozen=True)
class Precision:
    """How well an asked constant comes out: half-width of its 95 % range as a fraction (1.96 times the SD
    of ln k under the true law), over the true laws that have it."""

    constant: str
    asked: float
    half_width: Estimate
    met: Estimate


@dataclass(frozen=True)
class Spread:
    """Expected SD of the logarithm of a constant when ``candidate`` is the true law."""

    candidate: str
    constant: str
    spread: Estimate


@dataclass(frozen=True)
class Rating:
    """What a schedule is worth, from virtual studies drawn from the listed candidates.

    top: how often the right law has the highest probability (ties shared); reach: how often it gets to
    the probability asked for; both overall and for each true law. mean_probability and log_score (mean
    ln probability) of the right law. information in nats, information_share of what is to be known.
    free_order: mean probability the free-order alternative ends with (all candidates counted).
    broken: limits the schedule breaks, in words. doubtful: virtual studies in which an evidence that
    counts is still flagged; repaired: evidences recomputed by quadrature; unsolved: draws whose
    trajectory could not be solved, by candidate.
    """

    schedule: Schedule
    studies: int
    worth: Estimate
    top: Estimate
    top_by_law: tuple[tuple[str, Estimate], ...]
    reach: Estimate
    reach_by_law: tuple[tuple[str, Estimate], ...]
    mean_probability: Estimate
    log_score: Estimate
    information: Estimate
    information_share: Estimate
    precision: tuple[Precision, ...]
    spreads: tuple[Spread, ...]
    free_order: Estimate | None
    total_time: float
    broken: tuple[str, ...] = ()
    doubtful: int = 0
    repaired: int = 0
    unsolved: tuple[tuple[str, int], ...] = ()

    @property
    def name(self) -> str:
        return self.schedule.name


@dataclass(frozen=True)
class Predicted:
    """Mean of one reading at one sample under one candidate at the middle of its beliefs, in internal
    units; censored: "below", "above" or "" against the trusted limits; left: fraction of the
    start that is left, where the reading is a concentration ([X] alone), else None."""

    candidate: str
    reading: str
    mean: float
    error: float  # 1 SD of the instrument within the run
    censored: str = ""
    left: float | None = None


@dataclass(frozen=True)
class Sample:
    """One sample of the run sheet. time in s; purpose is one line on what it is for. In a continuously
    recorded run, samples stand for a few telling readings."""

    time: float
    predicted: tuple[Predicted, ...]
    purpose: str


@dataclass(frozen=True)
class Portion:
    """What to pipette: volume (L) of a stock or of the solvent ("make up to the mark")."""

    name: str
    stock: float | None
    volume: float


@dataclass(frozen=True)
class PlannedRun:
    """One run of the run sheet. number counts from 1; conditions in internal units; marks: cautions
    ("hydroxide beyond the highest already run", ...); gain: worth added by this run to those before it."""

    number: int
    conditions: tuple[tuple[str, float], ...]
    samples: tuple[Sample, ...]
    length: float | None
    portions: tuple[Portion, ...]
    marks: tuple[str, ...]
    gain: Estimate


@dataclass(frozen=True)
class Curve:
    """Fan of one candidate's curve in one run for one reading: times (s), middle, and the 5 and 95 % of
    the belief."""

    run: int
    candidate: str
    reading: str
    times: tuple[float, ...]
    middle: tuple[float, ...]
    low: tuple[float, ...]
    high: tuple[float, ...]


@dataclass(frozen=True)
class Inseparable:
    """Two candidates that predict the same on the levers offered, and the fixed conditions that would
    separate them if freed by a factor of 2 (temperature by 10 K); none may do."""

    first: str
    second: str
    levers: tuple[str, ...]


@dataclass(frozen=True)
class LocalRating:
    """Local Fisher criterion of the plan at the middle of one candidate's beliefs: kind "D" or "c",
    and at most how much better (a fraction) any design within the limits could be by this measure, a
    sample being the unit."""

    candidate: str
    kind: str
    value: float
    margin: float


@dataclass(frozen=True)
class Plan:
    """A plan and everything said about it. binding: the limit that binds, in words ("" = none does).
    alternatives: usual schedules, then any that were compared. rounding: worth lost by rounding.
    bookings: seconds needed and booked (None = not given)."""

    title: str
    seed: int
    versions: tuple[tuple[str, str], ...]
    rating: Rating
    runs: tuple[PlannedRun, ...]
    alternatives: tuple[Rating, ...]
    binding: str
    inseparable: tuple[Inseparable, ...]
    cautions: tuple[str, ...]
    rounding: Estimate
    curves: tuple[Curve, ...]
    beliefs: tuple[tuple[str, float, float], ...]  # (candidate, stated, after pilots)
    local: tuple[LocalRating, ...] = ()
    booked: float | None = None
    effort: tuple[tuple[str, int], ...] = ()
    warnings: tuple[str, ...] = field(default=())
