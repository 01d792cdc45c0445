"""The shape of a study file: every key, its kind and its meaning. No chemistry is judged here.

One model per table; the descriptions make the reference in ``docs/study-file.md``.
"""

from __future__ import annotations

import math
from typing import Annotated, Any

from pydantic import BaseModel, BeforeValidator, ConfigDict, Discriminator, Field, Tag
from pydantic_core import PydanticCustomError

LARGEST = 1e300  # nothing measured is larger
MOST = 10_000  # runs or samples


def _kind(expected: str, accept: Any) -> BeforeValidator:
    def check(value: Any) -> Any:
        if isinstance(value, float) and not math.isfinite(value):
            raise PydanticCustomError("kind", "{expected}", {"expected": f"{expected} that is finite"})
        if not accept(value):
            raise PydanticCustomError("kind", "{expected}", {"expected": expected})
        return value

    return BeforeValidator(check)


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and abs(value) < LARGEST


def _is_count(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= MOST


Text = Annotated[Any, _kind("a text in quotes", lambda value: isinstance(value, str))]
Number = Annotated[Any, _kind("a number", _is_number)]
Count = Annotated[Any, _kind(f"a whole number from 1 to {MOST}", _is_count)]
Truth = Annotated[Any, _kind("true or false", lambda value: isinstance(value, bool))]
Share = Annotated[Any, _kind("a number or false", lambda value: value is False or _is_number(value))]
Value = Annotated[
    Any,
    _kind(
        'a number or a text with a unit such as "5 mM"',
        lambda value: _is_number(value) or isinstance(value, str),
    ),
]


def _shape(value: Any) -> str:
    return "<table>" if isinstance(value, dict | BaseModel) else "<value>"


def _list_or_text(value: Any) -> str:
    return "<list>" if isinstance(value, list) else "<text>"


class Table(BaseModel):
    model_config = ConfigDict(extra="forbid")


class ReactionTable(Table):
    name: Text | None = Field(None, description="name of the step; needed where there are several")
    equation: Text | None = Field(
        None, description='what is used up and made, e.g. "ester + 2 hydroxide -> acid + phenol"'
    )


class ConditionTable(Table):
    from_: Value | None = Field(None, alias="from", description="lowest value on offer")
    to: Value | None = Field(None, description="highest value on offer")
    one_of: list[Value] | None = Field(None, description="the only values on offer, instead of a range")


Condition = Annotated[
    Annotated[ConditionTable, Tag("<table>")] | Annotated[Value, Tag("<value>")], Discriminator(_shape)
]


class EnergyTable(Table):
    value: Value | None = Field(None, description='middle of the belief, e.g. "75 kJ/mol"')
    within: Value | None = Field(None, description="half-width of the 90 % range")
    low: Value | None = Field(None, description="5 % point, with `high` instead of `value` and `within`")
    high: Value | None = Field(None, description="95 % point")


Energy = Annotated[
    Annotated[EnergyTable, Tag("<table>")] | Annotated[Value, Tag("<value>")], Discriminator(_shape)
]
Observations = Annotated[
    Annotated[list[Text], Tag("<list>")] | Annotated[Text, Tag("<text>")], Discriminator(_list_or_text)
]


class ConstantTable(Table):
    value: Value | None = Field(None, description="middle of the belief; alone: known exactly")
    give_or_take: Number | None = Field(
        None,
        description="a factor: 90 % of the belief lies between value/factor and value*factor (log-normal)",
    )
    within: Value | None = Field(None, description="half-width of the 90 % range (normal, cut at 0)")
    low: Value | None = Field(None, description="5 % point of the belief")
    high: Value | None = Field(
        None,
        description="95 % point; with `low` log-normal; for an order normal, cut at 0; "
        "for a fraction logit-normal",
    )
    uniform: list[Value] | None = Field(
        None, description="two ends between which all values are equally likely"
    )
    fraction: Truth | None = Field(None, description="true: the constant lies between 0 and 1")
    half_life: Value | None = Field(
        None, description="time for the first-named reactant to fall to half under the whole law, at `at`"
    )
    pilot: Observations | None = Field(
        None,
        description='observations made before, e.g. "40 % conversion after 30 min"; seen by every candidate',
    )
    error: Value | None = Field(None, description="error of a pilot's conversion, 1 SD, absolute (3 %)")
    at: dict[str, Value] | None = Field(
        None,
        description="conditions of the half-life or pilot; `temperature` is where the constant is stated",
    )
    activation_energy: Energy | None = Field(
        None, description="belief about the activation energy; the constant then follows Arrhenius' law"
    )


Constant = Annotated[
    Annotated[ConstantTable, Tag("<table>")] | Annotated[Value, Tag("<value>")], Discriminator(_shape)
]


class CandidateTable(Table):
    """Every further key names a constant of the candidate's rates."""

    model_config = ConfigDict(extra="allow")
    __pydantic_extra__: dict[str, Constant] = Field(init=False)

    name: Text | None = Field(None, description="what the candidate is called in every output")
    equation: Text | None = Field(
        None, description="an equation of its own, instead of the one in `[[reactions]]`"
    )
    rate: Text | None = Field(None, description='rate of reaction, e.g. "k*[ester]*[hydroxide]"')
    rates: dict[str, Text] | None = Field(
        None, description="rate of each named step; a step that is not named does not happen"
    )
    belief: Number | None = Field(None, description="chance before any reading; all together 1")


class ReadingTable(Table):
    name: Text | None = Field(None, description="name of the reading (the signal, where absent)")
    signal: Text | None = Field(None, description='what is read, e.g. "[ester]" or "eps*path*[dye]"')
    relative: Value | None = Field(None, description="error as a share of the signal, 1 SD")
    absolute: Value | None = Field(None, description="error in the unit of the signal, 1 SD")
    time_error: Value | None = Field(None, description="error of the time of one sample, 1 SD")
    lowest: Value | None = Field(None, description='below it only "less than" is known')
    highest: Value | None = Field(None, description='above it only "more than" is known')
    every: Value | None = Field(None, description="recorded continuously, one reading in this time")
    memory: Value | None = Field(
        None,
        description="correlation time of a continuous signal; readings nearer than twice this are thinned",
    )
    uncertain: Number | None = Field(
        None, description="factor (90 %) by which the stated errors may be wrong; makes them an unknown"
    )


class PreparedTable(Table):
    stock: Value | None = Field(
        None, description="relative error shared by all runs made from one stock, 1 SD"
    )
    each_run: Value | None = Field(None, description="relative error made anew in each run, 1 SD")


Prepared = Annotated[
    Annotated[PreparedTable, Tag("<table>")] | Annotated[Value, Tag("<value>")], Discriminator(_shape)
]
PerReading = Annotated[
    Annotated[dict[str, Value], Tag("<table>")] | Annotated[Value, Tag("<value>")], Discriminator(_shape)
]


class RunErrorsTable(Table):
    rate: Value | None = Field(None, description="one factor on every rate of a run, 1 SD")
    prepared: dict[str, Prepared] | None = Field(
        None, description="relative error of each starting amount; a bare value is `each_run`"
    )
    temperature: Value | None = Field(None, description="error of the bath in K, 1 SD")
    time_zero: Value | None = Field(None, description="error of the start of a run, 1 SD")
    scale: PerReading | None = Field(
        None, description="relative error of calibration, 1 SD; one for all readings or by name of reading"
    )
    baseline: PerReading | None = Field(
        None, description="offset in the unit of the signal, 1 SD; one for all readings or by name of reading"
    )


class PlanTable(Table):
    runs: Count | None = Field(None, description="runs to plan")
    samples: Count | None = Field(
        None, description="samples in each run (not needed for a continuous signal)"
    )
    assay_at_start: Truth | None = Field(
        None, description="true: one sample is the mixture at time zero, exempt from `first_sample`"
    )


class LimitsTable(Table):
    runs: Count | None = Field(None, description="most runs")
    samples_per_run: Count | None = Field(None, description="most samples in a run")
    samples_total: Count | None = Field(None, description="most samples in all")
    first_sample: Value | None = Field(None, description="no sample before this time")
    spacing: Value | None = Field(None, description="least time between two samples")
    longest_run: Value | None = Field(None, description="no sample after this time")
    setup_per_run: Value | None = Field(None, description="time each run costs beside its own length")
    booked: Value | None = Field(None, description="time there is for all runs together")


class AimTable(Table):
    probability: Number | None = Field(
        None, description="a law counts as settled when it holds this chance among the listed (0.95)"
    )
    chance: Number | None = Field(
        None, description="how often a study must get there, for the candidate that is hardest (0.9)"
    )
    precision: dict[str, Value] | None = Field(
        None, description="for each constant the half-width of its 95 % range, relative"
    )
    weight_on_law: Number | None = Field(
        None,
        description="telling apart against precision, where one must give: 1 only the law, 0 only precision",
    )


class PilotTable(Table):
    pilot: Observations | None = Field(None, description='e.g. "40 % conversion after 30 min", or a list')
    at: dict[str, Value] | None = Field(None, description="conditions of the pilot run")
    error: Value | None = Field(None, description="error of a conversion, 1 SD, absolute (3 %)")


class VesselTable(Table):
    volume: Value | None = Field(None, description="volume of a run")
    sample: Value | None = Field(None, description="volume of one sample")
    smallest_pipetted: Value | None = Field(None, description="least volume that is pipetted")


class HeatTable(Table):
    reaction: Value | None = Field(None, description="heat of reaction, negative when heat is given off")
    density: Value | None = Field(None, description="density of the mixture")
    heat_capacity: Value | None = Field(None, description="heat capacity of the mixture")


class CostsTable(Table):
    run: Value | None = Field(None, description="what a run costs, as a number or a time")
    sample: Value | None = Field(None, description="what a sample costs, in the same measure")


class StopTable(Table):
    least_runs: Count | None = Field(None, description="no stop before this many runs")
    most_runs: Count | None = Field(None, description="stop after this many runs")
    adequacy: Truth | None = Field(None, description="true: no stop while the readings fit no candidate")


class StudyTable(Table):
    """The whole file."""

    title: Text | None = Field(None, description="title of the study")
    question: Text | None = Field(None, description="what is to be found out, in words")
    free_order: Share | None = Field(
        None, description="belief of the free-order alternative (0.05); false leaves it out"
    )
    floors: list[Text] | None = Field(None, description="sets of least requirements to show in reports")
    reactions: list[ReactionTable] | None = Field(None, description="what reacts with what")
    conditions: dict[str, Condition] | None = Field(
        None, description="what a run starts from: a value is fixed, a range or list may be chosen from"
    )
    constants: dict[str, Value] | None = Field(
        None, description="known numbers that rates and signals use by name"
    )
    candidates: list[CandidateTable] | None = Field(None, description="the rate laws in question")
    readings: list[ReadingTable] | None = Field(
        None, description="what the instrument reads, with its errors"
    )
    run_errors: RunErrorsTable | None = Field(
        None, description="errors that all samples of a run share, 1 SD"
    )
    plan: PlanTable | None = Field(None, description="what `plan` fills, exactly")
    limits: LimitsTable | None = Field(None, description="ceilings; `justify` searches within them")
    aim: AimTable | None = Field(None, description="when the study has done its work")
    pilots: list[PilotTable] | None = Field(None, description="observations made before the study")
    caps: dict[str, Value] | None = Field(
        None, description="values never to be exceeded, by condition (solubility, relief valve, boiling)"
    )
    already_run: dict[str, Value] | None = Field(
        None, description="highest values run so far, by condition; for marks of caution"
    )
    stocks: dict[str, Value] | None = Field(None, description="concentrations of the stocks, by species")
    vessel: VesselTable | None = Field(None, description="volumes, for the run sheet")
    heat: HeatTable | None = Field(None, description="for marks of caution")
    costs: CostsTable | None = Field(None, description="weights of runs and samples")
    stop: StopTable | None = Field(None, description="the stopping rule")


# Keys that a reader may expect and that this version does not take, with what to do instead.
NOT_YET = {
    ("readings", "of_runs"): "every reading is taken in every run",
    ("readings", "at_times"): "every reading is taken from every sample",
}
