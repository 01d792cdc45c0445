"""The JSON document of a plan: one dictionary of plain values, versioned, every unit stated.

``docs/json.md`` names every key; a test holds the two together. Times are in the document's own
``time_unit``, conditions and readings in theirs; what is not defined is null.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import isfinite
from typing import Any

from designer import units
from designer.outcomes import Curve, Estimate, Plan, PlannedRun, Predicted, Rating, Sample
from designer.records import Run, Study

DOCUMENT, VERSION = "aliquot plan", 1

Json = dict[str, Any]


def plan_document(study: Study, plan: Plan) -> Json:
    """The document of a plan of ``study``, ready for ``json.dumps``."""
    return {
        "document": DOCUMENT,
        "version": VERSION,
        "title": plan.title,
        "question": study.question,
        "seed": plan.seed,
        "effort": [{"name": name, "count": count} for name, count in plan.effort],
        "versions": [{"name": name, "version": version} for name, version in plan.versions],
        "time_unit": study.time_unit,
        "readings": [{"name": r.name, "signal": r.text, "unit": r.unit} for r in study.readings],
        "candidates": _candidates(study, plan),
        "runs": [_planned(study, run) for run in plan.runs],
        "rating": _rating(study, plan.rating),
        "alternatives": [_rating(study, rating) for rating in plan.alternatives],
        "booked": _time(study, plan.booked),
        "limited_by": plan.binding,
        "inseparable": [
            {"first": pair.first, "second": pair.second, "levers": list(pair.levers)}
            for pair in plan.inseparable
        ],
        "lost_by_rounding": _estimate(plan.rounding),
        "local": [
            {"candidate": x.candidate, "kind": x.kind, "value": _number(x.value), "margin": _number(x.margin)}
            for x in plan.local
        ],
        "cautions": list(plan.cautions),
        "warnings": list(plan.warnings),
        "curves": [_curve(study, curve) for curve in plan.curves],
    }


def _number(value: float | None) -> float | None:
    """A number to ten digits, without the dust of conversion; None for what is not finite."""
    return float(f"{value:.10g}") if value is not None and isfinite(value) else None


def _estimate(figure: Estimate) -> Json:
    return {"value": _number(figure.value), "error": _number(figure.error)}


def _by_law(pairs: Sequence[tuple[str, Estimate]]) -> list[Json]:
    return [{"candidate": name, **_estimate(figure)} for name, figure in pairs]


def _time(study: Study, seconds: float | None) -> float | None:
    return None if seconds is None else _number(units.convert(seconds, study.time_unit))


def _candidates(study: Study, plan: Plan) -> list[Json]:
    beliefs = {name: (stated, after) for name, stated, after in plan.beliefs}
    found = []
    for candidate in study.candidates:
        stated, after = beliefs.get(candidate.name, (candidate.belief, candidate.belief))
        steps = [
            {"name": step.equation.name, "equation": step.equation.text, "rate": step.text}
            for step in candidate.steps
        ]
        found.append(
            {
                "name": candidate.name,
                "free_order": candidate.free_order,
                "own_equation": candidate.overrides,
                "steps": steps,
                "belief": _number(stated),
                "belief_after_pilots": _number(after),
            }
        )
    return found


def _conditions(study: Study, conditions: Sequence[tuple[str, float]]) -> Json:
    """Condition -> value and unit."""
    found = {}
    for name, value in conditions:
        unit = study.condition(name).unit
        found[name] = {"value": _number(units.convert(value, unit)), "unit": unit}
    return found


def _planned(study: Study, run: PlannedRun) -> Json:
    return {
        "number": run.number,
        "conditions": _conditions(study, run.conditions),
        "length": _time(study, run.length),
        "samples": [_sample(study, sample) for sample in run.samples],
        "portions": [
            {
                "name": portion.name,
                "stock": None
                if portion.stock is None
                else _number(units.convert(portion.stock, study.condition(portion.name).unit)),
                "volume_mL": _number(1e3 * portion.volume),
            }
            for portion in run.portions
        ],
        "marks": list(run.marks),
        "gain": _estimate(run.gain),
    }


def _sample(study: Study, sample: Sample) -> Json:
    return {
        "time": _time(study, sample.time),
        "purpose": sample.purpose,
        "predicted": [_predicted(study, predicted) for predicted in sample.predicted],
    }


def _reading_scale(study: Study, name: str) -> float:
    return units.scale(next(reading.unit for reading in study.readings if reading.name == name))[0]


def _predicted(study: Study, predicted: Predicted) -> Json:
    scale = _reading_scale(study, predicted.reading)
    return {
        "candidate": predicted.candidate,
        "reading": predicted.reading,
        "mean": _number(predicted.mean / scale),
        "error_1_sd": _number(predicted.error / scale),
        "censored": predicted.censored,
        "fraction_left": _number(predicted.left),
    }


def _curve(study: Study, curve: Curve) -> Json:
    scale = _reading_scale(study, curve.reading)
    values = {"middle": curve.middle, "low": curve.low, "high": curve.high}
    return {
        "run": curve.run,
        "candidate": curve.candidate,
        "reading": curve.reading,
        "times": [_time(study, time) for time in curve.times],
        **{name: [_number(value / scale) for value in row] for name, row in values.items()},
    }


def _scheduled(study: Study, run: Run) -> Json:
    return {
        "conditions": _conditions(study, run.conditions),
        "times": [_time(study, time) for time in run.times],
        "length": _time(study, run.length),
    }


def _rating(study: Study, rating: Rating) -> Json:
    return {
        "name": rating.name,
        "schedule": [_scheduled(study, run) for run in rating.schedule.runs],
        "virtual_studies": rating.studies,
        "worth": _estimate(rating.worth),
        "on_top": _estimate(rating.top),
        "on_top_by_law": _by_law(rating.top_by_law),
        "reach": _estimate(rating.reach),
        "reach_by_law": _by_law(rating.reach_by_law),
        "mean_probability": _estimate(rating.mean_probability),
        "log_score": _estimate(rating.log_score),
        "information_nat": _estimate(rating.information),
        "information_share": _estimate(rating.information_share),
        "precision": [
            {
                "constant": p.constant,
                "asked": p.asked,
                "half_width": _estimate(p.half_width),
                "met": _estimate(p.met),
            }
            for p in rating.precision
        ],
        "se_of_ln": [
            {"candidate": s.candidate, "constant": s.constant, **_estimate(s.spread)} for s in rating.spreads
        ],
        "free_order": None if rating.free_order is None else _estimate(rating.free_order),
        "total_time": _time(study, rating.total_time),
        "broken_limits": list(rating.broken),
        "in_doubt": rating.doubtful,
        "recomputed": rating.repaired,
        "unsolved": [{"candidate": name, "count": count} for name, count in rating.unsolved],
    }
