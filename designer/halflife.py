"""The half-life of a whole law, and the constant that gives a law a stated half-life.

Half-life: the time for the first-named reactant of the first step to fall to half of its start. One
step with a rate that does not name time: t = int dx / r(x) over the extent, by quadrature; anything
else by integration in time. A law may never get there; that is an answer here, not a failure.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import exp, inf, isfinite, log

import numpy as np

from designer import expressions
from designer.expressions import Binary, Call, Name, Negative, Node, Number, Species
from designer.plainlaw import Every, rate
from designer.records import Step

STALLED = 1e-9  # a rate this small beside the largest on the way is none


class UnreachableError(ValueError):
    """No value of the constant gives the half-life.

    left: share of the reactant that is left in the end however large the constant (None: not so);
    sooner: half-life with the constant at next to nothing, s (None: not so).
    """

    def __init__(self, left: float | None = None, sooner: float | None = None) -> None:
        super().__init__("no value of the constant gives this half-life")
        self.left = left
        self.sooner = sooner


@dataclass(frozen=True)
class Start:
    """Where a run begins: bare names (constants, conditions) and starting concentrations (mol/L)."""

    steps: tuple[Step, ...]
    names: Mapping[str, float]
    concentrations: Mapping[str, float]

    def with_constant(self, name: str, value: float) -> Start:
        """The same start with one constant at ``value``."""
        return Start(self.steps, {**self.names, name: value}, self.concentrations)

    @property
    def reactant(self) -> str:
        """First-named reactant of the first step."""
        return self.steps[0].equation.first_reactant

    @property
    def amount(self) -> float:
        """Starting concentration of that reactant, mol/L."""
        return self.concentrations.get(self.reactant, 0.0)

    @property
    def by_extent(self) -> bool:
        """Whether the rate depends on the extent of one reaction alone."""
        return len(self.steps) == 1 and "time" not in expressions.names(self.steps[0].rate)


def degree(node: Node, name: str) -> float | None:
    """d such that the expression is proportional to name^d; None where it is not a power of it."""
    match node:
        case Number() | Species():
            return 0.0
        case Name(found):
            return 1.0 if found == name else 0.0
        case Negative(operand):
            return degree(operand, name)
        case Call("sqrt", argument):
            inner = degree(argument, name)
            return None if inner is None else inner / 2
        case Call(_, argument):
            return 0.0 if degree(argument, name) == 0 else None
        case Binary("^", left, right):
            base = degree(left, name)
            if degree(right, name) != 0 or base is None:
                return None
            return base * right.value if isinstance(right, Number) else (0.0 if base == 0 else None)
        case Binary(operator, left, right):
            one, two = degree(left, name), degree(right, name)
            if one is None or two is None:
                return None
            if operator in "+-":
                return one if one == two else None
            return one + two if operator == "*" else one - two
    return None


def _path(start: Start, extents: np.ndarray) -> np.ndarray:
    """Rate at each extent (mol/L of reaction) of a single step."""
    (step,) = start.steps
    given = Every(start.concentrations)
    now = {name: given[name] + number * extents for name, number in step.equation.stoichiometry}
    here = {**{name: value + 0 * extents for name, value in given.items()}, **now}
    found = np.broadcast_to(rate(step, start.names, here, given), extents.shape)
    exhausted = np.min([value for value in now.values()], axis=0) < -1e-12 * start.amount
    return np.where(exhausted | ~np.isfinite(found), 0.0, found)


def half_life(start: Start, patience: float = inf) -> float:
    """Half-life in s; inf where the reactant never falls to half (or not within ``patience`` s)."""
    if start.amount <= 0:
        return inf
    if not start.by_extent:
        return _half_life_in_time(start, patience)
    from scipy.integrate import quad

    half = _half_extent(start)
    rates = _path(start, np.linspace(0.0, half, 201))
    if np.min(rates) <= STALLED * np.max(np.abs(rates)):
        return inf
    area = quad(lambda x: half / float(_path(start, np.array([x * half]))[0]), 0, 1, epsrel=1e-10, limit=200)
    return float(area[0])


def _half_extent(start: Start) -> float:
    number = dict(start.steps[0].equation.stoichiometry)[start.reactant]
    return start.amount / 2 / -number


def _run(start: Start, time: float) -> tuple[float, float]:
    """(share of the reactant left after ``time``, half-life if within it, else inf), by integration."""
    from scipy.integrate import solve_ivp

    order = list(dict.fromkeys(n for step in start.steps for n, _ in step.equation.stoichiometry))
    given = Every(start.concentrations)
    matrix = np.array([[dict(s.equation.stoichiometry).get(n, 0.0) for s in start.steps] for n in order])
    place, scale = order.index(start.reactant), start.amount

    def slope(clock: float, state: np.ndarray) -> np.ndarray:
        now = {**given, **dict(zip(order, state * scale, strict=True))}
        names = {**start.names, "time": clock * time}
        rates = np.array([float(rate(step, names, now, given)) for step in start.steps])
        return matrix @ np.where(np.isfinite(rates), rates, 0.0) * time / scale

    def at_half(clock: float, state: np.ndarray) -> float:
        return float(state[place] - 0.5)

    at_half.direction = -1  # type: ignore[attr-defined]
    first = np.array([given[name] for name in order]) / scale
    out = solve_ivp(slope, (0, 1), first, method="BDF", rtol=1e-8, atol=1e-11, events=at_half)
    when = out.t_events[0][0] * time if len(out.t_events[0]) else inf
    return float(out.y[place, -1]), float(when)


def _half_life_in_time(start: Start, patience: float) -> float:
    """By integration over growing times, from the first rate's own scale up to ``patience``."""
    given = Every(start.concentrations)
    first = sum(
        dict(s.equation.stoichiometry).get(start.reactant, 0.0)
        * float(rate(s, {"time": 0.0, **start.names}, given, given))
        for s in start.steps
    )
    time = start.amount / -first if first < 0 else (patience if isfinite(patience) else 1.0) / 1e3
    for _ in range(12):
        _, when = _run(start, min(time, patience))
        if isfinite(when) or time >= patience:
            return when
        time *= 10
    return inf


def left_in_the_end(start: Start) -> float:
    """Share of the reactant where a single step stalls before half of it is used up (1 = no reaction)."""
    half = _half_extent(start)
    extents = np.linspace(0.0, half, 20001)
    rates = _path(start, extents)
    stopped = np.flatnonzero(rates <= STALLED * np.max(np.abs(rates)))
    return float(1 - extents[stopped[0]] / half / 2) if len(stopped) else 0.5


def solve(start: Start, name: str, wanted: float) -> float:
    """Value of the constant ``name`` at which the law has the half-life ``wanted`` (s).

    Proportional laws need one quadrature; others a root search in ln(value).
    Raises UnreachableError.
    """
    if start.by_extent and degree(start.steps[0].rate, name) == 1:
        time = half_life(start.with_constant(name, 1.0))
        if not isfinite(time):
            raise UnreachableError(left=left_in_the_end(start.with_constant(name, 1.0)))
        return time / wanted

    from scipy.optimize import brentq

    def excess(log_value: float) -> float:
        return _excess(start.with_constant(name, exp(log_value)), wanted)

    low, high = _bracket(start, name, wanted, excess)
    return float(exp(brentq(excess, low, high, xtol=1e-10, rtol=1e-12)))


def _excess(start: Start, wanted: float) -> float:
    """Positive where the law is slower than wanted, falling through 0 at the half-life wanted."""
    if start.by_extent:
        time = half_life(start)
        return log(time / wanted) if isfinite(time) else 1e3
    return _run(start, wanted)[0] - 0.5


def _bracket(start: Start, name: str, wanted: float, excess) -> tuple[float, float]:  # type: ignore[no-untyped-def]
    """Two ln(value) between which the half-life wanted lies; the search grows from ln(1/wanted)."""
    here = log(1 / wanted)
    value = excess(here)
    direction = 1.0 if value > 0 else -1.0
    for _ in range(35):
        there = here + direction * 2.0
        following = excess(there)
        if following * value <= 0:
            return min(here, there), max(here, there)
        here, value = there, following
    far = start.with_constant(name, exp(here))
    if direction < 0:
        raise UnreachableError(sooner=half_life(far, 100 * wanted))
    raise UnreachableError(left=left_in_the_end(far) if start.by_extent else _run(far, wanted)[0])
