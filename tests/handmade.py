"""Plans made by hand for tests of what is printed, drawn and written: the ester study of ``studies/``,
its four laws integrated by scipy; ratings are invented figures, only carried through.

The readings of ``recorded_plan`` are an invented exponential, for a run that is recorded continuously."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
from scipy.integrate import solve_ivp

from designer import outcomes
from designer.loading import load_study
from designer.outcomes import Estimate, Plan, Predicted, Rating
from designer.records import Run, Schedule, Study, Vessel

STUDIES = Path(__file__).parent.parent / "studies"
K2, K0, K1 = 0.0278, 5.6e-4, 1.39e-3  # middles of the beliefs of the ester study, L/mol/s and 1/s
LAWS = {
    "first order in both": (lambda e, h, k: k * K2 * e * h, 1.0),
    "two hydroxide per ester": (lambda e, h, k: k * K2 * e * h, 2.0),
    "with a hydroxide-free path": (lambda e, h, k: k * (K0 + K2 * h) * e, 1.0),
    "hydroxide plays no part": (lambda e, h, k: k * K1 * e, 0.0),
}
RUNS = (
    ((0.020, 0.020), (240.0, 900.0, 2400.0, 5400.0)),
    ((0.080, 0.120), (90.0, 300.0, 720.0, 1800.0)),
    ((0.005, 0.200), (60.0, 150.0, 300.0, 900.0)),
)
TEMPERATURE = 298.15


@cache
def study() -> Study:
    return load_study(STUDIES / "ester")


def ester_left(
    law: str, start: tuple[float, float], times: tuple[float, ...], factor: float = 1.0
) -> np.ndarray:
    """Concentration of ester, mol/L, at the times (s)."""
    rate, hydroxide = LAWS[law]
    solved = solve_ivp(
        lambda _, y: [-rate(y[0], y[1], factor), -hydroxide * rate(y[0], y[1], factor)],
        (0, max(times) * 1.0001),
        start,
        t_eval=times,
        rtol=1e-9,
        atol=1e-12,
        method="LSODA",
    )
    return solved.y[0]


def predicted(law: str, start: tuple[float, float], time: float) -> Predicted:
    mean = float(ester_left(law, start, (time,))[0])
    error = float(np.hypot(0.012 * mean, 3e-5))
    return Predicted(law, "ester by HPLC", mean, error, "below" if mean < 1e-4 else "", mean / start[0])


def planned(number: int) -> outcomes.PlannedRun:
    start, times = RUNS[number - 1]
    samples = tuple(
        outcomes.Sample(
            time,
            tuple(predicted(law, start, time) for law in LAWS),
            "separates first order in both from two hydroxide per ester: 25 against 51 % left",
        )
        for time in times
    )
    conditions = (("ester", start[0]), ("hydroxide", start[1]), ("temperature", TEMPERATURE))
    marks = ("▲ hydroxide 200 mM is beyond the highest already run",) if number == 3 else ()
    gain = Estimate((0.71, 0.14, 0.05)[number - 1], 0.012)
    return outcomes.PlannedRun(number, conditions, samples, None, (), marks, gain)


def schedule(name: str = "this plan") -> Schedule:
    return Schedule(tuple(run(start, times) for start, times in RUNS), name)


def run(start: tuple[float, float], times: tuple[float, ...]) -> Run:
    return Run((("ester", start[0]), ("hydroxide", start[1]), ("temperature", TEMPERATURE)), times)


def by_law(*values: float) -> tuple[tuple[str, Estimate], ...]:
    return tuple((law, Estimate(value, 0.012)) for law, value in zip(LAWS, values, strict=True))


def rating(
    plan: Schedule, mean: float, half_width: float, total: float, broken: tuple[str, ...] = ()
) -> Rating:
    """A rating whose figures follow from three numbers, so that a test can say what must be printed."""
    return Rating(
        schedule=plan,
        studies=512,
        worth=Estimate(mean - 0.05, 0.006),
        top=Estimate(mean + 0.005, 0.006),
        top_by_law=by_law(mean, mean + 0.01, mean - 0.02, mean + 0.02),
        reach=Estimate(mean - 0.05, 0.011),
        reach_by_law=by_law(mean - 0.06, mean, mean - 0.12, mean + 0.02),
        mean_probability=Estimate(mean, 0.005),
        log_score=Estimate(np.log(mean), 0.01),
        information=Estimate(1.386 * mean, 0.011),
        information_share=Estimate(mean, 0.008),
        precision=(outcomes.Precision("k", 0.05, Estimate(half_width, 0.0007), Estimate(0.84, 0.016)),),
        spreads=tuple(outcomes.Spread(law, "k", Estimate(half_width / 1.96, 0.0004)) for law in LAWS),
        free_order=Estimate(0.031, 0.004),
        total_time=total,
        broken=broken,
    )


def fan(number: int, law: str) -> outcomes.Curve:
    start, times = RUNS[number - 1]
    at = tuple(np.linspace(0, max(times), 60))
    middle, low, high = (tuple(ester_left(law, start, at, factor)) for factor in (1.0, 3.0, 1 / 3.0))
    return outcomes.Curve(number, law, "ester by HPLC", at, middle, low, high)


@cache
def plan() -> Plan:
    """The three-run ester plan with two rivals, one of them the flooded trap."""
    mine = schedule()
    flooded = Schedule((run((0.01, 0.2), tuple(60.0 * np.arange(1, 9))),) * 3, "three flooded repeats")
    usual = Schedule((run((0.0224, 0.0632), (60.0, 1800.0, 3600.0, 5400.0)),) * 3, "one level, equal steps")
    return Plan(
        title="Base hydrolysis of an aryl ester",
        seed=7,
        versions=(("aliquot", "0.1.0"), ("numpy", "2.4")),
        rating=replace(rating(mine, 0.97, 0.041, 16200.0), doubtful=3, repaired=12),
        runs=tuple(planned(number) for number in (1, 2, 3)),
        alternatives=(
            rating(usual, 0.88, 0.052, 24300.0),
            rating(flooded, 0.55, 0.024, 9540.0, ("24 samples in all, more than the limit of 20",)),
        ),
        binding="the earliest possible sample, the highest hydroxide",
        inseparable=(),
        cautions=("Chosen for information; a hazard review by qualified people comes first.",),
        rounding=Estimate(0.002, 0.0011),
        curves=tuple(fan(number, law) for number in (1, 2, 3) for law in LAWS),
        beliefs=tuple((law, 0.25, 0.25) for law in LAWS),
        booked=16 * 3600.0,
        effort=(("studies", 512),),
    )


def recorded_study() -> Study:
    """The dye study with stocks and a vessel, so that there is something to pipette."""
    dye = load_study(STUDIES / "dye")
    return replace(dye, stocks=(("dye", 1e-4), ("hydroxide", 1.0)), vessel=Vessel(volume=0.003))


def renamed(pairs: tuple[tuple[str, Estimate], ...], laws: list[str]) -> tuple[tuple[str, Estimate], ...]:
    return tuple((law, figure) for law, (_, figure) in zip(laws, pairs, strict=True))


def recorded_plan() -> Plan:
    """One run of 20 min, recorded continuously, of the dye study."""
    conditions = (("dye", 1e-5), ("hydroxide", 0.05), ("temperature", TEMPERATURE))
    laws = [candidate.name for candidate in recorded_study().listed]
    samples = tuple(
        outcomes.Sample(
            time,
            tuple(
                Predicted(
                    law, "absorbance", float(np.exp(-0.008 * time)), 0.004, "above" if time < 20 else ""
                )
                for law in laws
            ),
            "pins k2 down",
        )
        for time in (12.0, 120.0)
    )
    portions = (
        outcomes.Portion("dye", 1e-4, 3e-4),
        outcomes.Portion("hydroxide", 1.0, 1.5e-4),
        outcomes.Portion("solvent", None, 2.55e-3),
    )
    runs = (outcomes.PlannedRun(1, conditions, samples, 1200.0, portions, (), Estimate(0.5, 0.01)),)
    mine = plan().rating
    return replace(
        plan(),
        title="Dye fading with hydroxide",
        runs=runs,
        rating=replace(
            mine,
            schedule=Schedule((Run(conditions, (), 1200.0),), "this plan"),
            total_time=1560.0,
            top_by_law=renamed(mine.top_by_law, laws),
            reach_by_law=renamed(mine.reach_by_law, laws),
            spreads=tuple(outcomes.Spread(law, "k2", Estimate(0.012, 0.0004)) for law in laws[:3]),
            precision=(outcomes.Precision("k2", 0.04, Estimate(0.0235, 0.0007), Estimate(0.97, 0.016)),),
            doubtful=0,
            repaired=0,
        ),
        alternatives=(),
        curves=(),
        booked=1200.0,
        beliefs=tuple((law, 0.25, after) for law, after in zip(laws, (0.4, 0.3, 0.2, 0.1), strict=True)),
        inseparable=(outcomes.Inseparable(laws[0], laws[2], ("temperature",)),),
    )
