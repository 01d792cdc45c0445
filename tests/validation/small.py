"""Small reactions at plain numbers, solved by the program's own paths through time.

Numbers are bare: every concentration counts as mol/L and every time as s, whatever the source writes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cache
from math import log
from typing import Any

import numpy as np
from scipy.optimize import brentq

from designer import expressions, reactions, trajectories
from designer.arrays import jax
from designer.records import (
    Aim,
    Belief,
    Candidate,
    Condition,
    Constant,
    Limits,
    PlanSize,
    Reading,
    RunErrors,
    Step,
    Study,
)

PLAIN = (0.0,) * 7  # dimensions play no part below the study file
WIDTH = 16  # times of one compiled call


def steps(*pairs: tuple[str, str]) -> tuple[Step, ...]:
    """Steps from (equation, rate) pairs."""
    return tuple(
        Step(reactions.equation(text, f"step {number}"), expressions.parse(rate), rate)
        for number, (text, rate) in enumerate(pairs, 1)
    )


def lognormal(name: str, median: float, spread: float) -> Constant:
    """spread: SD of the logarithm."""
    return Constant(name, Belief("lognormal", log(median), spread), PLAIN, "")


def candidate(name: str, equation: str, rate: str, *constants: Constant, belief: float = 1.0) -> Candidate:
    return Candidate(name, belief, steps((equation, rate)), constants)


def species(name: str, low: float, high: float | None = None) -> Condition:
    return Condition(name, True, PLAIN, "", low, low if high is None else high)


def lever(name: str, low: float, high: float | None = None) -> Condition:
    """A condition that is no species."""
    return Condition(name, False, PLAIN, "", low, low if high is None else high)


def study(
    candidates: Sequence[Candidate],
    conditions: Sequence[Condition],
    *,
    signal: str = "[A]",
    absolute: float = 0.0,
    relative: float = 0.0,
    time_error: float = 0.0,
    lowest: float | None = None,
    run_errors: RunErrors | None = None,
    plan: PlanSize | None = None,
    limits: Limits | None = None,
    aim: Aim | None = None,
) -> Study:
    """A study of one reading."""
    reading = Reading(
        "signal",
        expressions.parse(signal),
        signal,
        PLAIN,
        "",
        absolute=absolute,
        relative=relative,
        time_error=time_error,
        lowest=lowest,
    )
    return Study(
        title="small",
        question="",
        candidates=tuple(candidates),
        conditions=tuple(conditions),
        constants=(),
        readings=(reading,),
        run_errors=run_errors or RunErrors(),
        plan=plan or PlanSize(1, 1),
        limits=limits or Limits(longest_run=1e6),
        aim=aim or Aim(),
    )


class Reaction:
    """Steps whose constants are given bare at each call."""

    def __init__(self, *pairs: tuple[str, str]) -> None:
        self.steps = steps(*pairs)
        self.candidate = Candidate("reaction", 1.0, self.steps, ())
        self._solve: Any = None

    def _curve(
        self, start: Mapping[str, float], bare: Mapping[str, float], times: np.ndarray
    ) -> trajectories.Curve:
        if self._solve is None:
            self._solve = jax.jit(trajectories.choose(self.candidate, frozenset(bare)).solve)
        given = {name: float(value) for name, value in bare.items()}
        began = {name: float(start.get(name, 0.0)) for name in self.candidate.species}
        curve = self._solve(given, began, 1.0, times)
        if float(curve.trouble) != 0:
            raise AssertionError(f"no curve of {self.steps[0].text} at {dict(bare)} from {dict(start)}")
        return curve

    def run(
        self, start: Mapping[str, float], bare: Mapping[str, float], times: Sequence[float] | np.ndarray
    ) -> tuple[dict[str, np.ndarray], np.ndarray]:
        """Concentrations (species -> (times,)) and rates of reaction (step, times)."""
        asked = np.asarray(times, dtype=float)
        whole = -(-len(asked) // WIDTH) * WIDTH
        padded = np.concatenate([asked, np.full(whole - len(asked), asked[-1])])
        parts = [self._curve(start, bare, padded[i : i + WIDTH]) for i in range(0, whole, WIDTH)]
        names = parts[0].concentrations
        now = {
            name: np.concatenate([np.asarray(part.concentrations[name]) for part in parts])[: len(asked)]
            for name in names
        }
        rates = np.concatenate([np.asarray(part.rates) for part in parts], axis=1)[:, : len(asked)]
        return now, rates

    def at(self, start: Mapping[str, float], bare: Mapping[str, float], time: float) -> dict[str, float]:
        """Concentrations at one time."""
        return {name: float(value[0]) for name, value in self.run(start, bare, [time])[0].items()}

    def when(
        self,
        start: Mapping[str, float],
        bare: Mapping[str, float],
        name: str,
        value: float,
        horizon: float,
    ) -> float:
        """Time within ``horizon`` at which a species falls to ``value``."""
        return float(
            brentq(lambda t: self.at(start, bare, t)[name] - value, 0.0, horizon, xtol=1e-12, rtol=1e-13)
        )


@cache
def reaction(*pairs: tuple[str, str]) -> Reaction:
    """The same reaction object for the same text, so that it is compiled once."""
    return Reaction(*pairs)
