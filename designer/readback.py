"""What was read as what: the values of the file beside their meaning, and the defaults that were taken.

Three meanings of plus-minus, always named: a belief's factor or width spans 90 %, an error is one
standard deviation (1 SD), a reported range is 95 %.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from typing import Any

from designer import units
from designer.findings import ReadAs
from designer.records import Aim, Condition, Pilot, Prepared, Reading, Study


def read_as(study: Study) -> tuple[ReadAs, ...]:
    """Values of the file and what they were read as, in the order of conditions, constants, pilots,
    readings, errors of the run, limits."""
    raw = _raw(study)
    return (
        *(_condition(c, raw) for c in study.conditions),
        *_constants(study, raw),
        *(_pilot(study, pilot) for pilot in study.pilots),
        *(line for reading in study.readings for line in _reading(study, reading)),
        *_run_errors(study),
        *_limits(study, raw),
        *_caps(study),
    )


def _raw(study: Study) -> dict[str, Any]:
    return tomllib.loads(study.source.replace("\r\n", "\n")) if study.source else {}


# conditions and constants


def _condition(condition: Condition, raw: dict[str, Any]) -> ReadAs:
    written = raw.get("conditions", {}).get(condition.name, "")
    kind = "starting concentration" if condition.is_species else "not a species, stands bare in rates"
    if condition.levels:
        offer = f"one of {', '.join(_internal(x, condition) for x in condition.levels)}"
    elif condition.is_fixed:
        offer = f"fixed at {_internal(condition.low, condition)}"
    else:
        low, high = (_internal(x, condition) for x in (condition.low, condition.high))
        offer = f"to be chosen from {low} to {high}"
    kind = "temperature" if condition.name == "temperature" else kind
    return ReadAs(f"conditions.{condition.name}", _written(written), f"{kind}, {offer}")


def _internal(value: float, condition: Condition) -> str:
    """In internal units, so that a slip of a prefix shows."""
    if condition.dimension == units.TEMPERATURE:
        return f"{value:.2f} K"
    return units.show(value, units.unit_of(condition.dimension), 4)


def _written(value: Any) -> str:
    if isinstance(value, dict):
        if "one_of" in value:
            return f"one of {', '.join(str(x) for x in value['one_of'])}"
        return f"{value.get('from')} to {value.get('to')}"
    return str(value)


def _constants(study: Study, raw: dict[str, Any]) -> Iterator[ReadAs]:
    known = dict(study.constants)
    for name, written in raw.get("constants", {}).items():
        if name in known:
            yield ReadAs(f"constants.{name}", str(written), f"{_constant(known[name], written)}, exact")


def _constant(value: float, written: Any) -> str:
    dimension = units.read(written).dimension if isinstance(written, str) else units.NONE
    unit = units.unit_of(dimension)
    return f"{value:.6g} {unit}".strip() if unit else f"{value:.6g}, a plain number"


# pilots and readings


def _pilot(study: Study, pilot: Pilot) -> ReadAs:
    seen = ", ".join(
        f"{100 * share:.3g} % of {pilot.species} gone after {units.show(time, study.time_unit)}"
        for time, share in pilot.readings
    )
    at = ", ".join(f"{name} {units.show(value, study.condition(name).unit)}" for name, value in pilot.at)
    error = f"each conversion with an error of {100 * pilot.error:.3g} % of full conversion (1 SD)"
    return ReadAs("pilot", seen, f"a run at {at}, seen by every candidate; {error}")


def _reading(study: Study, reading: Reading) -> Iterator[ReadAs]:
    where = f"readings '{reading.name}'"
    unit = reading.unit or "a plain number"
    yield ReadAs(f"{where} signal", reading.text, f"read in {unit}")
    errors = []
    if reading.relative:
        errors.append(f"{100 * reading.relative:.3g} % of the reading")
    if reading.absolute:
        errors.append(units.show(reading.absolute, reading.unit))
    if reading.time_error:
        errors.append(f"{units.show(reading.time_error, 's')} in the time of sampling")
    doubt = f", which may be wrong by a factor of {reading.uncertain:g} (90 %)" if reading.uncertain else ""
    yield ReadAs(f"{where} errors", " and ".join(errors), f"1 SD, afresh for every sample{doubt}")
    yield from _trusted(where, reading)
    if reading.every:
        apart = max(reading.every, 2 * (reading.memory or 0.0))
        shown = units.show(apart, study.time_unit)
        meaning = f"recorded throughout; readings {shown} apart count, nearer ones add nothing"
        yield ReadAs(f"{where} every", f"every {units.show(reading.every, 's')}", meaning)


def _trusted(where: str, reading: Reading) -> Iterator[ReadAs]:
    if reading.lowest is not None:
        shown = units.show(reading.lowest, reading.unit)
        yield ReadAs(f"{where} lowest", shown, "below it only 'less than' is known")
    if reading.highest is not None:
        shown = units.show(reading.highest, reading.unit)
        yield ReadAs(f"{where} highest", shown, "above it only 'more than' is known")


# errors of the run, limits, caps


def _run_errors(study: Study) -> Iterator[ReadAs]:
    stated = study.run_errors
    shared = "1 SD, one for all samples of a run"
    if stated.rate:
        yield ReadAs("run_errors.rate", f"{100 * stated.rate:.3g} %", f"{shared}: a factor on every rate")
    for prepared in stated.prepared:
        yield ReadAs(f"run_errors.prepared.{prepared.name}", *_preparation(prepared))
    if stated.temperature:
        yield ReadAs(
            "run_errors.temperature", f"{stated.temperature:.3g} K", f"{shared}: the true temperature"
        )
    if stated.time_zero:
        yield ReadAs(
            "run_errors.time_zero", units.show(stated.time_zero, "s"), f"{shared}: the start of the clock"
        )
    for name, size in stated.scale:
        meaning = f"{shared}: a factor on {_of(name)}"
        yield ReadAs("run_errors.scale", f"{100 * size:.3g} %", meaning)
    for name, size in stated.baseline:
        unit = next(r.unit for r in study.readings if name in ("", r.name))
        yield ReadAs("run_errors.baseline", units.show(size, unit), f"{shared}: added to {_of(name)}")


def _of(name: str) -> str:
    return f"'{name}'" if name else "the signal"


def _preparation(prepared: Prepared) -> tuple[str, str]:
    parts = []
    if prepared.each_run:
        parts.append((f"{100 * prepared.each_run:.3g} % each run", "afresh for every run"))
    if prepared.stock:
        parts.append((f"{100 * prepared.stock:.3g} % of the stock", "one for all runs made from the stock"))
    if not parts:
        return "0 %", "prepared without error"
    return " and ".join(p[0] for p in parts), "1 SD, " + " and ".join(p[1] for p in parts)


def _limits(study: Study, raw: dict[str, Any]) -> Iterator[ReadAs]:
    """Times only, where the unit in which times are shown differs from the one written."""
    for key, written in raw.get("limits", {}).items():
        value = getattr(study.limits, key, None)
        if not isinstance(written, str) or value is None:
            continue
        shown = units.show(value, study.time_unit, 6)
        if shown != written.strip():
            yield ReadAs(f"limits.{key}", written, shown)


def _caps(study: Study) -> Iterator[ReadAs]:
    for name, cap in study.caps:
        unit = study.condition(name).unit
        yield ReadAs(f"caps.{name}", units.show(cap, unit), "never exceeded, whatever it would teach")


# defaults


def defaults(study: Study) -> tuple[ReadAs, ...]:
    """What the file does not say, and what is taken instead."""
    raw = _raw(study)
    return tuple(ReadAs(where, "", meaning) for where, meaning in _defaults(study, raw))


def _defaults(study: Study, raw: dict[str, Any]) -> Iterator[tuple[str, str]]:
    if len(study.listed) > 1 and not any("belief" in table for table in raw.get("candidates", [])):
        yield "belief", f"equal for all {len(study.listed)} candidates"
    free = next((c for c in study.candidates if c.free_order), None)
    if free is not None and "free_order" not in raw:
        yield "free_order", f"a law of free orders, for 'none of these', with {100 * free.belief:.3g} %"
    aim = raw.get("aim", {})
    if "probability" not in aim:
        yield "aim.probability", f"a law counts as settled at {Aim.probability:g}"
    if "chance" not in aim:
        yield "aim.chance", f"{Aim.chance:g} of studies should get there, for the hardest candidate"
    if "precision" not in aim:
        yield "aim.precision", "no constant is asked for by name"
    if "weight_on_law" not in aim:
        yield "aim.weight_on_law", f"{Aim.weight_on_law:g} on telling laws apart, the rest on precision"
    yield from _limit_defaults(study, raw)


def _limit_defaults(study: Study, raw: dict[str, Any]) -> Iterator[tuple[str, str]]:
    given = raw.get("limits", {})
    if "first_sample" not in given:
        yield "limits.first_sample", "the first sample may come at time zero"
    if "spacing" not in given and any(not reading.every for reading in study.readings):
        yield "limits.spacing", "samples may follow each other at once"
    if "setup_per_run" not in given:
        yield "limits.setup_per_run", "setting up a run takes no time"
    if "booked" not in given:
        yield "limits.booked", "no booking: the time a plan takes is not limited"
    if "samples" not in raw.get("plan", {}):
        yield "plan.samples", f"{study.plan.samples} readings of the longest run, as recorded"
    if not study.run_errors.prepared and any(c.is_species for c in study.conditions):
        yield "run_errors.prepared", "starting concentrations are prepared without error"
