"""What the instrument reads: mean and variance of every reading of a run, under one candidate.

``law(study, candidate)`` joins beliefs, trajectory and readings into one pure function

    read(u, z, conditions, times) -> Signal(mean, variance, trouble)

    u           (structural,)  coordinates shared by all runs: constants, activation energies, noise
                               levels, errors of shared stocks; each N(0, 1)
    z           (errors,)      coordinates of one run: its own errors; each N(0, 1)
    conditions  (conditions,)  in the order of ``Study.conditions``, internal units
    times       (times,)       s
    mean, variance             (times, signals); variance does not hold the errors of the run

Within a run the variance is absolute^2 + (relative * mean)^2 + (time error * d mean / dt)^2, at the
candidate's own mean. Relative errors of a run multiply by exp(SD * z).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from math import log
from typing import NamedTuple

from designer import beliefs, expressions, trajectories
from designer.arrays import FUNCTIONS, Array, jax, jnp
from designer.records import Z90, Candidate, Constant, Reading, RunErrors, Study

GAS_CONSTANT = 8.31446261815324  # J/(mol K), exact since the 2019 SI
ROOM = 298.15  # K, where a study states no temperature (nothing then depends on it)
TINY_VARIANCE = 1e-30  # keeps the logarithm finite where a study states no absolute error


class Signal(NamedTuple):
    mean: Array
    variance: Array
    trouble: Array


@dataclass(frozen=True)
class Channel:
    """One column of the readings: what is read, and its limits (infinite where there are none)."""

    reading: Reading
    lowest: float
    highest: float


@dataclass(frozen=True)
class Law:
    """One candidate made ready for the kernel (module docstring). structural and errors name the
    coordinates; ``second_order`` says that nested forward derivatives of ``read`` are cheap."""

    candidate: Candidate
    structural: tuple[str, ...]
    errors: tuple[str, ...]
    channels: tuple[Channel, ...]
    read: Callable[[Array, Array, Array, Array], Signal]
    concentrations: Callable[[Array, Array, Array, Array], dict[str, Array]]  # arguments as read's
    constants: Callable[[Array, Array], dict[str, Array]]  # (u, temperature) -> values
    second_order: bool
    path: str


def channels(study: Study) -> tuple[Channel, ...]:
    """The columns every candidate's readings have: the study's readings, then conversions of pilots."""
    columns = [_channel(reading) for reading in study.readings]
    columns += [_channel(reading) for reading in pilot_readings(study)]
    return tuple(columns)


def _channel(reading: Reading) -> Channel:
    lowest = -jnp.inf if reading.lowest is None else reading.lowest
    highest = jnp.inf if reading.highest is None else reading.highest
    return Channel(reading, float(lowest), float(highest))


def pilot_readings(study: Study) -> tuple[Reading, ...]:
    """A reading of conversion for each kind of pilot observation (species and error)."""
    kinds = dict.fromkeys((pilot.species, pilot.error) for pilot in study.pilots)
    dimensionless = (0.0,) * 7
    found = []
    for name, error in kinds:
        text = f"1 - [{name}]/[{name}]_0"
        signal = expressions.parse(text)
        found.append(Reading(f"conversion of {name}", signal, text, dimensionless, "", absolute=error))
    return tuple(found)


def law(study: Study, candidate: Candidate) -> Law:
    """Join beliefs, trajectory and readings of ``candidate`` (see the module docstring)."""
    columns = channels(study)
    structural = _structural(study, candidate)
    errors = _errors(study, candidate)
    scope = frozenset(c.name for c in study.conditions if not c.is_species) | frozenset(dict(study.constants))
    path = trajectories.choose(candidate, scope)
    constants = _constants(candidate, structural)
    solve = _solver(study, candidate, structural, errors, path, constants)
    read = _reader(study, candidate, structural, columns, solve)

    def concentrations(u: Array, z: Array, conditions: Array, times: Array) -> dict[str, Array]:
        return solve(u, z, conditions, times).now

    return Law(
        candidate,
        structural,
        errors,
        columns,
        read,
        concentrations,
        constants,
        path.second_order,
        path.name,
    )


def _structural(study: Study, candidate: Candidate) -> tuple[str, ...]:
    names = []
    for constant in candidate.constants:
        if constant.belief.family != "exact":
            names.append(constant.name)
        energy = constant.activation_energy
        if energy is not None and energy.family != "exact":
            names.append(f"activation energy of {constant.name}")
    names += [f"noise of {reading.name}" for reading in study.readings if reading.uncertain]
    names += [f"stock of {prepared.name}" for prepared in study.run_errors.prepared if prepared.stock > 0]
    return tuple(names)


def _errors(study: Study, candidate: Candidate) -> tuple[str, ...]:
    stated = study.run_errors
    names = [f"preparation of {p.name}" for p in stated.prepared if p.each_run > 0]
    if stated.rate > 0:
        names.append("rate")
    if stated.temperature > 0 and any(c.activation_energy for c in candidate.constants):
        names.append("temperature")
    if stated.time_zero > 0:
        names.append("time zero")
    for kind, entries in (("scale", stated.scale), ("baseline", stated.baseline)):
        names += [f"{kind} {name}".strip() for name, size in entries if size > 0]
    return tuple(names)


def _constants(
    candidate: Candidate, structural: tuple[str, ...]
) -> Callable[[Array, Array], dict[str, Array]]:
    place = {name: index for index, name in enumerate(structural)}

    def coordinate(u: Array, name: str) -> Array:
        return u[place[name]] if name in place else jnp.zeros(())

    def one(constant: Constant, u: Array, temperature: Array) -> Array:
        at_reference = beliefs.value(constant.belief, coordinate(u, constant.name))
        stated, reference = constant.activation_energy, constant.reference_temperature
        if stated is None or reference is None:  # a study states both or neither
            return at_reference
        energy = beliefs.value(stated, coordinate(u, f"activation energy of {constant.name}"))
        inverse = 1 / temperature - 1 / reference
        return at_reference * jnp.exp(-energy / GAS_CONSTANT * inverse)

    def values(u: Array, temperature: Array) -> dict[str, Array]:
        return {constant.name: one(constant, u, temperature) for constant in candidate.constants}

    return values


class _Course(NamedTuple):
    """A run as it really went: what the signals are made of."""

    values: dict[str, Array]
    start: dict[str, Array]
    now: dict[str, Array]
    rates: tuple[Array, ...]
    factor: Array
    clock: Array
    error: Callable[[str, float], Array]
    trouble: Array


def _solver(
    study: Study,
    candidate: Candidate,
    structural: tuple[str, ...],
    errors: tuple[str, ...],
    path: trajectories.Path,
    constants: Callable[[Array, Array], dict[str, Array]],
) -> Callable[[Array, Array, Array, Array], _Course]:
    stated = study.run_errors
    shared = {name: index for index, name in enumerate(structural)}
    own = {name: index for index, name in enumerate(errors)}
    everything = _all_species(study)

    def solve(u: Array, z: Array, conditions: Array, times: Array) -> _Course:
        def error(name: str, size: float) -> Array:
            return size * z[own[name]] if name in own else jnp.zeros(())

        values, start = _prepared(study, conditions, u, shared, error)
        temperature = values.get("temperature", jnp.asarray(ROOM)) + error("temperature", stated.temperature)
        values["temperature"] = temperature
        values.update(constants(u, temperature))
        start = {name: start.get(name, jnp.zeros(())) for name in everything}
        clock = jnp.maximum(times + error("time zero", stated.time_zero), 0.0)
        factor = jnp.exp(error("rate", stated.rate))
        curve = path.solve(values, start, factor, clock)
        now = {name: curve.concentrations.get(name, start[name] + 0 * clock) for name in everything}
        return _Course(values, start, now, curve.rates, factor, clock, error, curve.trouble)

    return solve


def _reader(
    study: Study,
    candidate: Candidate,
    structural: tuple[str, ...],
    columns: tuple[Channel, ...],
    solve: Callable[[Array, Array, Array, Array], _Course],
) -> Callable[[Array, Array, Array, Array], Signal]:
    shared = {name: index for index, name in enumerate(structural)}

    def read(u: Array, z: Array, conditions: Array, times: Array) -> Signal:
        course = solve(u, z, conditions, times)
        means, variances = [], []
        for column in columns:
            mean, slope = _one_signal(column, candidate, course)
            noise = _noise(column.reading, u, shared)
            mean, variance = _instrument(column.reading, study.run_errors, mean, slope, course.error, noise)
            means.append(mean)
            variances.append(variance)
        return Signal(jnp.stack(means, axis=-1), jnp.stack(variances, axis=-1), course.trouble)

    return read


def _all_species(study: Study) -> tuple[str, ...]:
    named = [name for candidate in study.candidates for name in candidate.species]
    named += [condition.name for condition in study.conditions if condition.is_species]
    return tuple(dict.fromkeys(named))


def _prepared(
    study: Study,
    conditions: Array,
    u: Array,
    shared: dict[str, int],
    error: Callable[[str, float], Array],
) -> tuple[dict[str, Array], dict[str, Array]]:
    """Bare values and starting concentrations as they really are in this run."""
    sizes = {prepared.name: prepared for prepared in study.run_errors.prepared}
    values: dict[str, Array] = {name: jnp.asarray(value) for name, value in study.constants}
    start: dict[str, Array] = {}
    for index, condition in enumerate(study.conditions):
        amount = conditions[index]
        if condition.name in sizes:
            size = sizes[condition.name]
            wrong = error(f"preparation of {condition.name}", size.each_run)
            stock = shared.get(f"stock of {condition.name}")
            if stock is not None:
                wrong = wrong + size.stock * u[stock]
            amount = amount * jnp.exp(wrong)
        (start if condition.is_species else values)[condition.name] = amount
    return values, start


def _noise(reading: Reading, u: Array, shared: dict[str, int]) -> Array | float:
    index = shared.get(f"noise of {reading.name}")
    if index is None or reading.uncertain is None:
        return 1.0
    return jnp.exp(u[index] * log(reading.uncertain) / Z90)


def _one_signal(column: Channel, candidate: Candidate, course: _Course) -> tuple[Array, Array]:
    """Mean signal before the errors of the instrument, and its slope in time (signal/s)."""
    reading, clock, now = column.reading, course.clock, course.now
    change = {name: jnp.zeros_like(clock) for name in now}
    for step, rate in zip(candidate.steps, course.rates, strict=True):
        for name, number in step.equation.stoichiometry:
            change[name] = change[name] + number * rate

    def value(node: expressions.Node, at: dict[str, Array], scope: dict[str, Array]) -> Array:
        names = {**course.values, **scope}
        return expressions.evaluate(node, names, at, course.start, FUNCTIONS, jnp.power) + 0 * clock

    def law_rate(at: dict[str, Array], time: Array) -> Array:
        return course.factor * value(candidate.steps[0].rate, at, {"time": time})

    def signal(at: dict[str, Array], time: Array, rate: Array) -> Array:
        return value(reading.signal, at, {"time": time, "rate": rate})

    onward = jnp.ones_like(clock)
    turning = jnp.zeros_like(clock)
    if "rate" in expressions.names(reading.signal):
        turning = jax.jvp(law_rate, (now, clock), (change, onward))[1]
    return jax.jvp(signal, (now, clock, course.rates[0]), (change, onward, turning))


def _instrument(
    reading: Reading,
    stated: RunErrors,
    mean: Array,
    slope: Array,
    error: Callable[[str, float], Array],
    noise: Array | float,
) -> tuple[Array, Array]:
    for name, size in stated.scale:
        if name in ("", reading.name) and not reading.name.startswith("conversion of "):
            stretch = jnp.exp(error(f"scale {name}".strip(), size))
            mean, slope = mean * stretch, slope * stretch
    for name, size in stated.baseline:
        if name in ("", reading.name) and not reading.name.startswith("conversion of "):
            mean = mean + error(f"baseline {name}".strip(), size)
    within = noise**2 * (reading.absolute**2 + (reading.relative * mean) ** 2)
    variance = within + (reading.time_error * slope) ** 2 + TINY_VARIANCE
    return mean, variance
