"""What ``check`` finds, as frozen records in internal units; nothing in them is computed again."""

from __future__ import annotations

from dataclasses import dataclass

from designer.outcomes import Curve
from designer.records import Candidate, Dimension

Conditions = tuple[tuple[str, float], ...]


@dataclass(frozen=True)
class Range:
    """Middle and 90 % range (5 and 95 %) of a belief; inf: never, or beyond the horizon searched."""

    low: float
    middle: float
    high: float


@dataclass(frozen=True)
class KnownConstant:
    """One constant of a candidate: the dimension that the rate law asks of it, the unit in which the file
    writes it, how the file states it, and its range; after: the range once the pilots are counted."""

    name: str
    dimension: Dimension
    unit: str
    stated: str
    value: Range
    after: Range | None = None
    energy: Range | None = None  # activation energy, J/mol
    reference_temperature: float | None = None  # K


@dataclass(frozen=True)
class HalfLife:
    """Time (s) for the first-named reactant to fall to half under the whole law at these conditions.

    reached: share of the belief under which it does so within ``horizon`` (s).
    """

    conditions: Conditions
    time: Range
    reached: float
    horizon: float


@dataclass(frozen=True)
class LawFound:
    """One candidate as the program understands it.

    belief, after: before and after the pilots. half_life: at the middle of what is on offer; fastest,
    slowest: at the ends of the ranges (None where nothing is free). gone_at_first, gone_at_end: share of
    the first-named reactant that is gone by the first sample and by the longest run, at the middle.
    unsolved: draws of the belief, of ``draws``, whose course could not be computed.
    """

    candidate: Candidate
    belief: float
    after: float
    constants: tuple[KnownConstant, ...]
    half_life: HalfLife
    fastest: HalfLife | None
    slowest: HalfLife | None
    gone_at_first: float
    gone_at_end: float
    unsolved: int
    draws: int

    @property
    def reactant(self) -> str:
        return self.candidate.steps[0].equation.first_reactant


@dataclass(frozen=True)
class Share:
    """One source of error at a sample: its standard deviation (in the unit of the signal) and its share of
    the variance. comes_with: "sample" (afresh with each), "run" (one for all samples of a run) or
    "stock" (one for all runs made from a stock)."""

    source: str
    deviation: float
    share: float
    comes_with: str


@dataclass(frozen=True)
class Budget:
    """Where the error of a typical sample comes from. time in s; left: share of the first-named reactant
    that is left then; mean and deviation in the unit of the signal; shares largest first."""

    candidate: str
    reading: str
    unit: str
    time: float
    left: float
    mean: float
    deviation: float
    shares: tuple[Share, ...]


@dataclass(frozen=True)
class ReadAs:
    """One value of the file: where it stands, what was written ("" = nothing, a default is taken), and what
    it was read as, in words."""

    where: str
    written: str
    meaning: str


@dataclass(frozen=True)
class Checkup:
    """A study as the program understands it. middle: the conditions at which half-lives, curves and budgets
    are stated. first_sample and longest_run in s. curves: run 1 stands for the middle conditions."""

    title: str
    question: str
    time_unit: str
    middle: Conditions
    first_sample: float
    longest_run: float
    laws: tuple[LawFound, ...]
    curves: tuple[Curve, ...]
    budgets: tuple[Budget, ...]
    read_as: tuple[ReadAs, ...]
    defaults: tuple[ReadAs, ...]
    cautions: tuple[str, ...]
    warnings: tuple[str, ...]
