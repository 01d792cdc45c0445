"""What a chemist must be told about conditions that are proposed: heat, and what was never run before.

A plan is chosen for what it teaches. These are screening numbers and marks; they clear nothing.
Adiabatic rise of a batch: dT = (-dH) c0 X / (rho cp), with X = 1 (the whole of the limiting reactant).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from math import inf

from designer import units
from designer.records import Candidate, Condition, Study

MEDIUM, HIGH = 50.0, 200.0  # K of adiabatic rise; a common screening scale (common practice)
STEP_FACTOR, STEP_KELVIN = 2.0, 10.0  # how far one run may go beyond what was run (common practice)
UNATTENDED = 8 * 3600.0  # s; a run as long as this outlasts a working day
CLOSE = 1 + 1e-9
KEYS = {"reaction": "heat.reaction", "density": "heat.density", "heat_capacity": "heat.heat_capacity"}

PURPOSE = "Runs are chosen for what they teach, not for safety."
HAND_OVER = (
    "Before any run, follow local rules and ask the person responsible for hazard assessment where you work; "
    "do not go ahead on this sheet alone."
)


def adiabatic_rise(study: Study, conditions: Mapping[str, float]) -> float | None:
    """Rise of temperature (K) if all heat of the reaction stays in the mixture and the reaction goes to its
    end; negative where it cools. None where the study does not give all that is needed.

    conditions: internal units. The heat is that of one mole of reaction as its equation is written; where
    candidates or steps differ, the largest amount of reaction counts. A reactant that is no condition of
    the study (a gas kept at its pressure) does not limit it.
    """
    heat = study.heat
    if heat.reaction is None or heat.density is None or heat.heat_capacity is None:
        return None
    extent = max((_extent(candidate, conditions) for candidate in study.listed), default=0.0)
    return -heat.reaction * extent / (heat.density * heat.heat_capacity)


def _extent(candidate: Candidate, conditions: Mapping[str, float]) -> float:
    """Most reaction that any step can undergo, mol/L, by its limiting reactant."""
    found = []
    for step in candidate.steps:
        numbers = step.equation.stoichiometry
        room = [conditions[name] / -number for name, number in numbers if number < 0 and name in conditions]
        found.append(min(room, default=0.0))
    return max(found)


def already_run(study: Study) -> dict[str, float] | None:
    """Highest value of each condition that was run, pilots counted; None where nothing was."""
    if study.already_run is None and not study.pilots:
        return None
    highest = dict(study.already_run or ())
    for pilot in study.pilots:
        for name, value in pilot.at:
            highest[name] = max(value, highest.get(name, -inf))
    return highest


def marks(study: Study, conditions: Mapping[str, float]) -> tuple[str, ...]:
    """What stands out at the conditions of one run (internal units): heat, and each condition that lies
    beyond the highest already run. Where nothing was run yet, ``cautions`` says so once."""
    found = []
    rise = adiabatic_rise(study, conditions)
    if rise is not None and rise >= MEDIUM:
        found.append(f"▲ adiabatic temperature rise {rise:.0f} K ({_class(rise)})")
    highest = already_run(study) or {}
    for name, value in conditions.items():
        if name in highest and value > highest[name] * CLOSE:
            found.append(f"▲ {_beyond(study.condition(name), value, highest[name])}")
    return tuple(found)


def _class(rise: float) -> str:
    return "high" if rise > HIGH else "medium"


def _beyond(condition: Condition, value: float, highest: float) -> str:
    """Not yet run here, and how to get there where it is far."""
    shown, before = (units.show(x, condition.unit, 4) for x in (value, highest))
    text = f"{condition.name} {shown}: not yet run here, the highest so far is {before}"
    if condition.dimension == units.TEMPERATURE:
        far, step = value - highest > STEP_KELVIN * CLOSE, f"{STEP_KELVIN:g} K"
    else:
        far, step = value > STEP_FACTOR * highest * CLOSE, f"a factor of {STEP_FACTOR:g}"
    return (
        f"{text}; go up by at most {step} a run until heat and gas are seen to be as expected"
        if far
        else text
    )


def cautions(study: Study, runs: Sequence[Mapping[str, float]]) -> tuple[str, ...]:
    """Cautions about a whole set of runs, each a mapping of condition to value in internal units."""
    found = [PURPOSE, _heat(study, runs)]
    highest = already_run(study)
    if highest is None:
        found.append("Nothing run yet: every condition here is a first. Begin with the mildest.")
    else:
        found += _new(study, runs, highest)
    if _watch(study, runs) and study.limits.longest_run >= UNATTENDED:
        found.append(
            "Heat or pressure is in play and runs may outlast a working day: see who stays with them."
        )
    return (*found, HAND_OVER)


def _heat(study: Study, runs: Sequence[Mapping[str, float]]) -> str:
    missing = [key for name, key in KEYS.items() if getattr(study.heat, name) is None]
    if missing:
        return f"Heat not assessed: {_and(missing)} {'is' if len(missing) == 1 else 'are'} not given."
    rises = [adiabatic_rise(study, run) or 0.0 for run in runs]
    top = max(rises, default=0.0)
    if top <= 0:
        return "The reaction takes up heat as entered; heat of other processes is not assessed."
    where = runs[rises.index(top)]
    amounts = _amounts(study, where)
    known = f"Adiabatic temperature rise up to {top:.0f} K ({amounts}), estimated from the heat entered"
    scale = f"; {_class(top)} on a common screening scale" if top >= MEDIUM else ""
    return f"{known}{scale}. Decomposition, other reactions and gas given off are not assessed."


def _amounts(study: Study, run: Mapping[str, float]) -> str:
    used = {
        name
        for candidate in study.listed
        for step in candidate.steps
        for name, number in step.equation.stoichiometry
        if number < 0
    }
    shown = [
        f"{c.name} {units.show(run[c.name], c.unit, 4)}"
        for c in study.conditions
        if c.name in used and c.name in run
    ]
    return ", ".join(shown)


def _new(study: Study, runs: Sequence[Mapping[str, float]], highest: Mapping[str, float]) -> Iterable[str]:
    beyond, unknown = [], []
    for condition in study.conditions:
        top = max((run[condition.name] for run in runs if condition.name in run), default=-inf)
        if condition.name not in highest:
            unknown.append(condition.name)
        elif top > highest[condition.name] * CLOSE:
            beyond.append(condition.name)
    if beyond:
        yield f"Beyond the highest already run: {_and(beyond)}."
    if unknown:
        yield f"No value of {_and(unknown, 'or')} is given as already run: take each as a first."
    scale, volume = highest.get("volume"), study.vessel.volume
    if scale is not None and volume is not None and volume > scale * CLOSE:
        yield f"The vessel of {units.show(volume, 'mL')} is larger than any already run."


def _watch(study: Study, runs: Sequence[Mapping[str, float]]) -> bool:
    hot = any((adiabatic_rise(study, run) or 0.0) >= MEDIUM for run in runs)
    return hot or any(condition.dimension == units.PRESSURE for condition in study.conditions)


def _and(words: Sequence[str], last: str = "and") -> str:
    return " ".join([", ".join(words[:-1]), last, words[-1]]) if len(words) > 1 else words[0]
