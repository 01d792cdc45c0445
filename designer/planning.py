"""Plan a study: search, write down as a person would, rate beside what people usually do, and explain."""

from __future__ import annotations

import platform
from collections.abc import Callable, Sequence
from dataclasses import replace
from importlib import metadata
from itertools import count as numbers

import numpy as np

from designer import purposes, rating, search, steepest, units, usual, virtual
from designer.allowed import CLOSE, Allowed, allowed
from designer.arrays import jax, jnp
from designer.cautions import cautions, marks
from designer.errors import CallError
from designer.layout import schedule_of
from designer.likelihood import Design
from designer.outcomes import Curve, Estimate, Plan, PlannedRun, Portion, Predicted, Rating, Sample
from designer.records import Aim, Run, Schedule, Study
from designer.rounding import rounded
from designer.search import Effort, Found, Hill, Proposal, design_of
from designer.virtual import Bench

Progress = Callable[[str, int, int], None]

STUDIES = 400  # virtual studies of each listed candidate behind every figure of the plan
USUAL_STUDIES = 128  # the same for the schedules it is compared with
FAN_DRAWS = 200
FAN_POINTS = 60
CALM_FACTOR, CALM_KELVIN = 2.0, 10.0  # steps beyond what has been shown calm (common practice)
ON_GRID = (0.05, 0.35, 1.0)  # parts of a continuous run whose readings are shown on the sheet


def plan(
    study: Study,
    seed: int = 1,
    weight_on_law: float | None = None,
    precision_by: str | None = None,
    compare: Sequence[Schedule] = (),
    effort: Effort | None = None,
    studies: int = STUDIES,
    progress: Progress | None = None,
) -> Plan:
    """Choose the runs and samples of ``study.plan`` and say what they will do.

    seed: the same seed on the same machine and versions gives the same plan. weight_on_law (0 to 1)
    overrides ``[aim]``. precision_by: "D" (all constants) or "c" (the asked ones, the default).
    compare: other schedules to rate beside it. studies: virtual studies of each candidate behind
    every figure. progress(stage, done, total) is called now and then.

    Raises InfeasibleError where the limits leave no plan, CallError for a weight outside 0..1.
    """
    study = _aimed(study, weight_on_law)
    effort = effort or Effort()
    tell = progress or (lambda stage, done, total: None)
    offer = allowed(study)
    most = max([study.plan.samples, *(len(run.times) for other in compare for run in other.runs)])
    bench = virtual.ready(study, most, precision_by=precision_by or "c")
    found = search.best_plan(bench, offer, seed, effort, advance=tell)
    written = rounded(offer, found.proposal)
    hill = Hill(bench, offer, effort.studies, seed, "search")
    exact, final = hill.look(found.proposal), hill.look(written)
    rows, gains, notes = _in_order(hill, final)
    proposal = _rows(written, rows)
    design = design_of(bench, proposal)
    schedule = schedule_of(study, bench.axes, design, "this plan")
    own, others = _ratings(bench, offer, schedule, compare, seed, studies, tell)
    tell("explaining", 0, 1)
    runs = _planned_runs(bench, design, schedule, gains)
    result = Plan(
        title=study.title,
        seed=seed,
        versions=versions(),
        rating=own,
        runs=runs,
        alternatives=others,
        binding=binding(offer, schedule),
        inseparable=purposes.inseparable(bench, design, seed),
        cautions=(*cautions(study, [dict(run.conditions) for run in schedule.runs]), *notes),
        rounding=Estimate(exact.worth - final.worth, own.worth.error / np.sqrt(max(studies, 1))),
        curves=_curves(bench, schedule, seed),
        beliefs=tuple(
            (law.candidate.name, float(a), float(b))
            for law, a, b in zip(bench.laws, bench.prior, bench.standing, strict=True)
        ),
        booked=study.limits.booked,
        effort=(*((name, int(value)) for name, value in vars(effort).items()), ("final", studies)),
        warnings=study.warnings,
    )
    tell("explaining", 1, 1)
    return result


def _aimed(study: Study, weight_on_law: float | None) -> Study:
    if weight_on_law is None:
        return study
    if not 0 <= weight_on_law <= 1:
        raise CallError(f"the weight on the law lies between 0 and 1; {weight_on_law:g} does not")
    aim: Aim = replace(study.aim, weight_on_law=weight_on_law)
    return replace(study, aim=aim)


def versions() -> tuple[tuple[str, str], ...]:
    """Versions on which the same seed gives the same plan."""
    names = ("aliquot", "jax", "jaxlib", "numpy", "scipy", "diffrax")
    found = []
    for name in names:
        try:
            found.append((name, metadata.version(name)))
        except metadata.PackageNotFoundError:
            found.append((name, "not installed as a package"))
    return (("python", platform.python_version()), *found)


def _rows(proposal: Proposal, rows: Sequence[int]) -> Proposal:
    some = list(rows)
    return Proposal(proposal.conditions[some], proposal.times[some], proposal.lengths[some])


def _in_order(hill: Hill, final: Found) -> tuple[list[int], list[Estimate], list[str]]:
    """Runs most valuable first: each the one that adds most worth to those before it. Where heat is a
    concern, no run steps beyond what earlier ones have shown by more than the calm step."""
    runs = len(final.proposal.conditions)
    careful = hill.offer.study.heat.reaction is not None
    chosen: list[int] = []
    gains: list[Estimate] = []
    notes: list[str] = []
    before = _worth_of(hill, final, [])
    while len(chosen) < runs:
        left = [run for run in range(runs) if run not in chosen]
        calm = [run for run in left if not careful or _is_calm(hill, final.proposal, chosen, run)]
        if not calm:
            calm = [min(left, key=lambda run: _boldness(hill, final.proposal, chosen, run))]
            notes.append(
                f"run {len(chosen) + 1} steps further than what has been run by more than the usual step "
                "(a factor of 2 in concentration, 10 K): no order of these runs avoids it. "
                "Put a milder run before it"
            )
        worths = {run: _worth_of(hill, final, [*chosen, run]) for run in calm}
        best = max(calm, key=lambda run: worths[run][0])
        if careful and len(calm) < len(left):
            text = "the order keeps each run within a factor of 2 (10 K) of what earlier runs have shown"
            if text not in notes:
                notes.append(text)
        difference = worths[best][1] - before[1]
        gains.append(
            Estimate(worths[best][0] - before[0], float(np.sqrt(len(difference)) * difference.std()))
        )
        before = worths[best]
        chosen.append(best)
    return chosen, gains, notes


def _worth_of(hill: Hill, final: Found, rows: list[int]) -> tuple[float, np.ndarray]:
    """Worth (and its value in each study) if only ``rows`` of the proposal's runs were done."""
    bench = hill.bench
    design = design_of(bench, final.proposal)
    mask = np.array(design.mask)
    carried = len(bench.axes.carried.times)
    for row in range(len(final.proposal.conditions)):
        if row not in rows:
            mask[carried + row] = 0.0
    assert hill.truths is not None
    scores = virtual.conclude(bench, Design(design.conditions, design.times, mask), hill.truths)
    value, each, _, _ = steepest.worth(bench, scores)
    return value, each


def _boldness(hill: Hill, proposal: Proposal, chosen: list[int], run: int) -> float:
    """Largest step of a run beyond what has been shown, 1 = just at the calm step."""
    study = hill.offer.study
    steps = [0.0]
    for index, condition in enumerate(study.conditions):
        shown = dict(study.already_run or ()).get(condition.name)
        earlier = [float(proposal.conditions[row, index]) for row in chosen]
        earlier += [] if shown is None else [shown]
        if not earlier:
            continue
        here, highest = float(proposal.conditions[run, index]), max(earlier)
        if condition.name == "temperature":
            steps.append((here - highest) / CALM_KELVIN)
        elif highest > 0:
            steps.append(here / highest / CALM_FACTOR)
    return max(steps)


def _is_calm(hill: Hill, proposal: Proposal, chosen: list[int], run: int) -> bool:
    if chosen or hill.offer.study.already_run:
        return _boldness(hill, proposal, chosen, run) <= 1 + CLOSE
    mildest = proposal.conditions[:, [c.is_species for c in hill.offer.study.conditions]].prod(1)
    return bool(mildest[run] <= mildest.min() * (1 + CLOSE))  # nothing run yet: begin with the mildest


def _ratings(
    bench: Bench,
    offer: Allowed,
    schedule: Schedule,
    compare: Sequence[Schedule],
    seed: int,
    studies: int,
    tell: Progress,
) -> tuple[Rating, tuple[Rating, ...]]:
    """The plan, the usual schedules and any compared ones, on fresh draws."""
    others = usual_schedules(bench, offer)
    others += [replace(other, name=other.name or f"compared plan {i}") for i, other in enumerate(compare, 1)]
    runs = max(len(other.runs) for other in [schedule, *others])
    everything = [schedule, *others]
    counter = numbers(1)
    found = []
    for other in everything:
        design = rating.padded(bench, other, runs)
        count = studies if other is schedule else min(studies, USUAL_STUDIES)
        truths = virtual.draw(bench, design, count, seed, "final")
        found.append(rating.rate(bench, other, design, truths, free_order=other is schedule))
        tell("rating plans", next(counter), len(everything))
    return found[0], tuple(found[1:])


def usual_schedules(bench: Bench, offer: Allowed) -> list[Schedule]:
    """The usual schedules (``usual``) as records, written as a person would."""
    found = []
    for name, conditions, times in usual.usual_schedules(bench, offer):
        proposal = Proposal(conditions, times, search.run_lengths(bench, offer))
        design = design_of(bench, rounded(offer, proposal))
        found.append(schedule_of(offer.study, bench.axes, design, name))
    return found


def binding(offer: Allowed, schedule: Schedule) -> str:
    """The limits the plan lies on, in words."""
    study = offer.study
    found = []
    taken = [[t for t in run.times if t > 0 or not offer.at_start] for run in schedule.runs]
    if offer.first > 0 and any(row and row[0] <= offer.first * (1 + 1e-6) for row in taken):
        found.append("the earliest possible sample")
    if offer.spacing > 0 and any(
        len(row) > 1 and np.diff(row).min() <= offer.spacing * (1 + 1e-6) for row in taken
    ):
        found.append("the least time between samples")
    if any(run.end >= offer.longest * (1 - 1e-6) for run in schedule.runs):
        found.append("the longest run")
    booked = study.limits.booked
    total = sum(study.limits.setup_per_run + run.end for run in schedule.runs)
    if booked is not None and total >= 0.98 * booked:
        found.append("the time booked")
    for lever in offer.levers:
        values = [dict(run.conditions)[lever.name] for run in schedule.runs]
        if max(values) >= lever.high * (1 - 1e-6):
            found.append(f"the highest {lever.name}")
        if min(values) <= lever.low * (1 + 1e-6):
            found.append(f"the lowest {lever.name}")
    return ", ".join(found)


def _planned_runs(
    bench: Bench, design: Design, schedule: Schedule, gains: list[Estimate]
) -> tuple[PlannedRun, ...]:
    study = bench.study
    table = purposes.purposes(bench, design)
    carried = len(bench.axes.carried.times)
    signals = [_middle_signal(bench, index, design) for index in bench.listed]
    planned = []
    for number, run in enumerate(schedule.runs):
        row = carried + number
        places = _shown_places(bench, run)
        samples = tuple(
            Sample(
                float(np.asarray(design.times)[row, place]),
                _predicted(bench, signals, dict(run.conditions), row, place),
                _in_words(bench, table[number][place], dict(run.conditions)),
            )
            for place in places
        )
        planned.append(
            PlannedRun(
                number + 1,
                run.conditions,
                samples,
                run.length,
                portions(study, dict(run.conditions)),
                marks(study, dict(run.conditions)),
                gains[number],
            )
        )
    return tuple(planned)


def _shown_places(bench: Bench, run: Run) -> list[int]:
    """Places on the time axis that the sheet shows: every sample, and a few readings of a continuous run."""
    places = list(range(len(run.times)))
    if run.length is not None:
        last = int((bench.axes.grid <= run.length * (1 + 1e-12)).sum()) - 1
        places += sorted({bench.axes.samples + round(part * last) for part in ON_GRID})
    return places


def _middle_signal(bench: Bench, index: int, design: Design) -> tuple[np.ndarray, np.ndarray]:
    law = bench.laws[index]
    u, z = jnp.zeros(len(law.structural)), jnp.zeros((len(design.times), len(law.errors)))
    read = jax.jit(jax.vmap(law.read, in_axes=(None, 0, 0, 0)))
    signal = read(u, z, design.conditions, design.times)
    return np.asarray(signal.mean), np.sqrt(np.asarray(signal.variance))


def _start_of(text: str, conditions: dict[str, float]) -> float | None:
    """Starting concentration behind a reading that is a bare [X], else None."""
    name = text.strip()
    bare = name.startswith("[") and name.endswith("]") and name.count("[") == 1
    start = conditions.get(name[1:-1].strip()) if bare else None
    return start or None


def _predicted(
    bench: Bench,
    signals: list[tuple[np.ndarray, np.ndarray]],
    conditions: dict[str, float],
    row: int,
    place: int,
) -> tuple[Predicted, ...]:
    found = []
    for index, (mean, error) in zip(bench.listed, signals, strict=True):
        law = bench.laws[index]
        for column, reading in enumerate(bench.study.readings):
            axes = bench.axes.recorded if place >= bench.axes.samples else bench.axes.sampled
            if not axes[column]:
                continue
            value = float(mean[row, place, column])
            channel = law.channels[column]
            side = "below" if value < channel.lowest else "above" if value > channel.highest else ""
            start = _start_of(reading.text, conditions)
            left = None if start is None else value / start
            name = law.candidate.name
            found.append(Predicted(name, reading.name, value, float(error[row, place, column]), side, left))
    return tuple(found)


def _in_words(bench: Bench, purpose: purposes.Purpose, conditions: dict[str, float]) -> str:
    if purpose.pair is None:
        names = [name for name, _ in bench.asked]
        return f"pins down {names[0]}" if names else "pins down the rate constant"
    first, second = (bench.laws[bench.listed[i]].candidate.name for i in purpose.pair)
    reading = bench.study.readings[min(purpose.signal, len(bench.study.readings) - 1)]
    start = _start_of(reading.text, conditions)
    if start is not None:
        a, b = (100 * value / start for value in purpose.values)
        return f"separates {first} from {second}: {_two(a, b)[0]} against {_two(a, b)[1]} % left"
    a, b = (units.convert(value, reading.unit) for value in purpose.values)
    unit = f" {reading.unit}" if reading.unit else ""
    return f"separates {first} from {second}: {_two(a, b)[0]} against {_two(a, b)[1]}{unit}"


def _two(a: float, b: float) -> tuple[str, str]:
    """Two numbers with as few digits as still tell them apart (two significant figures at least)."""
    for digits in range(2, 7):
        first, second = f"{a:.{digits}g}", f"{b:.{digits}g}"
        if first != second:
            break
    return tuple(f"{float(x):g}" for x in (first, second))  # type: ignore[return-value]


def portions(study: Study, conditions: dict[str, float]) -> tuple[Portion, ...]:
    """What to pipette of each stock into the vessel, and the solvent to make it up (L)."""
    volume = study.vessel.volume
    if not study.stocks or volume is None:
        return ()
    found = [
        Portion(name, stock, conditions[name] / stock * volume)
        for name, stock in study.stocks
        if name in conditions
    ]
    return (*found, Portion("solvent", None, volume - sum(portion.volume for portion in found)))


def _curves(bench: Bench, schedule: Schedule, seed: int) -> tuple[Curve, ...]:
    """Curve fans of the listed candidates in every run."""
    found = []
    for index in bench.listed:
        law = bench.laws[index]
        u = virtual.truth_draws(bench, index, FAN_DRAWS, virtual.stream(seed, law.candidate, "curves"))
        z = jnp.zeros(len(law.errors))
        read = jax.jit(
            jax.vmap(lambda x, c, t, law=law, z=z: law.read(x, z, c, t).mean, in_axes=(0, None, None))
        )
        for number, run in enumerate(schedule.runs, 1):
            times = np.linspace(0, run.end * 1.05, FAN_POINTS)
            at = np.array([value for _, value in run.conditions])
            means = np.asarray(read(np.vstack([np.zeros((1, u.shape[1])), u]), at, times))
            for column, reading in enumerate(bench.study.readings):
                values = means[:, :, column]
                low, middle, high = np.nanquantile(values[1:], [0.05, 0.5, 0.95], axis=0)
                found.append(
                    Curve(
                        number,
                        law.candidate.name,
                        reading.name,
                        tuple(times.tolist()),
                        tuple(middle.tolist()),
                        tuple(low.tolist()),
                        tuple(high.tolist()),
                    )
                )
    return tuple(found)
