"""The run sheet's contents: what each run and sample is, what it should read, what it is for, what binds."""

from __future__ import annotations

import numpy as np

from designer import purposes, units, virtual
from designer.allowed import Allowed
from designer.arrays import jax, jnp
from designer.cautions import marks
from designer.likelihood import Design
from designer.outcomes import Curve, Estimate, PlannedRun, Portion, Predicted, Sample
from designer.records import Run, Schedule, Study
from designer.virtual import Bench

FAN_DRAWS = 200
FAN_POINTS = 60
ON_GRID = (0.05, 0.35, 1.0)  # parts of a continuous run whose readings are shown on the sheet


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


def planned_runs(
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
        shown, unit = [100 * value / start for value in purpose.values], " % left"
    else:
        shown = [units.convert(value, reading.unit) for value in purpose.values]
        unit = f" {reading.unit}" if reading.unit else ""
    ends = [
        "less"
        if reading.lowest is not None and value <= reading.lowest
        else "more"
        if reading.highest is not None and value >= reading.highest
        else ""
        for value in purpose.values
    ]
    words = [f"{end} than {text}" if end else text for end, text in zip(ends, _two(*shown), strict=True)]
    return f"separates {first} from {second}: {words[0]} against {words[1]}{unit}"


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


def curves(bench: Bench, schedule: Schedule, seed: int) -> tuple[Curve, ...]:
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
