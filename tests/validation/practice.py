"""Known answers of practice: sampling times and levels, pilots, temperature, heat; rules of the trade.

Numbers K-01 to K-18 follow the project's list of known answers; each value is derived in the comment
beside it, and the rounded figure is the one commonly quoted.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import curves
import numpy as np
from scipy.optimize import least_squares

from designer import cautions, locally, signals
from designer.continuous import Design, best_design, local
from designer.courses import Course
from designer.information import (
    Sensitivities,
    criterion,
    in_logarithms,
    information,
    measure,
    standard_error,
    standardised,
)
from designer.records import Belief, Constant, Heat
from designer.region import box
from validation.kinetic_laws import (
    BOTH,
    SATURATION,
    any_order,
    at_temperature,
    falls,
    given,
    saturating,
    whole_order,
)
from validation.registry import Check, known
from validation.small import PLAIN, candidate, lever, lognormal, reaction, species, study

Given = Callable[[np.ndarray], Sensitivities | np.ndarray]
TEXTBOOK = "standard integrated rate law; e.g. Laidler, Chemical Kinetics (3rd ed. 1987) ch. 2"
BOX_LUCAS = "Box & Lucas 1959 Biometrika 46:77-90"
DERIVED = "derived here"
CELSIUS = 273.15
DAY = 86400.0


def alone(k: float, start: float = 1.0) -> Given:
    """First order with known start, by ln k: dC/d(ln k) = -k t C0 exp(-k t)."""
    return lambda points: in_logarithms(curves.decay(start, k)(points)[..., 1:], [k])


def one_time(given_: Given, end: float) -> Design:
    return best_design(measure("D", 1), given_, box((0, end)))


def own_derivatives(equation: str, rate: str, k: float, start: float, times: np.ndarray) -> np.ndarray:
    """d[A]/d(ln k) as the program takes it from the law itself."""
    law = candidate("law", equation, rate, lognormal("k", k, 0.5))
    made = signals.law(study([law], [species("A", start)], absolute=1.0), law)
    found = locally.sensitivities(made, np.full((len(times), 1), start), times)
    return found.jacobian[:, 0, 0]


# ---- times and levels --------------------------------------------------------------------------


def k01() -> dict[str, Any]:
    k, start, noise = 0.05, 0.1, 0.01
    time = one_time(alone(k, start), 400).points[:, 0]
    slope = own_derivatives("A -> B", "k*[A]", k, start, time)
    rows = standardised(Sensitivities(slope[:, None], (noise * start) ** 2))
    # |dC/d ln k| = C0/e at t = 1/k, so SE(ln k) = e sigma/C0
    return {
        "k t": k * time,
        "conversion": 1 - np.exp(-k * time),
        "SE of ln k for 1 % noise": standard_error(information(rows), [1.0]),
    }


def k02() -> dict[str, Any]:
    # d/dt of t^2 C^2/(a^2 + b^2 C^2) = 0: k t = 1 + (b/a)^2 exp(-2 k t)
    found = []
    for constant, relative in ((0.005, 0.01), (0.002, 0.02)):

        def both(points: np.ndarray, a: float = constant, b: float = relative) -> Sensitivities:
            return Sensitivities(alone(0.2)(points), a**2 + (b * np.exp(-0.2 * points[:, 0])) ** 2)

        found.append(0.2 * one_time(both, 60).points[0, 0])
    return {"k t": found}


def k03() -> dict[str, Any]:
    k, start, relative, ends = 0.05, 2.0, 0.02, (10.0, 40.0, 160.0)

    def variance(points: np.ndarray) -> np.ndarray:
        return (relative * start * np.exp(-k * points[:, 0])) ** 2

    def one(points: np.ndarray) -> Sensitivities:
        return Sensitivities(alone(k, start)(points), variance(points))

    def two(points: np.ndarray) -> Sensitivities:
        both = in_logarithms(curves.decay(start, k)(points), (start, k))
        return Sensitivities(both, variance(points))

    last = [one_time(one, end).points[0, 0] / end for end in ends]
    # y/(relative y) is a straight line in t on the log scale, hence the two ends
    pair = best_design(measure("D", 2), two, box((0, ends[1])))
    return {"one time / longest": last, "two times / longest": pair.points[:, 0] / ends[1],
            "weights": pair.weights}  # fmt: skip


def k04() -> dict[str, Any]:
    k, start = 0.3, 0.1

    def slope(points: np.ndarray) -> np.ndarray:
        # C = C0/(1 + k C0 t), dC/d(ln k) = -k t C^2
        return (-k * points[:, 0] * (start / (1 + k * start * points[:, 0])) ** 2)[:, None]

    time = one_time(slope, 30 / (k * start)).points[:, 0]
    own = own_derivatives("A -> B", "k*[A]^2", k, start, time)
    return {
        "k C0 t": k * start * time,
        "conversion": 1 - whole_order(2).at({"A": start}, {"k": k}, float(time[0]))["A"] / start,
        "own derivative / closed form": own / slope(time[:, None])[:, 0],
    }


def k05() -> dict[str, Any]:
    k, found = 0.05, {}

    def three(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]  # y = A + B exp(-k t) by (A, B, k), B = 1
        return np.stack([np.ones(len(t)), np.exp(-k * t), -t * np.exp(-k * t)], axis=-1)

    for end in (20, 60, 100):
        found[f"times up to {end}"] = best_design(measure("D", 3), three, box((0, end))).points[:, 0]
    return found


def k06() -> dict[str, Any]:
    both: Given = lambda x: in_logarithms(curves.decay(0.1, 0.05)(x), (0.1, 0.05))  # noqa: E731
    found = best_design(measure("D", 2), both, box((0, 300)))
    # det of the two-point design at 0 and t is (k t exp(-k t))^2 / 4
    return {"k t": 0.05 * found.points[:, 0], "weights": found.weights}


def k07() -> dict[str, Any]:
    both: Given = lambda x: in_logarithms(curves.saturation(1.0, 0.08)(x), (1.0, 0.08))  # noqa: E731
    return {"levels": best_design(measure("D", 2), both, box((0, 2.0))).points[:, 0]}


def k08() -> dict[str, Any]:
    v, k, least, most = 1.5, 0.08, 0.01, 2.0

    def both(points: np.ndarray) -> Sensitivities:
        mean = v * points[:, 0] / (k + points[:, 0])
        return Sensitivities(in_logarithms(curves.saturation(v, k)(points), (v, k)), (0.03 * mean) ** 2)

    # rows (1, -K/(K + S)): a straight line in K/(K + S), monotone in S, hence the two ends
    found = best_design(measure("D", 2), both, box((least, most)))
    return {"levels": found.points[:, 0], "weights": found.weights}


def k09() -> dict[str, Any]:
    shares, inflations = [], []
    for cold, hot, asked in ((40, 70, 25), (50, 70, 20), (25, 50, 20)):
        aim = 1 / (asked + CELSIUS)

        def rows(points: np.ndarray, aim: float = aim) -> np.ndarray:
            # by (ln k at the asked temperature, E): the first is the asked quantity
            return np.stack([np.ones(len(points)), -(1 / points[:, 0] - aim) / curves.GAS], axis=-1)

        what = measure("c", 2, gradient=[1.0, 0.0])
        found = local(what, rows(np.array([[cold + CELSIUS], [hot + CELSIUS]])))
        shares.append(found.weights[0])
        inflations.append(np.sqrt(criterion(what, found.information)))
    return {"share at the lower temperature": shares, "SE over that of one reading": inflations}


# ---- flooding, pilots, temperature, heat -------------------------------------------------------


def flooding_bias(ratio: float, k: float = 1.0) -> float:
    """k_obs of a exp(-k_obs t), both free, fitted to the exact curve of A + B at 20 equal steps from 0 to
    90 % conversion of A, over k B0, less 1."""
    law, start = reaction(BOTH), {"A": 1.0, "B": ratio}
    end = law.when(start, {"k": k}, "A", 0.1, 100.0)
    times = np.linspace(0, end, 20)
    exact = law.run(start, {"k": k}, times)[0]["A"]
    fit = least_squares(lambda p: p[0] * np.exp(-p[1] * times) - exact, [1.0, k * ratio], xtol=1e-12)
    return float(fit.x[1] / (k * ratio) - 1)


def k10() -> dict[str, Any]:
    law, times, much = reaction(BOTH), np.linspace(0, 4.0, 16), 1e7
    exact = law.run({"A": 1.0, "B": much}, {"k": 1 / much}, times)[0]["A"]
    return {
        "bias of k_obs at 5, 10, 20 and 50 to 1": [flooding_bias(ratio) for ratio in (5, 10, 20, 50)],
        "largest gap to exp(-k B0 t) at 1e7 to 1": np.max(np.abs(exact - np.exp(-times))),
    }


def k12() -> dict[str, Any]:
    # rates are proportional to k, so k is the time that k = 1 would take over 30 (min)
    return {"k": falls([0, 1, 1.5, 2], 0.1, 1.0, 0.6) / 30}


def k13() -> dict[str, Any]:
    return {"k(35 C)/k(25 C)": at_temperature(1.0, 25 + CELSIUS, 52.9e3, 35 + CELSIUS)}


def k14() -> dict[str, Any]:
    energies = (50e3, 80e3, 100e3, 120e3)
    h, warm = 1e-3, 298.15
    steps = [
        np.log(at_temperature(1.0, warm, e, warm + h) / at_temperature(1.0, warm, e, warm - h))
        for e in energies
    ]
    return {"change of ln k by 1 K": np.array(steps) / (2 * h)}


def k15() -> dict[str, Any]:
    return {"share lost": 1 - whole_order(1).at({"A": 1.0}, {"k": 1000.0}, 1.5e-3)["A"]}


def k17() -> dict[str, Any]:
    law = candidate("any", "A -> B", "k*[A]", lognormal("k", 1.0, 0.5))

    def rise(enthalpy: float, start: float) -> float:
        heat = Heat(enthalpy, density=850.0, heat_capacity=1.9)
        one = replace(study([law], [species("A", start)], absolute=1.0), heat=heat)
        found = cautions.adiabatic_rise(one, {"A": start})
        assert found is not None
        return found

    return {"rise, 125 kJ/mol at 0.8 M": rise(-125e3, 0.8), "rise, 550 kJ/mol at 0.5 M": rise(-550e3, 0.5)}


def k18() -> dict[str, Any]:
    reference = 50 + CELSIUS
    k = Constant("k", Belief("exact", 0.0862 / DAY), PLAIN, "", Belief("exact", 90e3), reference)
    law = candidate("first order", "A -> B", "k*[A]", k)
    conditions = [species("A", 1.0), lever("temperature", 293.15, 343.15)]
    course = Course(signals.law(study([law], conditions, absolute=1.0), law))
    rows = np.array([[1.0, celsius + CELSIUS] for celsius in (20, 30, 40, 50, 60, 70)])
    return {"half-lives, d": course.fall(np.zeros((1, 0)), rows, 1e9)[0] / DAY}


def k30() -> dict[str, Any]:
    case = given("G2-15")
    n, start, k = case["n"], case["c0"], case["k"]
    # mixture of exponentials with gamma-distributed constants: c0/(t/beta + 1)^alpha
    alpha, beta = 1 / (n - 1), start ** (1 - n) / ((n - 1) * k)
    times = np.array([1.0, 10.0, 40.0, 80.0])
    own = any_order().see(np.array([[n]]), np.array([[start, k]]), times[None]).amount[0]
    return {"largest gap / start": np.max(np.abs(own - start / (times / beta + 1) ** alpha)) / start}


# ---- rules of the trade ------------------------------------------------------------------------


def r01() -> dict[str, Any]:
    times = np.linspace(0, 3.0, 64)
    rises = [np.max(np.diff(whole_order(n).run({"A": 1.0}, {"k": 0.7}, times)[1][0])) for n in (0.5, 1, 2)]
    slowing = reaction(SATURATION).run({"S": 2.0}, saturating(1.0, 0.5), times)[1][0]
    return {"largest rise of the rate": max(*rises, np.max(np.diff(slowing)))}


def r02() -> dict[str, Any]:
    law = reaction(("2 N2O5 -> 4 NO2 + O2", "k*[N2O5]"))
    now, _ = law.run({"N2O5": 0.03}, {"k": given("G2-14")["k"]}, np.linspace(0, 3000, 16))
    lost = 0.03 - now["N2O5"]
    off = [np.max(np.abs(now["NO2"] - 2 * lost)), np.max(np.abs(now["O2"] - lost / 2))]
    return {"largest departure / start": max(off) / 0.03}


# ---- the list ----------------------------------------------------------------------------------


def times_and_levels() -> list[Check]:
    computed = "computed"
    half = [0.5, 0.5]
    michaelis = 0.08 * 2.0 / (2 * 0.08 + 2.0)
    return [
        *known("K-01", "First order, start known, constant error: best single time", k01,
               {"k t": 1.0, "conversion": 1 - np.exp(-1), "SE of ln k for 1 % noise": np.e * 0.01},
               BOX_LUCAS, "memory; computed here", relative=1e-6),
        *known("K-02", "The same with variance a^2 + b^2 C^2: k t = 1 + (b/a)^2 exp(-2 k t), b/a = 2 and 10",
               k02, {"k t": [1.298, 2.208]}, DERIVED, computed, absolute=5e-4),
        *known("K-03", "First order, constant relative error: the later the better; two unknowns, both ends",
               k03, {"one time / longest": [1, 1, 1], "two times / longest": [0, 1], "weights": half},
               DERIVED, computed, absolute=1e-5),
        *known("K-04", "Second order, start known, constant error: best single time at 50 % conversion", k04,
               {"k C0 t": 1.0, "conversion": 0.5, "own derivative / closed form": 1.0},
               DERIVED, computed, relative=1e-6),
        *known("K-05", "y = A + B exp(-k t), all unknown, k = 0.05: 0, 1/k - T exp(-kT)/(1 - exp(-kT)), T",
               k05, {"times up to 20": [0, 8.36, 20], "times up to 60": [0, 16.86, 60],
                     "times up to 100": [0, 19.32, 100]}, BOX_LUCAS, "memory; computed here", absolute=6e-3),
        *known("K-06", "Start and k unknown, constant error, range up to 1/k or more: times 0 and 1/k", k06,
               {"k t": [0, 1], "weights": half}, BOX_LUCAS, "memory; computed here", absolute=1e-5),
        *known("K-07", "Saturation, constant error, K = 0.08, S up to 2: K S/(2K + S) and S", k07,
               {"levels": [michaelis, 2.0]}, "Duggleby 1979 J. Theor. Biol. 81:671-684",
               "memory; computed here", relative=1e-6),
        *known("K-08", "Saturation, constant relative error: least and largest level", k08,
               {"levels": [0.01, 2.0], "weights": half}, DERIVED, computed, absolute=1e-5),
        *known("K-09", "Effort at the lower of two temperatures, k asked at a third: 40/70 for 25 C, "
               "50/70 for 20 C, 25/50 for 20 C", k09,
               {"share at the lower temperature": [0.73, 0.61, 0.85],
                "SE over that of one reading": [2.15, 4.51, 1.44]}, DERIVED, computed, absolute=5e-3),
    ]  # fmt: skip


def other_answers() -> list[Check]:
    computed, rule = "computed", ("rule of the trade", "common practice")
    flooded = "bias of k_obs at 5, 10, 20 and 50 to 1"
    limit = "largest gap to exp(-k B0 t) at 1e7 to 1"
    mixed = "A + B flooded with B, the exact curve read as first order up to 90 % conversion"
    return [
        *known("K-10", mixed, k10, {flooded: [-0.099, -0.049, -0.024, -0.010]}, DERIVED, computed,
               absolute=6e-4),
        *known("K-10", "A + B with B0/A0 without limit is first order", k10, {limit: 0.0}, TEXTBOOK,
               "memory", absolute=1e-6),
        *known("K-12", "k from a pilot of 40 % in 30 min at 0.1 M, orders 0, 1, 1.5, 2 (min, M)", k12,
               {"k": [1.333e-3, 0.01703, 0.06135, 0.2222]}, TEXTBOOK, computed, relative=4e-4),
        *known("K-13", "A rate that doubles from 25 to 35 C has Ea = 52.9 kJ/mol", k13,
               {"k(35 C)/k(25 C)": 2.0}, "Arrhenius 1889", computed, relative=1e-3),
        *known("K-14", "Relative change of k by 1 K at 25 C for Ea = 50, 80, 100, 120 kJ/mol", k14,
               {"change of ln k by 1 K": [0.0676, 0.108, 0.135, 0.162]}, DERIVED, computed, absolute=5e-4),
        *known("K-15", "Signal lost in a dead time of 1.5 ms at k = 1000 /s", k15,
               {"share lost": 1 - np.exp(-1.5)}, TEXTBOOK, "memory; computed here", relative=1e-7),
        *known("K-17", "Adiabatic rise at 850 g/L and 1.9 J/(g K), K", k17,
               {"rise, 125 kJ/mol at 0.8 M": 62.0, "rise, 550 kJ/mol at 0.5 M": 170.0},
               "heat balance of a batch, -dH c0/(rho cp)", computed, absolute=0.5),
        *known("K-18", "Half-lives at 20 to 70 C, k = 0.0862 /d at 50 C, Ea = 90 kJ/mol", k18,
               {"half-lives, d": [248, 73, 23, 8.0, 2.9, 1.14]}, "Arrhenius 1889", computed, relative=0.02),
        *known("K-30", "An order-n curve is a mixture of exponentials over a gamma density (case G2-15)", k30,
               {"largest gap / start": 0.0}, "Gustafson & Holden 1990", "memory", absolute=1e-9),
        *known("R-01", "The rate falls as a reactant is used up (orders 1/2, 1, 2, saturation)", r01,
               {"largest rise of the rate": 0.0}, *rule, absolute=1e-12, relation="<="),
        *known("R-02", "Loss of one species fixes the others by stoichiometry (2 N2O5 -> 4 NO2 + O2)", r02,
               {"largest departure / start": 0.0}, *rule, absolute=1e-12),
    ]  # fmt: skip


def checks() -> list[Check]:
    return [*times_and_levels(), *other_answers()]
