"""The reference of the study file, written from its schema (``docs/study-file.md``)."""

from __future__ import annotations

from designer import schema, units

_TABLES: tuple[tuple[str, str, type[schema.Table]], ...] = (
    ("The file itself", "Keys that stand before the first table, and the tables.", schema.StudyTable),
    (
        "`[[reactions]]`",
        "Rate of reaction and rate of change of a species differ by the number before the species.",
        schema.ReactionTable,
    ),
    (
        "`[conditions]`",
        "One key for each. A condition that occurs in an equation is a species, given as a concentration; "
        "any other (catalyst, pressure) keeps its own unit and is used bare. `temperature` is one too. "
        "A bare value is fixed; otherwise a table of these keys:",
        schema.ConditionTable,
    ),
    (
        "`[[candidates]]`",
        "Every further key is a constant of the candidate's rates, stated as in the next table.",
        schema.CandidateTable,
    ),
    (
        "A constant",
        "A bare value is exact. Otherwise a table with one of these sets of keys: `value` and "
        "`give_or_take`; `value` and `within`; `low` and `high`; `uniform`; `half_life` and `give_or_take`.",
        schema.ConstantTable,
    ),
    ("`activation_energy`", "A bare value is exact; a belief is normal.", schema.EnergyTable),
    ("`[[readings]]`", "Every reading is taken from every sample.", schema.ReadingTable),
    ("`[run_errors]`", "Errors that all samples of a run share.", schema.RunErrorsTable),
    ("`[run_errors.prepared]`", "One key for each condition that is prepared.", schema.PreparedTable),
    ("`[plan]`", "", schema.PlanTable),
    ("`[limits]`", "Only `longest_run` is needed.", schema.LimitsTable),
    ("`[aim]`", "", schema.AimTable),
    ("`[[pilots]]`", "An observation is seen by every candidate, with its own error.", schema.PilotTable),
    ("`[vessel]`", "", schema.VesselTable),
    ("`[heat]`", "", schema.HeatTable),
    ("`[costs]`", "", schema.CostsTable),
    ("`[stop]`", "", schema.StopTable),
)

_HEAD = """\
# The study file

One TOML file, `study.toml`, in a folder of its own. A value with a unit stands in quotes, `"5 mM"`; a
plain number needs none. This page is written from the schema of the program; a test keeps the two alike.

## Expressions

`[X]` is the concentration of a species now, `[X]_0` at the start of the run. A bare name is a constant of
the candidate, a condition that is no species, an entry of `[constants]`, or `time`, `temperature` and, in
signals of a study with one reaction, `rate`. There are `+ - * / ^`, brackets, `exp`, `log` and `sqrt`.
Every expression is checked for units, and the unit of each constant follows from where it stands. An
exponent that is itself unknown needs a base without unit: `r*([A]/c_ref)^n`, with `c_ref` in `[constants]`.

## Three meanings of plus and minus

The factor or width of a belief spans 90 %. An error of measurement is one standard deviation. A range in
a report is 95 %.

## Beliefs

| given | distribution |
|---|---|
| `value`, `give_or_take` | log-normal: median `value`, 90 % between `value`/factor and `value`*factor |
| `value`, `within` | normal, 90 % between `value` - `within` and `value` + `within`; \
cut at 0 where `value` is above 0 |
| `low`, `high` | 5 and 95 % points of a log-normal; for an order (a constant in an exponent) \
of a normal, cut at 0; with `fraction = true` of a logit-normal |
| `uniform` | every value between the two ends alike |
| `half_life`, `give_or_take` | log-normal, from the half-life of the whole law at `at`, \
its other constants at their middles |
| a value alone | exact |

Conditions that `at` leaves out stand at their fixed value or at the middle of their range. A law under
which the reactant cannot fall to half, or not within the whole 90 % range, is refused with the number.

The free-order alternative, `r0*product of ([X]/x_ref)^n_X`, is added to studies of one reaction and takes 5 %
of the belief; the listed candidates share the rest in the ratios given.

## Units

{known}. Micro is `u` or `µ`. `degC` is a temperature, never a difference; a difference is in `K`. A month is
30.4 d. Products and powers are written `L/(mol*s)`, `1/s`, `mol^0.5`.

## Not available yet

The hours and days of work, the injection queue, how long a quenched sample keeps, and readings of some
runs or times only.
"""


def text() -> str:
    """The whole page, as Markdown."""
    parts = [_HEAD.replace("{known}", " ".join(f"`{unit}`" for unit in (*units.known(), "degC")))]
    parts += [_section(*table) for table in _TABLES]
    return "\n".join(parts)


def _section(title: str, words: str, table: type[schema.Table]) -> str:
    rows = [
        f"| `{field.alias or name}` | {(field.description or '').replace('|', ' ')} |"
        for name, field in table.model_fields.items()
    ]
    lines = [f"## {title}", "", *([words, ""] if words else []), "| key | meaning |", "|---|---|", *rows, ""]
    return "\n".join(lines)
