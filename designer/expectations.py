"""What a plan is expected to bring, beside other plans: the second half of the run sheet.

Figures come from virtual studies and carry one standard error each; they are printed to the digits
that this error supports.
"""

from __future__ import annotations

from collections.abc import Mapping

from designer import wording
from designer.outcomes import Estimate, Inseparable, Plan, Rating
from designer.reasons import sentences
from designer.records import Study
from designer.wording import WIDTH, clock, columns, wrapped

BULLET = "- "


def expectations(study: Study, plan: Plan, letters: Mapping[str, str]) -> list[str]:
    """Lines of the sheet from what to expect to the cautions. letters: of the candidates."""
    blocks = [
        _title("WHAT TO EXPECT"),
        _overall(study, plan),
        _by_law(study, plan, letters),
        _title("BESIDE OTHER PLANS") if plan.alternatives else [],
        _beside(study, plan),
        [line for sentence in sentences(study, plan) for line in wrapped(sentence)],
        _title("WHAT LIMITS THIS PLAN"),
        _limits(plan),
        _title("WARNINGS") if plan.warnings else [],
        [line for text in plan.warnings for line in _bullet(text)],
        _title("CAUTIONS") if plan.cautions else [],
        [line for text in plan.cautions for line in _bullet(text)],
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
    told = [
        f"It lies at {' and '.join(plan.binding.rsplit(', ', 1))}."
        if plan.binding
        else "No limit of the study holds it back."
    ]
    told += [_together(pair) for pair in plan.inseparable]
    told.append(
        "Rounding to times and amounts a person would write changes its worth by "
        f"{wording.estimate(Estimate(-plan.rounding.value, plan.rounding.error))}."
    )
    told += _trouble((plan.rating, *plan.alternatives))
    return [line for text in told for line in _bullet(text)] + _local(plan)


def _local(plan: Plan) -> list[str]:
    """Local criteria as a table: one row for each candidate, one column for each measure."""
    if not plan.local:
        return []
    kinds = list(dict.fromkeys(local.kind for local in plan.local))
    cells = {(x.candidate, x.kind): f"{x.value:.3g} ({_more(x.margin)})" for x in plan.local}
    names = dict.fromkeys(local.candidate for local in plan.local)
    told = (
        "Local Fisher information at the middle of the beliefs (a sample as the unit, beliefs and errors of "
        "the runs left out; in brackets how much better any other plan within the limits could be at most, "
        "by this measure):"
    )
    head = ["candidate", *(" for ".join(kind.split(" ", 1)) for kind in kinds)]
    rows = [[name, *(cells.get((name, kind), wording.NONE) for kind in kinds)] for name in names]
    return [*_bullet(told), *columns(head, rows, indent="    ")]


def _more(margin: float) -> str:
    """``6.3 %`` better, or from twice as good on ``11 times`` as good."""
    return f"{100 * margin:.2g} %" if margin < 1 else f"{1 + margin:.2g} times"


def _together(pair: Inseparable) -> str:
    start = (
        f"'{pair.first}' and '{pair.second}' predict the same on the levers offered: no schedule of these "
        "runs separates them. "
    )
    if not pair.levers:
        return start + "Freeing one of the fixed conditions would not either; another kind of reading might."
    amounts = [f"{name} by {'10 K' if name == 'temperature' else 'a factor of 2'}" for name in pair.levers]
    return start + f"Vary {wording.listed(amounts, 'or')}: that would."


def _trouble(ratings: tuple[Rating, ...]) -> list[str]:
    """Everything numerical that went less than smoothly, counted plan by plan."""
    if not any(rating.doubtful or rating.repaired or rating.unsolved for rating in ratings):
        return ["Numerical trouble: none, in this plan or in those beside it."]
    told = [
        f"'{rating.name}' {rating.doubtful} of {rating.studies} ({rating.repaired})" for rating in ratings
    ]
    unsolved = [
        f"{count} of '{name}' under '{rating.name}'" for rating in ratings for name, count in rating.unsolved
    ]
    return [
        "Numerical trouble, virtual studies whose probabilities are still in doubt (in brackets: evidences "
        f"computed again by quadrature): {', '.join(told)}.",
        f"Draws whose curve could not be computed and are left out: {', '.join(unsolved) or 'none'}.",
    ]
