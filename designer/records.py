"""The records of a study: frozen, in internal units, knowing nothing of files or arrays.

Internal units: mol/L, s, K, J/mol, g/L, bar (``units``). ``dimension`` is the opaque tuple of
exponents that ``units`` makes; ``unit`` is the text in which the user wrote the value and in which
it is shown again.

Three meanings of plus-minus, never mixed: the factor or width of a belief spans 90 %, an error of
measurement is one standard deviation, a reported range is 95 %.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from designer.expressions import Node

Dimension = tuple[float, ...]

Z90 = 1.6448536269514722  # half-width of a central 90 % range, in standard deviations
Z95 = 1.959963984540054  # half-width of a central 95 % range


@dataclass(frozen=True)
class Belief:
    """Distribution of one unknown, as a monotone transform of u ~ N(0, 1) (``beliefs``).

    family   value of u
    exact            centre
    lognormal        exp(centre + spread u)      centre = ln(median)
    normal           centre + spread u
    positive         normal truncated to values above 0, by inverse distribution function
    logitnormal      1 / (1 + exp(-(centre + spread u)))
    uniform          low + (high - low) Phi(u)
    """

    family: str
    centre: float
    spread: float = 0.0
    low: float = 0.0
    high: float = 0.0


@dataclass(frozen=True)
class Constant:
    """An unknown of one candidate. ``stated`` repeats in words how the file gave it."""

    name: str
    belief: Belief
    dimension: Dimension
    unit: str
    activation_energy: Belief | None = None  # J/mol
    reference_temperature: float | None = None  # K
    stated: str = ""


@dataclass(frozen=True)
class Equation:
    """A reaction equation: stoichiometric numbers, negative for what is used up.

    name is the user's ("open") or "" where the study has one reaction only.
    """

    name: str
    text: str
    stoichiometry: tuple[tuple[str, float], ...]

    @property
    def first_reactant(self) -> str:
        return next((species for species, number in self.stoichiometry if number < 0), "")


@dataclass(frozen=True)
class Step:
    """One reaction that happens under a candidate: its equation and its rate expression (mol/L/s)."""

    equation: Equation
    rate: Node
    text: str  # the rate as the chemist wrote it


@dataclass(frozen=True)
class Candidate:
    """One rate law on the list. belief: prior probability among all that are carried (sums to 1).

    free_order marks the alternative that the program adds itself; it never gates an aim.
    overrides marks an equation of the candidate's own.
    """

    name: str
    belief: float
    steps: tuple[Step, ...]
    constants: tuple[Constant, ...]
    free_order: bool = False
    overrides: bool = False

    @property
    def species(self) -> tuple[str, ...]:
        seen: dict[str, None] = {}
        for step in self.steps:
            for name, _ in step.equation.stoichiometry:
                seen[name] = None
        return tuple(seen)

    def constant(self, name: str) -> Constant:
        return next(constant for constant in self.constants if constant.name == name)


@dataclass(frozen=True)
class Condition:
    """What a run starts from: fixed (low == high), a range, or discrete levels (ascending).

    is_species: a starting concentration; otherwise a quantity used bare in a rate (catalyst,
    pressure, temperature).
    """

    name: str
    is_species: bool
    dimension: Dimension
    unit: str
    low: float
    high: float
    levels: tuple[float, ...] = ()

    @property
    def is_fixed(self) -> bool:
        return self.low == self.high

    @property
    def middle(self) -> float:
        """Geometric middle of what is on offer (arithmetic where the range touches 0)."""
        return (self.low * self.high) ** 0.5 if self.low > 0 else (self.low + self.high) / 2


@dataclass(frozen=True)
class Reading:
    """What the instrument reads of one sample, with its errors (one standard deviation).

    relative is a fraction of the mean signal; time_error in s; lowest and highest bound what is
    trusted; every and memory (s) mark a signal that is recorded continuously; uncertain is the
    factor (90 %) by which the stated noise may be wrong.
    """

    name: str
    signal: Node
    text: str
    dimension: Dimension
    unit: str
    relative: float = 0.0
    absolute: float = 0.0
    time_error: float = 0.0
    lowest: float | None = None
    highest: float | None = None
    every: float | None = None
    memory: float | None = None
    uncertain: float | None = None


@dataclass(frozen=True)
class Prepared:
    """Relative error of one starting amount: stock (shared by all runs) and each_run."""

    name: str
    stock: float = 0.0
    each_run: float = 0.0


@dataclass(frozen=True)
class RunErrors:
    """Errors that all samples of a run share (one standard deviation).

    rate, scale and the prepared amounts are relative; temperature in K; time_zero in s; baseline in
    the unit of the signal. scale and baseline go with the reading of the same name ("" = every one).
    """

    rate: float = 0.0
    prepared: tuple[Prepared, ...] = ()
    temperature: float = 0.0
    time_zero: float = 0.0
    scale: tuple[tuple[str, float], ...] = ()
    baseline: tuple[tuple[str, float], ...] = ()


@dataclass(frozen=True)
class Pilot:
    """An observation made before the study: conversion of the first-named reactant at a time.

    at: (condition, value) pairs; readings: (time s, conversion) pairs; error: one SD of a conversion.
    """

    at: tuple[tuple[str, float], ...]
    readings: tuple[tuple[float, float], ...]
    error: float
    species: str


@dataclass(frozen=True)
class PlanSize:
    runs: int
    samples: int
    assay_at_start: bool = False


@dataclass(frozen=True)
class Limits:
    """Ceilings. Times in s; None = not given."""

    runs: int | None = None
    samples_per_run: int | None = None
    samples_total: int | None = None
    first_sample: float = 0.0
    spacing: float = 0.0
    longest_run: float = 0.0
    setup_per_run: float = 0.0
    booked: float | None = None


@dataclass(frozen=True)
class Aim:
    """probability: what settles a law; chance: how often, for the hardest candidate;
    precision: (constant, half-width of the 95 % range as a fraction); weight_on_law in 0..1."""

    probability: float = 0.95
    chance: float = 0.9
    precision: tuple[tuple[str, float], ...] = ()
    weight_on_law: float = 0.5


@dataclass(frozen=True)
class Heat:
    reaction: float | None = None  # J/mol, negative when heat is given off
    density: float | None = None  # g/L
    heat_capacity: float | None = None  # J/(g K)


@dataclass(frozen=True)
class Vessel:
    volume: float | None = None  # L
    sample: float | None = None  # L
    smallest_pipetted: float | None = None  # L


@dataclass(frozen=True)
class Study:
    """A whole study, ready for the workshops. source is the text of the file, word for word."""

    title: str
    question: str
    candidates: tuple[Candidate, ...]
    conditions: tuple[Condition, ...]
    constants: tuple[tuple[str, float], ...]
    readings: tuple[Reading, ...]
    run_errors: RunErrors
    plan: PlanSize
    limits: Limits
    aim: Aim
    pilots: tuple[Pilot, ...] = ()
    caps: tuple[tuple[str, float], ...] = ()
    already_run: tuple[tuple[str, float], ...] | None = None
    stocks: tuple[tuple[str, float], ...] = ()
    vessel: Vessel = field(default_factory=Vessel)
    heat: Heat = field(default_factory=Heat)
    costs: tuple[tuple[str, float], ...] = ()
    stop: tuple[tuple[str, float], ...] = ()
    floors: tuple[str, ...] = ()
    time_unit: str = "min"  # in which times are written, taken from the file's own limits
    warnings: tuple[str, ...] = ()
    source: str = ""

    @property
    def listed(self) -> tuple[Candidate, ...]:
        """The candidates the user listed, without the free-order alternative."""
        return tuple(candidate for candidate in self.candidates if not candidate.free_order)

    def condition(self, name: str) -> Condition:
        return next(condition for condition in self.conditions if condition.name == name)


@dataclass(frozen=True)
class Run:
    """One run of a plan: conditions in the order of ``Study.conditions``, times of samples in s,
    and the length in s of a run that is recorded continuously (None where samples are taken)."""

    conditions: tuple[tuple[str, float], ...]
    times: tuple[float, ...]
    length: float | None = None

    @property
    def end(self) -> float:
        """When the run is over, s."""
        return max((*self.times, self.length or 0.0))


@dataclass(frozen=True)
class Schedule:
    """Runs and their samples: what a plan proposes and what any rival plan is."""

    runs: tuple[Run, ...]
    name: str = ""
