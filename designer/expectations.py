"""What a plan is expected to bring, beside other plans: the second half of the run sheet.

Figures come from virtual studies and carry one standard error each; they are printed to the digits
that this error supports.
"""

from __future__ import annotations

from collections.abc import Mapping

from designer import wording
from designer.outcomes import Inseparable, Plan, Rating
from designer.reasons import sentences
from designer.records import Study
from designer.wording import WIDTH, clock, columns, wrapped

BULLET = "- "


def expectations(study: Study, plan: Plan, letters: Mapping[str, str]) -> list[str]:
    """Lines of the sheet from "what to expect" to the cautions. letters: of the candidates."""
    blocks = [
        _title("WHAT TO EXPECT"),
        _overall(study, plan),
        _by_law(study, plan, letters),
        _title("BESIDE OTHER PLANS") if plan.alternatives else [],
        _beside(study, plan),
        [line for sentence in sentences(study, plan) for line in wrapped(sentence)],
        _title("WHAT LIMITS THIS PLAN"),
        _limits(plan),
        _title("CAUTIONS"),
        [line for text in (*plan.cautions, *plan.warnings) for line in _bullet(text)],
    ]
    return [line for block in blocks for line in block]


def _title(words: str) -> list[str]:
    return ["", words] if words != "WHAT TO EXPECT" else ["-" * WIDTH, words]


def _bullet(text: str) -> list[str]:
    return wrapped(f"{BULLET}{text}", "  ", " " * 4)


def _overall(study: Study, plan: Plan) -> list[str]:
    rating, aim = plan.rating, study.aim
    told = [
        f"In {wording.percent(rating.top)} of {rating.studies} virtual studies the right law comes out on "
        f"top; in {wording.percent(rating.reach)} it reaches the probability of {aim.probability:g} asked "
        "for (among the listed candidates).",
        f"The right law ends with a mean probability of {wording.estimate(rating.mean_probability)} (mean of "
        f"its logarithm {wording.estimate(rating.log_score)}); information on which law holds "
        f"{wording.estimate(rating.information)} nat, {wording.percent(rating.information_share)} of what is "
        "to be known.",
    ]
    told += [
        f"{p.constant}: half of its 95 % range is {wording.percent(p.half_width)} on average under the true "
        f"law; the {100 * p.asked:g} % asked for is met in {wording.percent(p.met)} of studies."
        for p in rating.precision
    ]
    if rating.free_order is not None:
        told.append(
            "The free-order alternative, when a listed law is true, ends with a mean probability of "
            f"{wording.estimate(rating.free_order)} among all candidates."
        )
    if len(plan.runs) > 1:
        gains = wording.listed(f"{run.number}: {wording.estimate(run.gain)}" for run in plan.runs)
        told.append(
            f"Worth added by each run to those before it: run {gains} (worth: share of what is to be known "
            "about the law, weighed against the precision asked for)."
        )
    return [line for text in told for line in _bullet(text)]


def _by_law(study: Study, plan: Plan, letters: Mapping[str, str]) -> list[str]:
    """One row for each candidate as the true law."""
    rating = plan.rating
    reach, spreads = dict(rating.reach_by_law), rating.spreads
    head = ["if this is true", "on top", f"reaches {study.aim.probability:g}", "SE of ln constant"]
    rows = []
    for name, top in rating.top_by_law:
        mine = [f"{s.constant} {wording.estimate(s.spread)}" for s in spreads if s.candidate == name]
        shown = ", ".join(mine) or wording.NONE
        rows.append(
            [f"{letters.get(name, ' ')} {name}", wording.percent(top), wording.percent(reach[name]), shown]
        )
    return ["", *columns(head, rows)]


def _beside(study: Study, plan: Plan) -> list[str]:
    """This plan and every alternative in one table; broken limits named below the row."""
    if not plan.alternatives:
        return []
    constants = [precision.constant for precision in plan.rating.precision]
    head = ["", "on top", f"reaches {study.aim.probability:g}", "mean P(right)"]
    head += [*(f"{name} within" for name in constants), "time"]
    ratings = (plan.rating, *plan.alternatives)
    table = columns(head, [_row(rating, constants) for rating in ratings])
    lines = []
    for number, line in enumerate(table):
        lines.append(line)
        broken = ratings[number - 1].broken if 0 < number <= len(ratings) else ()
        if broken:
            lines += wrapped(f"breaks limits: {'; '.join(broken)}", " " * 6, " " * 8)
    return lines


def _row(rating: Rating, constants: list[str]) -> list[str]:
    widths = {p.constant: wording.percent(p.half_width) for p in rating.precision}
    return [
        rating.name,
        wording.percent(rating.top),
        wording.percent(rating.reach),
        wording.estimate(rating.mean_probability),
        *(widths.get(name, wording.NONE) for name in constants),
        clock(rating.total_time, "h"),
    ]


def _limits(plan: Plan) -> list[str]:
    told = [f"It lies at {plan.binding}." if plan.binding else "No limit of the study holds it back."]
    told += [_together(pair) for pair in plan.inseparable]
    told.append(
        "Rounding to times and amounts a person would write costs "
        f"{wording.estimate(plan.rounding)} of its worth."
    )
    told += [
        f"Local {local.kind} (Fisher information at the middle of the beliefs in '{local.candidate}', a "
        f"sample as the unit, errors of the run left out): {local.value:.4g}; no plan within these limits is "
        f"more than {100 * local.margin:.2g} % better by this measure."
        for local in plan.local
    ]
    told += [_trouble(rating) for rating in (plan.rating, *plan.alternatives) if _troubled(rating)]
    if not any(_troubled(rating) for rating in (plan.rating, *plan.alternatives)):
        told.append("Numerical trouble: none, in this plan or in those beside it.")
    return [line for text in told for line in _bullet(text)]


def _together(pair: Inseparable) -> str:
    start = (
        f"'{pair.first}' and '{pair.second}' predict the same on the levers offered: no schedule of these "
        "runs separates them. "
    )
    if not pair.levers:
        return start + "Freeing one of the fixed conditions would not either; another kind of reading might."
    amounts = [f"{name} by {'10 K' if name == 'temperature' else 'a factor of 2'}" for name in pair.levers]
    return start + f"Vary {wording.listed(amounts, 'or')}: that would."


def _troubled(rating: Rating) -> bool:
    return bool(rating.doubtful or rating.repaired or rating.unsolved)


def _trouble(rating: Rating) -> str:
    told = [
        f"{rating.doubtful} of {rating.studies} virtual studies rest on a probability still in doubt",
        f"{rating.repaired} evidences were computed again by quadrature",
        *(f"{count} draws of '{name}' could not be solved" for name, count in rating.unsolved),
    ]
    return f"Numerical trouble ('{rating.name}'): {'; '.join(told)}."
