"""JSON documents of ``new``, ``check`` and of errors: what they hold is described in docs/json.md."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict
from math import isfinite
from pathlib import Path
from typing import Any

from designer import units
from designer.errors import Problem
from designer.findings import Budget, Checkup, HalfLife, KnownConstant, LawFound, Range, ReadAs
from designer.outcomes import Curve
from designer.records import Equation, Study

VERSION = 1


def error_document(problems: Iterable[Problem], source: str = "") -> dict[str, Any]:
    """What went wrong: one entry per problem, with key, found, expected and advice."""
    return {
        "document": "aliquot error",
        "version": VERSION,
        "source": source,
        "problems": [asdict(problem) for problem in problems],
    }


def new_document(file: Path, template: str) -> dict[str, Any]:
    """What ``new`` wrote."""
    return {"document": "aliquot new", "version": VERSION, "study": str(file), "template": template}


def check_document(study: Study, found: Checkup, figure: Path | None) -> dict[str, Any]:
    """Everything the sheet of ``check`` says. Times in s, other values in the unit that stands beside
    them; null where a time is never reached."""
    return {
        "document": "aliquot check",
        "version": VERSION,
        "title": found.title,
        "question": found.question,
        "middle": _conditions(study, found.middle),
        "first_sample_s": found.first_sample,
        "longest_run_s": found.longest_run,
        "candidates": [_law(study, law, found.time_unit) for law in found.laws],
        "curves": [_curve(study, curve) for curve in found.curves],
        "budgets": [_budget(budget) for budget in found.budgets],
        "read_as": [_read_as(line) for line in found.read_as],
        "defaults": [_read_as(line) for line in found.defaults],
        "warnings": list(found.warnings),
        "cautions": list(found.cautions),
        "figure": None if figure is None else str(figure),
    }


def _conditions(study: Study, conditions: Iterable[tuple[str, float]]) -> dict[str, Any]:
    found = {}
    for name, value in conditions:
        unit = study.condition(name).unit
        found[name] = {"value": units.convert(value, unit), "unit": unit}
    return found


def _law(study: Study, law: LawFound, time_unit: str) -> dict[str, Any]:
    return {
        "name": law.candidate.name,
        "free_order": law.candidate.free_order,
        "belief": law.belief,
        "belief_after_pilots": law.after,
        "own_equation": law.candidate.overrides,
        "steps": [{**_equation(step.equation), "rate": step.text} for step in law.candidate.steps],
        "constants": [_constant(constant, time_unit) for constant in law.constants],
        "half_life_of": law.reactant,
        "half_life": _half_life(study, law.half_life),
        "half_life_shortest": None if law.fastest is None else _half_life(study, law.fastest),
        "half_life_longest": None if law.slowest is None else _half_life(study, law.slowest),
        "gone_at_first_sample": law.gone_at_first,
        "gone_at_longest_run": law.gone_at_end,
        "draws": law.draws,
        "unsolved": law.unsolved,
    }


def _equation(equation: Equation) -> dict[str, Any]:
    return {
        "name": equation.name,
        "equation": equation.text,
        "stoichiometry": dict(equation.stoichiometry),
    }


def _constant(constant: KnownConstant, time_unit: str) -> dict[str, Any]:
    unit = constant.unit or units.unit_of(constant.dimension, time_unit)
    reference = constant.reference_temperature
    return {
        "name": constant.name,
        "unit_deduced": units.unit_of(constant.dimension, time_unit),
        "unit": unit,
        "stated": constant.stated,
        "range_90": _range(constant.value, unit),
        "range_90_after_pilots": None if constant.after is None else _range(constant.after, unit),
        "activation_energy_kJ_per_mol": None
        if constant.energy is None
        else _range(constant.energy, "kJ/mol"),
        "reference_temperature_K": reference,
    }


def _range(value: Range, unit: str) -> dict[str, float | None]:
    ends = {"low": value.low, "middle": value.middle, "high": value.high}
    return {name: units.convert(x, unit) if isfinite(x) else None for name, x in ends.items()}


def _half_life(study: Study, found: HalfLife) -> dict[str, Any]:
    return {
        "conditions": _conditions(study, found.conditions),
        "seconds_range_90": _range(found.time, "s"),
        "reached": found.reached,
        "horizon_s": found.horizon,
    }


def _curve(study: Study, curve: Curve) -> dict[str, Any]:
    unit = next(reading.unit for reading in study.readings if reading.name == curve.reading)
    fans = {"middle": curve.middle, "low": curve.low, "high": curve.high}
    return {
        "candidate": curve.candidate,
        "reading": curve.reading,
        "unit": unit,
        "times_s": list(curve.times),
        **{name: [units.convert(x, unit) for x in values] for name, values in fans.items()},
    }


def _budget(budget: Budget) -> dict[str, Any]:
    return {
        "candidate": budget.candidate,
        "reading": budget.reading,
        "unit": budget.unit,
        "time_s": budget.time,
        "left": budget.left,
        "mean": units.convert(budget.mean, budget.unit),
        "error_1_sd": units.convert(budget.deviation, budget.unit),
        "shares": [
            {
                "source": share.source,
                "error_1_sd": units.convert(share.deviation, budget.unit),
                "share_of_variance": share.share,
            }
            for share in budget.shares
        ],
    }


def _read_as(line: ReadAs) -> dict[str, str]:
    return {"where": line.where, "written": line.written, "meaning": line.meaning}
