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
    """Everything the sheet of ``check`` says. Times in the document's own ``time_unit``, other values in the
    unit that stands beside them; null where a time is never reached."""
    unit = found.time_unit
    return {
        "document": "aliquot check",
        "version": VERSION,
        "title": found.title,
        "question": found.question,
        "middle": _conditions(study, found.middle),
        "time_unit": unit,
        "first_sample": _number(found.first_sample, unit),
        "longest_run": _number(found.longest_run, unit),
        "candidates": [_law(study, law, unit) for law in found.laws],
        "curves": [_curve(study, curve, unit) for curve in found.curves],
        "budgets": [_budget(budget, unit) for budget in found.budgets],
        "read_as": [_read_as(line) for line in found.read_as],
        "defaults": [_read_as(line) for line in found.defaults],
        "warnings": list(found.warnings),
        "cautions": list(found.cautions),
        "figure": None if figure is None else str(figure),
    }


def _number(value: float, unit: str = "") -> float | None:
    """An internal value in ``unit`` to ten digits, without the dust of conversion; None for infinity."""
    return float(f"{units.convert(value, unit):.10g}") if isfinite(value) else None


def _conditions(study: Study, conditions: Iterable[tuple[str, float]]) -> dict[str, Any]:
    found = {}
    for name, value in conditions:
        unit = study.condition(name).unit
        found[name] = {"value": _number(value, unit), "unit": unit}
    return found


def _law(study: Study, law: LawFound, time_unit: str) -> dict[str, Any]:
    return {
        "name": law.candidate.name,
        "free_order": law.candidate.free_order,
        "belief": _number(law.belief),
        "belief_after_pilots": _number(law.after),
        "own_equation": law.candidate.overrides,
        "steps": [{**_equation(step.equation), "rate": step.text} for step in law.candidate.steps],
        "constants": [_constant(constant, time_unit) for constant in law.constants],
        "half_life_of": law.reactant,
        "half_life": _half_life(study, law.half_life, time_unit),
        "half_life_shortest": None if law.fastest is None else _half_life(study, law.fastest, time_unit),
        "half_life_longest": None if law.slowest is None else _half_life(study, law.slowest, time_unit),
        "gone_at_first_sample": _number(law.gone_at_first),
        "gone_at_longest_run": _number(law.gone_at_end),
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
        "reference_temperature_K": None if reference is None else _number(reference),
    }


def _range(value: Range, unit: str) -> dict[str, float | None]:
    ends = {"low": value.low, "middle": value.middle, "high": value.high}
    return {name: _number(x, unit) for name, x in ends.items()}


def _half_life(study: Study, found: HalfLife, time_unit: str) -> dict[str, Any]:
    return {
        "conditions": _conditions(study, found.conditions),
        "range_90": _range(found.time, time_unit),
        "reached": _number(found.reached),
        "horizon": _number(found.horizon, time_unit),
    }


def _curve(study: Study, curve: Curve, time_unit: str) -> dict[str, Any]:
    unit = next(reading.unit for reading in study.readings if reading.name == curve.reading)
    fans = {"middle": curve.middle, "low": curve.low, "high": curve.high}
    return {
        "candidate": curve.candidate,
        "reading": curve.reading,
        "unit": unit,
        "times": [_number(t, time_unit) for t in curve.times],
        **{name: [_number(x, unit) for x in values] for name, values in fans.items()},
    }


def _budget(budget: Budget, time_unit: str) -> dict[str, Any]:
    return {
        "candidate": budget.candidate,
        "reading": budget.reading,
        "unit": budget.unit,
        "time": _number(budget.time, time_unit),
        "left": _number(budget.left),
        "mean": _number(budget.mean, budget.unit),
        "error_1_sd": _number(budget.deviation, budget.unit),
        "shares": [
            {
                "source": share.source,
                "error_1_sd": _number(share.deviation, budget.unit),
                "share_of_variance": _number(share.share),
                "comes_with": share.comes_with,
            }
            for share in budget.shares
        ],
    }


def _read_as(line: ReadAs) -> dict[str, str]:
    return {"where": line.where, "written": line.written, "meaning": line.meaning}
