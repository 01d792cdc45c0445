"""A plan as tables for a notebook. Units stand in the column names."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from designer import units
from designer.outcomes import Plan, Predicted, Rating
from designer.records import Study

if TYPE_CHECKING:
    from pandas import DataFrame


def _named(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit else name


def samples(study: Study, plan: Plan) -> DataFrame:
    """One row for each sample, reading and candidate: conditions of the run, time, what is predicted
    (``predicted`` and ``error``, 1 SD of the instrument, in the unit of ``unit``), what is left, and
    what the sample is for."""
    from pandas import DataFrame

    rows = []
    for run in plan.runs:
        conditions = {
            _named(name, study.condition(name).unit): units.convert(value, study.condition(name).unit)
            for name, value in run.conditions
        }
        for number, sample in enumerate(run.samples, 1):
            time = {_named("time", study.time_unit): units.convert(sample.time, study.time_unit)}
            start = {"run": run.number, "sample": number, **time, **conditions}
            rows += [
                {**start, **_predicted(study, predicted), "purpose": sample.purpose}
                for predicted in sample.predicted
            ]
    return DataFrame(rows)


def _predicted(study: Study, predicted: Predicted) -> dict[str, Any]:
    unit = next(reading.unit for reading in study.readings if reading.name == predicted.reading)
    scale = units.scale(unit)[0]
    return {
        "candidate": predicted.candidate,
        "reading": predicted.reading,
        "unit": unit,
        "predicted": predicted.mean / scale,
        "error": predicted.error / scale,
        "censored": predicted.censored,
        "fraction left": predicted.left,
    }


def ratings(study: Study, plan: Plan) -> DataFrame:
    """One row for this plan and each other one: figures of ``outcomes.Rating`` and, beside each, its
    Monte-Carlo error (1 SE). Half-widths are fractions; SE of ln k are by candidate and constant."""
    from pandas import DataFrame

    return DataFrame([_rating(study, rating) for rating in (plan.rating, *plan.alternatives)])


def _rating(study: Study, rating: Rating) -> dict[str, Any]:
    figures = {
        "on top": rating.top,
        "reach": rating.reach,
        "mean probability": rating.mean_probability,
        "log score": rating.log_score,
        "information (nat)": rating.information,
        "information share": rating.information_share,
        **{f"on top, {name}": figure for name, figure in rating.top_by_law},
        **{f"reach, {name}": figure for name, figure in rating.reach_by_law},
        **{f"half-width of {p.constant}": p.half_width for p in rating.precision},
        **{f"half-width of {p.constant} met": p.met for p in rating.precision},
        **{f"SE of ln {s.constant}, {s.candidate}": s.spread for s in rating.spreads},
    }
    row: dict[str, Any] = {"plan": rating.name, "virtual studies": rating.studies}
    for name, figure in figures.items():
        row |= {name: figure.value, f"{name}, error": figure.error}
    row[_named("total time", study.time_unit)] = units.convert(rating.total_time, study.time_unit)
    return row | {"broken limits": "; ".join(rating.broken), "in doubt": rating.doubtful}
