"""Group 1 of the check values: best times, weights, criteria and bounds for one named law.

Curves that are not kinetics go through the same functions as plain callables. Kinetic ones run in
ln-parameters, which changes no D-optimal design; determinants are turned back to the source's parameters.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import curves
import numpy as np
from scipy.stats import gamma

from designer.continuous import Design, best_design, local, rate
from designer.information import (
    Sensitivities,
    compromise,
    criterion,
    efficiency,
    in_logarithms,
    information,
    measure,
    sensitivity,
    standard_error,
    standardised,
)
from designer.region import box
from designer.rival import (
    Contest,
    best_separation,
    expected_information,
    gap_over_variance,
    squared_gap,
    symmetric_distance,
)
from validation.registry import Check, cases, from_file

GROUP = 1
THETA = (0.05884, 4.298, 21.8)  # of the compartment model


def given(case: str) -> Any:
    return cases(GROUP)[case]["inputs"]


def expected(case: str) -> Any:
    return cases(GROUP)[case]["expected"]


def logarithmic(jacobian: curves.Jacobian, theta: tuple[float, ...]) -> curves.Jacobian:
    return lambda points: in_logarithms(jacobian(points), theta)


def jointly(jacobian: curves.Jacobian, theta: tuple[float, ...], low: float, high: float) -> Design:
    """D-optimal for all parameters on an interval of one variable."""
    return best_design(measure("D", len(theta)), logarithmic(jacobian, theta), box((low, high)))


def g1_01() -> dict[str, Any]:
    found = jointly(curves.intermediate(0.7, 0.2), (0.7, 0.2), 0, 20)
    # det by theta = det by ln theta / (k1 k2)^2; |det F| of the 2 x 2 jacobian = 2 det(M)^(1/2)
    determinant = np.exp(found.criterion) / (0.7 * 0.2) ** 2
    return {
        "times": found.points[:, 0],
        "weights": found.weights,
        "max_std_variance": found.bound,
        "det_M": determinant,
        "abs_det_F": 2 * np.sqrt(determinant),
    }


def g1_02() -> dict[str, Any]:
    orders, times = given("G1-02")["orders"], []
    for n in orders:
        end = 1 / (1 - n) if n < 1 else 40.0  # an order below 1 is over at a finite time
        times.append(best_design(measure("D", 1), curves.order_decay(n), box((0, end))).points[0, 0])
    left = [curves.left(n, t) for n, t in zip(orders, times, strict=True)]
    return {"k_t": times, "fraction_left": left, "formula_fraction": left}


def g1_03() -> dict[str, Any]:
    found = {}
    for start in given("G1-03")["t_min"]:
        best = jointly(curves.decay(1.0, 0.05), (1.0, 0.05), start, 400)
        found[f"times_tmin{start}"] = best.points[:, 0]
        found[f"max_std_variance_tmin{start}"] = best.bound
    return found


def g1_04() -> dict[str, Any]:
    found: dict[str, Any] = {}
    for name, at in given("G1-04").items():
        turns_back = name == "reversible"
        theta = (at["k1"], at["km1"]) if turns_back else (at["A"], at["k"])
        jacobian = curves.reversible(*theta) if turns_back else curves.approach(*theta)
        best = jointly(jacobian, theta, 0, at["T"])
        found[f"times_{name}"] = best.points[:, 0]
        found[f"max_std_variance_{name}"] = best.bound
    return {**found, "closed_form_reversible": found["times_reversible"][0]}


def g1_05() -> dict[str, Any]:
    found = jointly(curves.compartment(*THETA), THETA, 0, 80)
    return {
        "times": found.points[:, 0],
        "weights": found.weights,
        "log_det_M": found.criterion - 2 * np.sum(np.log(THETA)),
        "max_std_variance": found.bound,
    }


def g1_06() -> dict[str, Any]:
    out, into, size = THETA
    gradient = np.array([-size / out**2, size / into**2, 1 / out - 1 / into])
    # by ln theta the gradient is theta times the gradient by theta, and the variance is the same
    asked = measure("c", 3, gradient=gradient * THETA)
    inside = logarithmic(curves.compartment(*THETA), THETA)
    found = best_design(asked, inside, box((0, 80)))
    plain = best_design(measure("D", 3), inside, box((0, 80)))
    return {
        "times": found.points[:, 0],
        "weights": found.weights,
        "criterion": found.criterion,
        "certificate": found.bound,
        "D_design_variance": criterion(asked, plain.information),
        "c_efficiency_of_D_design": efficiency(asked, plain.information, found.information),
    }


def g1_07() -> dict[str, Any]:
    """By the criterion at the published design: averaging over beliefs is no task of the local search."""
    nodes, parts = np.polynomial.legendre.leggauss(24)
    half_out, half_into = given("G1-07")["half_widths"]
    times = np.array(expected("G1-07")["times"])[:, None]
    everywhere = np.linspace(0, 80, 4001)[:, None]
    what, value, reach = measure("D", 3), 0.0, np.zeros(len(everywhere))
    for out, first in zip(THETA[0] + half_out * nodes, parts / 2, strict=True):
        for into, second in zip(THETA[1] + half_into * nodes, parts / 2, strict=True):
            jacobian = curves.compartment(out, into, THETA[2])
            matrix = information(standardised(jacobian(times)))
            value += first * second * criterion(what, matrix)
            reach += first * second * sensitivity(what, matrix, jacobian(everywhere))
    return {"criterion": value, "max_sensitivity": reach.max()}


def g1_08() -> dict[str, Any]:
    found = {}
    for name, at in given("G1-08").items():
        best = jointly(curves.saturation(at["V"], at["K"]), (at["V"], at["K"]), 0, at["Smax"])
        found[f"S_{name}"] = best.points[:, 0]
        found[f"max_std_variance_{name}"] = best.bound
    return found


def g1_09() -> dict[str, Any]:
    at = given("G1-09")
    found = best_design(measure("D", 2), curves.arrhenius_line, box(tuple(at["T_range"])))
    rows = standardised(Sensitivities(curves.arrhenius_line(found.points), at["sd_lnk"] ** 2))
    return {
        "temperatures": found.points[:, 0],
        "weights": found.weights,
        "max_std_variance": found.bound,
        "se_E_J_per_mol": standard_error(information(rows, found.weights), [0.0, 1.0], at["N"]),
    }


def g1_10() -> dict[str, Any]:
    at = given("G1-10")
    theta = (at["kref"], at["E"])
    inside = logarithmic(curves.arrhenius_decay(*theta, at["Tref"]), theta)
    found = best_design(measure("D", 2), inside, box(tuple(at["t_range"]), tuple(at["T_range"])))
    ordered = found.points[np.argsort(found.points[:, 1])]
    return {
        "k_at_ends": 1 / ordered[:, 0],  # each sampled when k(T) t = 1
        "times": ordered[:, 0],
        "temperatures": ordered[:, 1],
        "max_std_variance": found.bound,
    }


def g1_11() -> dict[str, Any]:
    def jacobian(points: np.ndarray) -> np.ndarray:
        u = points[:, 0]  # dc/dk = -u exp(-u), dc/dn = u^2/2 exp(-u) at n = 1, k = c0 = 1
        return np.stack([-u * np.exp(-u), u**2 / 2 * np.exp(-u)], axis=-1)

    found = best_design(measure("D", 2), jacobian, box((0, 30)))
    times = found.points[:, 0]
    return {"k_times": times, "closed_form": times, "max_std_variance": found.bound}


def g1_12() -> dict[str, Any]:
    found = best_design(measure("D", 3), curves.polynomial, box((-1, 1)))
    listed = local(measure("D", 3), curves.polynomial(np.linspace(-1, 1, 201)[:, None]))
    last = best_design(measure("Ds", 3, subset=(2,)), curves.polynomial, box((-1, 1)))
    return {
        "points": found.points[:, 0],
        "weights_D": found.weights,
        "det_M": np.exp(found.criterion),
        "grid_log_det_gap": found.criterion - listed.criterion,
        "weights_Ds": last.weights,
        "variance_Ds": 1 / last.amount,
    }


def g1_13() -> dict[str, Any]:
    def mean(points: np.ndarray) -> np.ndarray:
        return 4.5 - 1.5 * np.exp(points[:, 0]) - 2 * np.exp(-points[:, 0])

    def quadratic(b: np.ndarray, points: np.ndarray) -> np.ndarray:
        return b[0] + b[1] * points[:, 0] + b[2] * points[:, 0] ** 2

    found = best_separation(Contest(mean, quadratic, [[0.0, 0.0, 0.0]]), box((-1, 1)))
    return {
        "points": found.points[:, 0],
        "weights": found.weights,
        "rival": found.rival,
        "T_value": found.value,
        "max_psi": found.bound,
    }


def g1_14() -> dict[str, Any]:
    first = lambda k, points: np.exp(-k * points[:, 0])  # noqa: E731
    second = lambda k, points: 1 / (1 + k * points[:, 0])  # noqa: E731
    starts = [[-1.0], [0.0], [1.0]]
    contest = Contest(lambda x: first(1.0, x), lambda b, x: second(np.exp(b[0]), x), starts)
    turned = Contest(lambda x: second(1.0, x), lambda b, x: first(np.exp(b[0]), x), starts)
    found, other = best_separation(contest, box((0, 30))), best_separation(turned, box((0, 60)))
    return {
        "ratio_k2_over_k1": np.exp(found.rival[0]),
        "k1_times": found.points[:, 0],
        "weights": found.weights,
        "T_value": found.value,
        "max_gap": np.sqrt(found.bound),
        "max_psi": found.bound,
        "k2_times_if_second_order_true": other.points[:, 0],
    }


def g1_15() -> dict[str, Any]:
    inside = logarithmic(curves.decay(1.0, 1.0), (1.0, 1.0))
    found = best_design(measure("c", 2, gradient=[0.0, 1.0]), inside, box((0, 30)))
    return {
        "u": found.points[1, 0],
        "weights": found.weights,
        "variance": found.criterion,
        "variance_formula": found.criterion,
        "max_sensitivity": found.bound,
    }


def g1_16() -> dict[str, Any]:
    ends = []
    for q in given("G1-16")["q"]:
        # (1-q) ln Delta + (q/3) ln det: Delta is the information on the quadratic term (Ds)
        mixed = compromise([(1 - q, measure("Ds", 3, subset=(2,))), (q, measure("D", 3))])
        found = best_design(mixed, curves.polynomial, box((-1, 1)))
        ends.append(found.weights[0] + found.weights[-1])
    return {"end_weight_total": ends}


def g1_17() -> dict[str, Any]:
    """By the criterion at the published time, averaged over the gamma density by Gauss and Laguerre."""
    shape, middle = given("G1-17")["shape"], given("G1-17")["mean_k"]
    nodes, parts = np.polynomial.laguerre.laggauss(60)
    parts = parts * gamma.pdf(nodes, shape) * np.exp(nodes)
    time, what = expected("G1-17")["time"], measure("D", 1)
    others = np.array([[time], [time / 2], [2 * time]])

    def averages(at: float) -> tuple[float, np.ndarray]:
        value, reach = 0.0, np.zeros(3)
        for k, part in zip(nodes * middle / shape, parts, strict=True):
            jacobian = curves.decay(1.0, k)
            matrix = information(standardised(jacobian(np.array([[at]]))[..., 1:]))
            value += part * criterion(what, matrix)
            reach += part * sensitivity(what, matrix, jacobian(others)[..., 1:])
        return value, reach

    value, reach = averages(time)
    # the criterion is a parabola near its top: the time at which it peaks, from three values
    around = np.log(time) + np.array([-0.05, 0.0, 0.05])
    bend, slope, _ = np.polyfit(around - around[1], [averages(np.exp(x))[0] for x in around], 2)
    return {
        "time": time * np.exp(-slope / (2 * bend)),
        "expected_log_info": value,
        "max_sensitivity": reach[0],
        "sensitivity_at_half": reach[1],
        "sensitivity_at_double": reach[2],
    }


def g1_18() -> dict[str, Any]:
    at = given("G1-18")
    variances, error = at["var_mean"], at["error_var"]
    return {
        "box_hill_D": symmetric_distance(at["p"], at["y"], variances, error),
        "hunter_reiner": squared_gap(*at["y"]),
        "buzzi_ferraris_T": gap_over_variance(*at["y"], *variances, error),
        "mutual_information": expected_information(at["p"], at["y"], variances, error),
    }


def g1_19() -> dict[str, Any]:
    jacobian = logarithmic(curves.intermediate(0.7, 0.2), (0.7, 0.2))
    best = best_design(measure("D", 2), jacobian, box((0, 20)))
    offer = jacobian(np.linspace(0, 20, 401)[:, None])
    plans = [np.array(plan, dtype=float)[:, None] for plan in given("G1-19")["plans"]]
    rated = [rate(measure("D", 2), jacobian(plan), offer, best=best) for plan in plans]
    return {"efficiency": [each.efficiency for each in rated]}


def g1_20() -> dict[str, Any]:
    def one_time(k: float, time: float) -> np.ndarray:
        return information(standardised(curves.decay(1.0, k)(np.array([[time]]))[..., 1:]))

    def log_scale(points: np.ndarray) -> np.ndarray:
        return np.stack([np.ones(len(points)), -points[:, 0]], axis=-1)

    at, what = given("G1-20"), measure("D", 1)
    ratios = at["ratio_true_to_guess"]
    found = best_design(measure("D", 2), log_scale, box(tuple(at["t_range"])))
    return {
        "efficiency": [efficiency(what, one_time(r, 1.0), one_time(r, 1 / r)) for r in ratios],
        "log_scale_times": found.points[:, 0],
        "log_scale_max_std_variance": found.bound,
    }


def g1_21() -> dict[str, Any]:
    found = jointly(curves.both(0.7, 0.2), (0.7, 0.2), 0, 20)
    return {
        "times": found.points[:, 0],
        "weights": found.weights,
        "log_det_M": found.criterion - 2 * np.log(0.7 * 0.2),
        "max_trace_sensitivity": found.bound,
    }


AVERAGED = "the averaged design is not searched for, only judged by its criterion"
ARITHMETIC = "arithmetic of the inputs, on which the other values of the case rest"
LEFT_OUT = {
    ("G1-06", "AUC"): ARITHMETIC,
    ("G1-06", "gradient"): ARITHMETIC,
    ("G1-07", "times"): AVERAGED,
    ("G1-07", "weights"): AVERAGED,
}
COMPUTING: dict[str, Callable[[], dict[str, Any]]] = {
    name.upper().replace("_", "-"): function for name, function in globals().items() if name.startswith("g1_")
}


def checks() -> list[Check]:
    return from_file(GROUP, COMPUTING, LEFT_OUT)
