"""Group 2 of the check values: rate laws and definitions, from the program's curves and rates."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
from scipy.optimize import brentq, minimize_scalar

from designer import expressions, signals
from designer.courses import Course
from designer.records import Belief, Constant
from validation.registry import Check, cases, from_file
from validation.small import PLAIN, Reaction, candidate, lever, reaction, species, study

GROUP = 2
ACTIVATION = "activation enthalpy and entropy are not computed"
ANOTHER_FORM = "another way of writing the curve of this case; that curve is check K-30"
LEFT_OUT = {
    ("G2-10", "dH"): ACTIVATION,
    ("G2-10", "dS"): ACTIVATION,
    ("G2-15", "alpha"): ANOTHER_FORM,
    ("G2-15", "beta"): ANOTHER_FORM,
}
BOTH = ("A + B -> C", "k*[A]*[B]")


def given(case: str) -> Any:
    return cases(GROUP)[case]["inputs"]


@cache
def any_order() -> Course:
    """k [A]^n at conditions (A, k); the one coordinate is n itself."""
    order = Constant("n", Belief("normal", 0.0, 1.0), PLAIN, "")
    law = candidate("order n", "A -> B", "k*[A]^n", order)
    one = study([law], [species("A", 1.0), lever("k", 1.0)], absolute=1.0)
    return Course(signals.law(one, law))


def falls(orders: list[float], start: float, k: float, left: float, horizon: float = 1e4) -> np.ndarray:
    """Times at which order-n decays reach the share ``left``."""
    n = np.array(orders, dtype=float)[:, None]
    return any_order().fall(n, np.array([[start, k]]), horizon, left)[0]


def whole_order(n: float) -> Reaction:
    """Order n with n written as a number."""
    rate = "k" if n == 0 else "k*[A]" if n == 1 else f"k*[A]^{n:g}"
    return reaction(("A -> B", rate))


def last_moment(n: float, start: float, k: float) -> float:
    """When a reaction that stops by itself is over: [A]^(1 - n) falls in a straight line, which is drawn
    through two points of the curve and on to 0."""
    times = np.array([0.3, 0.6]) * start ** (1 - n) / k
    left = whole_order(n).run({"A": start}, {"k": k}, times)[0]["A"] ** (1 - n)
    return float(times[0] + left[0] * (times[1] - times[0]) / (left[0] - left[1]))


def g2_01() -> dict[str, Any]:
    case = given("G2-01")
    start, k = case["c0"], case["k"]
    left = [whole_order(n).at({"A": start}, {"k": k}, case["t"])["A"] for n in case["orders"]]
    return {
        "concentration": left,
        "half_life": falls(case["orders"], start, k, 0.5),
        "finite_end_time_order0": last_moment(0, start, k),
        "finite_end_time_order_half": last_moment(0.5, start, k),
    }


def g2_02() -> dict[str, Any]:
    orders = given("G2-02")["orders"]
    return {"ratio": falls(orders, 1.0, 1.0, 0.25) / falls(orders, 1.0, 1.0, 0.5)}


def g2_03() -> dict[str, Any]:
    case = given("G2-03")
    start, bare, law = {"A": case["A0"], "B": case["B0"]}, {"k": case["k"]}, reaction(BOTH)
    end = law.at(start, bare, case["t"])
    flooded = {"A": case["A0"], "B": 20 * case["A0"]}
    left = law.at(flooded, bare, 1 / (case["k"] * flooded["B"]))["A"] / case["A0"]
    return {
        "A": end["A"],
        "B": end["B"],
        "half_life_of_A": law.when(start, bare, "A", case["A0"] / 2, 1e3),
        "flooding_A_over_A0": left,
        "flooding_rel_error": left * np.e - 1,
    }


def g2_04() -> dict[str, Any]:
    case = given("G2-04")
    law = reaction(("A -> B", "k1*[A]-k2*[B]"))
    start, bare = {"A": case["A0"]}, {"k1": case["k1"], "k2": case["km1"]}
    end = law.at(start, bare, 1e3)
    return {
        "A": law.at(start, bare, case["t"])["A"],
        "A_equilibrium": end["A"],
        "K": end["B"] / end["A"],
        "half_life": law.when(start, bare, "A", (case["A0"] + end["A"]) / 2, 100.0),
        "time_to_A_half": law.when(start, bare, "A", case["A0"] / 2, 100.0),
    }


def g2_05() -> dict[str, Any]:
    case = given("G2-05")
    law, start = reaction(("A -> B", "k1*[A]"), ("B -> C", "k2*[B]")), {"A": 1.0}
    found: dict[str, list[float]] = {"tmax": [], "Bmax": [], "B_at_3": [], "C_at_3": []}
    for first, second in case["pairs"]:
        bare = {"k1": first, "k2": second}

        def growth(t: float, bare: dict[str, float] = bare) -> float:
            rates = law.run(start, bare, [t])[1][:, 0]
            return float(rates[0] - rates[1])

        peak = brentq(growth, 1e-3, 30.0, xtol=1e-13, rtol=1e-13)
        later = law.at(start, bare, case["t"])
        row = (peak, law.at(start, bare, peak)["B"], later["B"], later["C"])
        for key, value in zip(found, row, strict=True):
            found[key].append(value)
    return found


def g2_06() -> dict[str, Any]:
    case = given("G2-06")
    law = reaction(("A + B -> 2 B", "k*[A]*[B]"))
    start, bare = {"A": case["A0"], "B": case["B0"]}, {"k": case["k"]}

    def bend(t: float, width: float = 0.02) -> float:
        """Slope of the rate, by central differences of fourth order."""
        r = law.run(start, bare, t + width * np.array([-2, -1, 1, 2]))[1][0]
        return float((r[0] - 8 * r[1] + 8 * r[2] - r[3]) / (12 * width))

    peak = brentq(bend, 1.0, 10.0, xtol=1e-12)
    return {
        "B": law.at(start, bare, case["t"])["B"],
        "t_fastest": peak,
        "max_rate": law.run(start, bare, [peak])[1][0, 0],
    }


SATURATION = ("S -> P", "V*[S]/(Km*(1+inhibitor/Kc)+[S]*(1+inhibitor/Ku))")
NO_BINDING = 1e30  # dissociation constant of an inhibitor that does not bind


def saturating(
    V: float, K: float, inhibitor: float = 0.0, Kc: float = 1.0, Ku: float = 1.0
) -> dict[str, float]:
    return {"V": V, "Km": K, "inhibitor": inhibitor, "Kc": Kc, "Ku": Ku}


def g2_07() -> dict[str, Any]:
    law, found = reaction(SATURATION), {}
    for name, (start, V, K, time) in given("G2-07").items():
        found[f"S_{name}"] = law.at({"S": start}, saturating(V, K), time)["S"]
    start, V, K, _ = given("G2-07")["a"]
    return {**found, "half_time_a": law.when({"S": start}, saturating(V, K), "S", start / 2, 100.0)}


def g2_08() -> dict[str, Any]:
    case = given("G2-08")

    def first_rate(Kc: float, Ku: float, start: float = case["S"], amount: float = case["I"]) -> float:
        bare = saturating(case["V"], case["Km"], amount, Kc, Ku)
        return float(reaction(SATURATION).run({"S": start}, bare, [0.0])[1][0, 0])

    half = lambda s: first_rate(case["Ki"], NO_BINDING, s) - case["V"] / 2  # noqa: E731
    return {
        "none": first_rate(NO_BINDING, NO_BINDING),
        "competitive": first_rate(case["Ki"], NO_BINDING),
        "uncompetitive": first_rate(NO_BINDING, case["Ki"]),
        "noncompetitive": first_rate(case["Ki"], case["Ki"]),
        "mixed": first_rate(case["Ki"], case["Kip"]),
        "apparent_Km_competitive": brentq(half, 0.1, 100.0, xtol=1e-12),
    }


def at_temperature(value: float, reference: float, energy: float, temperature: float) -> float:
    """k(T) as the program has it."""
    constant = Constant("k", Belief("exact", value), PLAIN, "", Belief("exact", energy), reference)
    law = candidate("A", "A -> B", "k*[A]", constant)
    conditions = [species("A", 1.0), lever("temperature", temperature)]
    one = signals.law(study([law], conditions, absolute=1.0), law)
    return float(one.constants(np.zeros(0), np.asarray(temperature))["k"])


def g2_09() -> dict[str, Any]:
    (cold, hot), (slow, fast) = given("G2-09")["T"], given("G2-09")["k"]
    energy = brentq(lambda e: np.log(at_temperature(slow, cold, e, hot) / fast), 1e4, 3e5, xtol=1e-6)
    return {
        "E_J_per_mol": energy,
        "ln_A": np.log(at_temperature(slow, cold, energy, 1e15)),  # where 1/T is nothing
        "k_318": at_temperature(slow, cold, energy, 318.0),
        "factor_298_to_308": at_temperature(slow, cold, energy, 308.0) / slow,
    }


EYRING = "kB*temperature/h*exp(-G/(R*temperature))*[A]"
SI = {"kB": 1.380649e-23, "h": 6.62607015e-34}  # exact since 2019


def g2_10() -> dict[str, Any]:
    case = given("G2-10")
    gas = signals.GAS_CONSTANT

    def per_second(barrier: float) -> float:
        """First-order constant of a law written with the Eyring factor: -ln of what is left after 1 s."""
        bare = {**SI, "R": gas, "temperature": case["T"], "G": barrier}
        return -float(np.log(reaction(("A -> B", EYRING)).at({"A": 1.0}, bare, 1.0)["A"]))

    ratio = expressions.evaluate(
        expressions.parse("log(kB/h)"), SI, {}, {}, {"log": np.log}, lambda a, b: a**b
    )
    return {
        "R": gas,
        "ln_kB_over_h": ratio,
        "k_eyring": per_second(case["dG"]),
        "dG_for_1e_4": brentq(lambda g: np.log(per_second(g) / 1e-4), 7e4, 1.2e5, xtol=1e-7),
        "kBT_over_h": np.exp(ratio) * case["T"],
    }


def g2_11() -> dict[str, Any]:
    case = given("G2-11")
    converted = np.array(case["p"])
    lines = []
    for order in case["orders"]:
        law, bare = whole_order(order), {"k": case["K"]}
        times = np.array([law.when({"A": 1.0}, bare, "A", 1 - p, 2.0) for p in converted])
        lines.append(np.polyfit(times, times / converted, 1))
    slope, intercept = np.array(lines).T
    return {"order_estimate": 2 * slope, "intercept": intercept}


def g2_12() -> dict[str, Any]:
    first, second = given("G2-12")["c"]
    found = []
    for order, (slow, _) in zip((2.0, 1.0, 0.5), given("G2-12")["t_half"], strict=True):
        k = falls([order], first, 1.0, 0.5, 1e6)[0] / slow  # the law that has the first of the half-lives
        other = falls([order], second, k, 0.5, 1e6)[0]
        found.append(1 + np.log(slow / other) / np.log(second / first))
    return {"order": found}


POINTS = 256


def imitation(conversion: float, free_amplitude: bool = False) -> tuple[float, float]:
    """(largest gap, constant) of the first-order curve nearest to a second-order one followed so far."""
    times = np.linspace(0.0, conversion / (1 - conversion), POINTS)
    true = whole_order(2).run({"A": 1.0}, {"k": 1.0}, times)[0]["A"]

    def gap(k: float) -> float:
        curve = whole_order(1).run({"A": 1.0}, {"k": k}, times)[0]["A"]
        if not free_amplitude:
            return float(np.max(np.abs(true - curve)))
        worst = lambda a: float(np.max(np.abs(true - a * curve)))  # noqa: E731
        return float(minimize_scalar(worst, bounds=(0.8, 1.1), method="bounded", options={"xatol": 1e-7}).fun)

    best = minimize_scalar(gap, bounds=(0.3, 1.0), method="bounded", options={"xatol": 1e-6})
    return float(best.fun), float(best.x)


def g2_13() -> dict[str, Any]:
    conversions = given("G2-13")["conversions"]
    gaps, constants = zip(*(imitation(x) for x in conversions), strict=True)

    def reaching(gap: float) -> float:
        return float(brentq(lambda x: imitation(x)[0] - gap, 0.2, 0.6, xtol=1e-5))

    early = 2e-4  # the coefficient is that of the limit at no conversion
    return {
        "max_gap": gaps,
        "best_first_order_k": constants,
        "conversion_for_gap_1pct": reaching(0.01),
        "conversion_for_gap_2pct": reaching(0.02),
        "max_gap_free_amplitude": [imitation(x, free_amplitude=True)[0] for x in conversions[2:]],
        "small_X_coefficient": slowed(early) / (early / (1 - early)) ** 2,
    }


def slowed(conversion: float) -> float:
    """Largest gap of the nearest first-order curve where both are nearly straight: k is sought finely."""
    times = np.linspace(0.0, conversion / (1 - conversion), POINTS)
    true = whole_order(2).run({"A": 1.0}, {"k": 1.0}, times)[0]["A"]
    gap = lambda k: np.max(np.abs(true - whole_order(1).run({"A": 1.0}, {"k": k}, times)[0]["A"]))  # noqa: E731
    found = minimize_scalar(gap, bounds=(1 - 2 * conversion, 1.0), method="bounded", options={"xatol": 1e-9})
    return float(found.fun)


def g2_14() -> dict[str, Any]:
    case = given("G2-14")
    equation, k, made = "2 N2O5 -> 4 NO2 + O2", case["k"], case["dO2_dt"]
    by_reaction = reaction((equation, "k*[N2O5]"))
    by_loss = reaction((equation, "k*[N2O5]/2"))
    start, bare = {"N2O5": made / k}, {"k": k}
    h = 0.5  # s; slopes at the start by one-sided differences of fourth order
    now, rates = by_reaction.run(start, bare, h * np.arange(5))
    slope = {name: float(values @ [-25, 48, -36, 16, -3]) / (12 * h) for name, values in now.items()}
    return {
        "v": rates[0, 0],
        "consumption_N2O5": -slope["N2O5"],
        "appearance_NO2": slope["NO2"],
        "half_life_if_k_refers_to_v": by_reaction.when(start, bare, "N2O5", start["N2O5"] / 2, 1e4),
        "half_life_if_k_refers_to_consumption": by_loss.when(start, bare, "N2O5", start["N2O5"] / 2, 1e4),
    }


def g2_15() -> dict[str, Any]:
    case = given("G2-15")
    half, ninety = (falls([case["n"]], case["c0"], case["k"], left)[0] for left in (0.5, 0.1))
    return {"DT50": half, "DT90": ninety, "t_rep": ninety * np.log(2) / np.log(10)}


def g2_16() -> dict[str, Any]:
    half_life = given("G2-16")["t_half_C14"]
    law, start = whole_order(1), {"A": 1.0}
    k = law.when(start, {"k": 1.0}, "A", 0.5, 10.0)  # so that the half-life is the unit of time
    carbon = k / half_life
    return {
        "t_loss10": law.when(start, {"k": k}, "A", 0.9, 20.0),
        "t_loss90": law.when(start, {"k": k}, "A", 0.1, 20.0),
        "t_loss99": law.when(start, {"k": k}, "A", 0.01, 20.0),
        "left_after_10": law.at(start, {"k": k}, 10.0)["A"],
        "k_C14": carbon,
        "age_25pct": law.when(start, {"k": carbon}, "A", 0.25, 1e5),
    }


COMPUTING: dict[str, Callable[[], dict[str, Any]]] = {
    name.upper().replace("_", "-"): function for name, function in globals().items() if name.startswith("g2_")
}


def checks() -> list[Check]:
    return from_file(GROUP, COMPUTING, LEFT_OUT)
