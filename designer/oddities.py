"""What is odd in a study but can be used: warnings, not errors."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from designer import expressions, halflife, plainlaw, units
from designer.noting import Notes
from designer.records import Candidate, Limits, Reading, RunErrors, Step
from designer.setting import Setting


def look(
    notes: Notes,
    setting: Setting,
    listed: Sequence[Candidate],
    readings: Sequence[Reading],
    errors: RunErrors,
    bounds: Limits,
    unit: str,
) -> None:
    """Note every oddity as a warning."""
    _bath(notes, listed, errors)
    _memory(notes, readings)
    _absent(notes, setting, listed, readings)
    for candidate in listed:
        _too_late(notes, setting, candidate, bounds, unit)
        for step in candidate.steps:
            _abrupt(notes, setting, candidate, step)
            _below_zero(notes, setting, candidate, step)


def _bath(notes: Notes, listed: Sequence[Candidate], errors: RunErrors) -> None:
    energies = any(c.activation_energy is not None for candidate in listed for c in candidate.constants)
    if errors.temperature and not energies:
        notes.warn(
            "run_errors.temperature has no effect: no constant has an activation energy. "
            "Give one, or put the bath's share into run_errors.rate"
        )


def _memory(notes: Notes, readings: Sequence[Reading]) -> None:
    for reading in readings:
        if reading.every is not None and reading.memory is None:
            notes.warn(
                f"reading '{reading.name}' is recorded continuously and no memory is given: its readings "
                "count as independent, which is seldom so. "
                "Give memory, the time over which its noise stays alike"
            )
        if reading.every is None and reading.memory is not None:
            notes.warn(
                f"reading '{reading.name}' has a memory but no `every`: it counts as sampled, without memory"
            )


def _absent(notes: Notes, setting: Setting, listed: Sequence[Candidate], readings: Sequence[Reading]) -> None:
    """Species that are read or stand in a rate, and are neither started with nor made."""
    started = {c.name for c in setting.conditions if c.is_species and c.high > 0}
    for candidate in listed:
        made = {n for step in candidate.steps for n, number in step.equation.stoichiometry if number > 0}
        wanted = [s for step in candidate.steps for s in expressions.species(step.rate)]
        wanted += [s for reading in readings for s in expressions.species(reading.signal)]
        used = [n for step in candidate.steps for n, number in step.equation.stoichiometry if number < 0]
        for name in dict.fromkeys([*wanted, *used]):
            if name not in started | made:
                notes.warn(
                    f"'{name}' is neither started with nor made under '{candidate.name}': "
                    "it is 0 there throughout"
                )


def _values(setting: Setting, candidate: Candidate) -> tuple[dict[str, float], dict[str, float]]:
    middles = plainlaw.middles(setting.conditions)
    bare, concentrations = plainlaw.split(middles, setting.conditions)
    names = plainlaw.names_of(candidate, {**setting.known, **bare}, middles.get("temperature"))
    return {name: float(value) for name, value in names.items()}, concentrations


def _too_late(notes: Notes, setting: Setting, candidate: Candidate, bounds: Limits, unit: str) -> None:
    if not bounds.first_sample:
        return
    names, concentrations = _values(setting, candidate)
    start = halflife.Start(candidate.steps, names, concentrations)
    time = halflife.half_life(start, bounds.first_sample)
    if np.isfinite(time) and bounds.first_sample > 10 * time:
        notes.warn(
            f"under '{candidate.name}' the first sample, at {units.show(bounds.first_sample, unit)}, "
            f"comes after 10 half-lives (one is about {units.show(time, unit)} "
            "at the middle of what is on offer)"
        )


def _abrupt(notes: Notes, setting: Setting, candidate: Candidate, step: Step) -> None:
    """A rate that goes on when a species it consumes has run out (where that can happen)."""
    names, concentrations = _values(setting, candidate)
    given = plainlaw.Every(concentrations)
    numbers = dict(step.equation.stoichiometry)
    full = float(plainlaw.rate(step, names, given, given))
    for name, number in numbers.items():
        if number >= 0 or not _can_run_out(setting, numbers, name):
            continue
        without = float(plainlaw.rate(step, names, {**given, name: 0.0}, given))
        if np.isfinite(without) and without > 1e-9 * abs(full):
            notes.warn(
                f"under '{candidate.name}' the rate does not fall to 0 as {name} runs out, though "
                f"'{step.equation.text}' uses it up: the reaction then stops there abruptly"
                f"{_instead(numbers, name)}"
            )


def _instead(numbers: dict[str, float], name: str) -> str:
    if sum(number < 0 for number in numbers.values()) == 1:
        return ""
    return f". If {name} takes no part, give the candidate an equation of its own without it"


def _can_run_out(setting: Setting, numbers: dict[str, float], name: str) -> bool:
    """Whether some mixture on offer runs out of this species before any other reactant."""
    offered = {c.name: c for c in setting.conditions}
    if name not in offered:
        return True
    here = offered[name].low / -numbers[name]
    others = [
        (offered[other].high if other in offered else 0.0) / -number
        for other, number in numbers.items()
        if number < 0 and other != name
    ]
    return not others or here <= min(others)


def _below_zero(notes: Notes, setting: Setting, candidate: Candidate, step: Step) -> None:
    names, concentrations = _values(setting, candidate)
    given = plainlaw.Every(concentrations)
    found = float(plainlaw.rate(step, names, given, given))
    if np.isnan(found):
        notes.warn(
            f"the rate '{step.text}' of '{candidate.name}' has no value at the middle of what is on offer"
        )
    elif found < 0:
        notes.warn(
            f"the rate '{step.text}' of '{candidate.name}' is below 0 at the middle of what is on offer"
        )
