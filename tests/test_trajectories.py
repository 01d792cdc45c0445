"""Concentrations over time against published values and closed forms written out again here.

Check values: tests/reference/cases.json (group 2). Error bounds are shares of the starting concentration.
"""

from __future__ import annotations

from math import log

import courses
import numpy as np
import pytest
from courses import BOTH, SINGLE
from scipy.special import wrightomega

from designer.errors import CallError

HALVES = np.geomspace(1e-4, 1e3, 29)  # in half-lives
POWER = courses.candidate(("k*[A]^n", SINGLE))
ORDERS = [1e-12, 0.2, 0.5, 0.9, 1 - 1e-8, 1 - 1e-2, 1.0, 1 + 1e-9, 1 + 1e-5, 1 + 1e-2, 1.5, 2.0, 2.5, 3.0]


# ---- published values


def test_orders_g2_01() -> None:
    given, expected = courses.published("G2-01")
    orders = np.array(given["orders"])
    for path in (courses.chosen(POWER), courses.quadrature(POWER)):
        start = {"A": given["c0"], "P": 0.0}
        now, _, trouble = courses.batch(path, {"k": given["k"], "n": orders}, start, [given["t"]])
        np.testing.assert_allclose(now["A"][:, 0], expected["concentration"], rtol=1e-7, atol=1e-9)
        half = np.array(expected["half_life"])[:, None]
        now, _, trouble = courses.batch(path, {"k": given["k"], "n": orders}, start, half)
        np.testing.assert_allclose(now["A"][:, 0], given["c0"] / 2, rtol=1e-7)
        ends = [[expected["finite_end_time_order0"]], [expected["finite_end_time_order_half"]]]
        now, rates, trouble = courses.batch(
            path, {"k": given["k"], "n": orders[:2]}, start, np.array(ends) * [1.0, 1.5]
        )
        assert np.all(now["A"] < 1e-8 * given["c0"])
        assert np.all(rates[:, 0, 1] == 0) and not np.any(trouble)


def test_whole_orders_have_the_quadratic_form() -> None:
    given, expected = courses.published("G2-01")
    for order, place in ((0, 0), (1, 2), (2, 4)):
        law = courses.candidate((f"k*[A]^{order}", SINGLE))
        assert courses.chosen(law).name == "quadratic"
        now, _, _ = courses.batch(
            courses.chosen(law), {"k": given["k"]}, {"A": given["c0"], "P": 0}, [given["t"]]
        )
        assert now["A"][0, 0] == pytest.approx(expected["concentration"][place], abs=1e-10)


def test_unequal_amounts_g2_03() -> None:
    given, expected = courses.published("G2-03")
    path = courses.chosen(courses.candidate(("k*[A]*[B]", BOTH)))
    start = {"A": given["A0"], "B": given["B0"], "P": 0}
    now, _, _ = courses.batch(path, {"k": given["k"]}, start, [given["t"], expected["half_life_of_A"]])
    np.testing.assert_allclose([now["A"][0, 0], now["B"][0, 0]], [expected["A"], expected["B"]], rtol=1e-7)
    assert now["A"][0, 1] == pytest.approx(given["A0"] / 2, rel=1e-8)
    flooded = {"A": given["A0"], "B": 20 * given["A0"], "P": 0}
    time = 1 / (given["k"] * flooded["B"])
    now, _, _ = courses.batch(path, {"k": given["k"]}, flooded, [time])
    assert now["A"][0, 0] / given["A0"] == pytest.approx(expected["flooding_A_over_A0"], rel=1e-7)


def test_reversible_g2_04() -> None:
    given, expected = courses.published("G2-04")
    two_steps = courses.candidate(("k1*[A]", {"A": -1, "B": 1}), ("km1*[B]", {"A": 1, "B": -1}))
    one_step = courses.candidate(("k1*[A] - km1*[B]", {"A": -1, "B": 1}))
    times = [given["t"], expected["time_to_A_half"], 1e3]
    wanted = [expected["A"], given["A0"] / 2, expected["A_equilibrium"]]
    for law in (two_steps, one_step):
        path = courses.chosen(law)
        assert path.name == "quadratic"
        values = {name: given[name] for name in ("k1", "km1")}
        now, rates, _ = courses.batch(path, values, {"A": given["A0"], "B": 0}, times)
        np.testing.assert_allclose(now["A"][0], wanted, rtol=1e-7)
        net = rates[0, 0] - rates[0, 1] if len(law.steps) == 2 else rates[0, 0]
        assert net[2] == pytest.approx(0, abs=1e-12)


def test_consecutive_g2_05() -> None:
    given, expected = courses.published("G2-05")
    path = courses.chosen(courses.candidate(("k1*[A]", {"A": -1, "B": 1}), ("k2*[B]", {"B": -1, "C": 1})))
    assert path.name == "linear"
    pairs = np.array([*given["pairs"], [0.5 * (1 + 1e-9), 0.5]])
    values = {"k1": pairs[:, 0], "k2": pairs[:, 1]}
    tops = np.array([*expected["tmax"], 2.0])
    times = np.stack([np.full(4, given["t"]), tops], axis=1)
    now, _, trouble = courses.batch(path, values, {"A": 1, "B": 0, "C": 0}, times)
    b, c = [*expected["B_at_3"], expected["B_at_3"][2]], [*expected["C_at_3"], expected["C_at_3"][2]]
    np.testing.assert_allclose(now["B"][:, 0], b, rtol=1e-7)
    np.testing.assert_allclose(now["C"][:, 0], c, rtol=1e-7)
    np.testing.assert_allclose(now["B"][:3, 1], expected["Bmax"], rtol=1e-7)
    assert not np.any(trouble)


def test_autocatalysis_g2_06() -> None:
    given, expected = courses.published("G2-06")
    law = courses.candidate(("k*[A]*[B]", {"A": -1, "B": 1}))
    for path in (courses.chosen(law), courses.quadrature(law)):
        start = {"A": given["A0"], "B": given["B0"]}
        times = [given["t"], expected["t_fastest"]]
        now, rates, _ = courses.batch(path, {"k": given["k"]}, start, times)
        assert now["B"][0, 0] == pytest.approx(expected["B"], rel=1e-7)
        assert rates[0, 0, 1] == pytest.approx(expected["max_rate"], rel=1e-9)


def test_saturation_g2_07() -> None:
    given, expected = courses.published("G2-07")
    law = courses.candidate(("V*[S]/(K+[S])", {"S": -1, "P": 1}))
    path = courses.chosen(law)
    assert path.name == "extent"
    columns = np.array([given[case] for case in "abc"], dtype=float)
    values = {"V": columns[:, 1], "K": columns[:, 2]}
    now, _, trouble = courses.batch(path, values, {"S": columns[:, 0], "P": 0}, columns[:, 3:])
    wanted = [expected[f"S_{case}"] for case in "abc"]
    np.testing.assert_allclose(now["S"][:, 0], wanted, rtol=1e-7)
    assert not np.any(trouble)
    # the half-life of the whole law: (S0/2 + K ln 2)/V
    now, _, _ = courses.batch(path, {"V": 0.5, "K": 1.0}, {"S": 2, "P": 0}, [expected["half_time_a"]])
    assert now["S"][0, 0] == pytest.approx(1, rel=1e-8)


def test_stoichiometric_numbers_g2_14() -> None:
    given, expected = courses.published("G2-14")
    law = courses.candidate(("k*[N2O5]", {name: float(n) for name, n in given["nu"].items()}))
    start = {"N2O5": 1.0, "NO2": 0, "O2": 0}
    times = [expected["half_life_if_k_refers_to_v"], 1e5]
    now, _, _ = courses.batch(courses.chosen(law), {"k": given["k"]}, start, times)
    np.testing.assert_allclose(now["N2O5"][0], [0.5, 0], atol=1e-9)
    np.testing.assert_allclose([now["NO2"][0, 1], now["O2"][0, 1]], [2, 0.5], rtol=1e-12)


def test_order_1_6_g2_15() -> None:
    given, expected = courses.published("G2-15")
    times = [expected["DT50"], expected["DT90"]]
    start = {"A": given["c0"], "P": 0}
    now, _, _ = courses.batch(courses.chosen(POWER), {"k": given["k"], "n": given["n"]}, start, times)
    np.testing.assert_allclose(now["A"][0], [50, 10], rtol=1e-8)


def test_first_order_times_g2_16() -> None:
    _, expected = courses.published("G2-16")
    path = courses.chosen(courses.candidate(("k*[A]", SINGLE)))
    times = [expected["t_loss10"], expected["t_loss90"], expected["t_loss99"], 10.0]
    now, _, _ = courses.batch(path, {"k": log(2)}, {"A": 1, "P": 0}, times)
    np.testing.assert_allclose(now["A"][0], [0.9, 0.1, 0.01, expected["left_after_10"]], rtol=1e-7)


# ---- closed forms over wide ranges


def _orders(n: np.ndarray, c0: float, k: float, times: np.ndarray) -> np.ndarray:
    """Order n (draw,) at times (draw, time): c0 (1 + m z)^(-1/m), by log1p; first order within 1e-14."""
    m = n[:, None] - 1
    z = k * c0**m * times
    with np.errstate(all="ignore"):
        power = c0 * np.exp(-np.log1p(np.maximum(m * z, -1.0)) / m)
    return np.where(np.abs(m) < 1e-14, c0 * np.exp(-z), power)


@pytest.mark.parametrize("quadrature", [False, True])
def test_any_order(quadrature: bool) -> None:
    """Orders 0 to 3, also within 1e-9 of 1, from 1e-4 to 1e3 half-lives; bound of the quadrature 1.8e-10."""
    n, c0, k = np.array(ORDERS), 0.05, 0.01
    half = np.where(
        np.abs(n - 1) < 1e-14, log(2) / k, np.expm1((n - 1) * log(2)) / ((n - 1 + 1e-300) * k * c0 ** (n - 1))
    )
    times = half[:, None] * HALVES
    path = courses.quadrature(POWER) if quadrature else courses.chosen(POWER)
    now, _, trouble = courses.batch(path, {"k": k, "n": n}, {"A": c0, "P": 0}, times)
    error = np.abs(now["A"] - _orders(n, c0, k, times)) / c0
    assert np.max(error) < (5e-10 if quadrature else 1e-13)
    assert not np.any(trouble)


@pytest.mark.parametrize("quadrature", [False, True])
@pytest.mark.parametrize("used", [1, 2])
def test_two_reactants(quadrature: bool, used: int) -> None:
    """A + used B at 1:1, 1:1 + 1e-6, 1:2 and 1:1000, either in excess; closed form by expm1."""
    law = courses.candidate(("k*[A]*[B]", {"A": -1.0, "B": -float(used), "P": 1.0}))
    a, b = 0.05, 0.05 * np.array([1.0, 1 + 1e-6, 2.0, 1000.0, 0.5, 1e-3])
    k, times = 0.03, np.broadcast_to(np.geomspace(1e-2, 1e5, 15), (6, 15))
    path = courses.quadrature(law) if quadrature else courses.chosen(law)
    now, _, trouble = courses.batch(path, {"k": k}, {"A": a, "B": b, "P": 0}, times)
    # x' = k used (a - x)(d - x) with d = b/used: x = a (1 - E)/(1 - a E/d), E = exp(-(d - a) k used t)
    d = b[:, None] / used
    s = (d - a) * k * used * times
    with np.errstate(all="ignore"):
        forward = a * -np.expm1(-s) / (-np.expm1(-s) + (d - a) / d * np.exp(-s))
        equal = a - a / (1 + a * k * used * times)
        swapped = d * -np.expm1(s) / (-np.expm1(s) + (a - d) / a * np.exp(s))
    x = np.where(np.abs(d - a) < 1e-15, equal, np.where(d > a, forward, swapped))
    assert np.max(np.abs(now["P"] - x) / np.minimum(a, d)) < (1e-10 if quadrature else 2e-13)
    assert not np.any(trouble)


def test_saturation_over_six_decades() -> None:
    """S0/K from 1e-3 to 1e3; oracle K omega(ln(S0/K) + (S0 - V t)/K), omega of scipy."""
    law = courses.candidate(("V*[S]/(K+[S])", {"S": -1, "P": 1}))
    s, k, v = 0.02, 0.02 / np.geomspace(1e-3, 1e3, 7), 1e-4
    half = (s / 2 + k * log(2)) / v
    times = half[:, None] * HALVES
    now, _, trouble = courses.batch(courses.chosen(law), {"V": v, "K": k}, {"S": s, "P": 0}, times)
    oracle = k[:, None] * wrightomega(np.log(s / k)[:, None] + (s - v * times) / k[:, None]).real
    assert np.max(np.abs(now["S"] - oracle)) / s < 5e-10
    assert not np.any(trouble)


@pytest.mark.parametrize("quadrature", [False, True])
def test_equilibrium_from_either_side(quadrature: bool) -> None:
    """A + B = C, K from 1e-2 to 1e6 L/mol, forward and (hardly any A) backward: extended precision."""
    law = courses.candidate(("k*[A]*[B] - k/K*[C]", {"A": -1, "B": -1, "C": 1}))
    ratio = np.array([1e-2, 1.0, 1e2, 1e4, 1e6] * 2)
    a = np.array([0.05] * 5 + [1e-9] * 5)
    c = np.array([0.0] * 5 + [0.05] * 5)
    b, k = 0.07, 0.1
    times = np.geomspace(1e-1, 1e5, 13)
    path = courses.quadrature(law) if quadrature else courses.chosen(law)
    now, rates, trouble = courses.batch(path, {"k": k, "K": ratio}, {"A": a, "B": b, "C": c}, times)
    wide = np.longdouble
    total = wide(a)[:, None] + wide(b) + 1 / wide(ratio)[:, None]
    inner = wide(a)[:, None] * wide(b) - wide(c)[:, None] / wide(ratio)[:, None]
    root = np.sqrt(total**2 - 4 * inner)
    near, far = 2 * inner / (total + root), (total + root) / 2
    decay = np.exp(-wide(k) * root * times)
    x = near * (1 - decay) / (1 - near / far * decay)
    assert np.max(np.abs(now["C"] - c[:, None] - x) / 0.05) < (1e-9 if quadrature else 1e-13)
    assert not np.any(trouble)
    assert np.all(np.sign(rates[:, 0, 0]) == np.sign(inner[:, 0]))


@pytest.mark.parametrize("quadrature", [False, True])
def test_tiny_seeds(quadrature: bool) -> None:
    """Autocatalysis from seeds of 1e-9 to 1: logistic growth through the time of its steepest rise."""
    law = courses.candidate(("k*[A]*[B]", {"A": -1, "B": 1}))
    seed = np.array([1e-9, 1e-6, 1e-3, 1.0])
    a, k = 0.5, 0.02
    times = np.log(a / seed)[:, None].clip(1) / (k * a) * np.array([0.2, 0.5, 0.9, 1.0, 1.1, 2.0])
    path = courses.quadrature(law) if quadrature else courses.chosen(law)
    now, _, trouble = courses.batch(path, {"k": k}, {"A": a, "B": seed}, times)
    both = (a + seed)[:, None]
    oracle = both / (1 + (a / seed)[:, None] * np.exp(-k * both * times))
    assert np.max(np.abs(now["B"] - oracle)) / a < (1e-9 if quadrature else 1e-12)
    assert not np.any(trouble)


@pytest.mark.parametrize("quadrature", [False, True])
def test_used_up_before_the_law_says_so(quadrature: bool) -> None:
    """A path without hydroxide goes on until the hydroxide is gone, and stops there for good."""
    law = courses.candidate(("(k0+k*[B])*[A]", BOTH))
    path = courses.quadrature(law) if quadrature else courses.chosen(law)
    k0, k, a, b = 1e-3, 0.02, 0.05, 0.02
    # x' = k (e + b - x)(a - x), e = k0/k; it reaches b at the time of the logarithm
    e = k0 / k
    end = log(a / (a - b) * e / (e + b)) / (k * (e + b - a))
    times = np.array([0.5, 0.999, 1.001, 1.5, 100]) * end
    now, rates, trouble = courses.batch(path, {"k0": k0, "k": k}, {"A": a, "B": b, "P": 0}, times)
    np.testing.assert_allclose(now["A"][0, 2:], a - b, rtol=1e-9)
    np.testing.assert_allclose(now["B"][0, 2:], 0, atol=1e-10)
    assert now["B"][0, 1] > 0 and rates[0, 0, 1] == pytest.approx(k0 * (a - b), rel=2e-3)
    assert np.all(rates[0, 0, 2:] == 0) and not trouble[0]


def test_rate_without_a_zero() -> None:
    """Zero plus second order, k0 + k[A]^2: x by the tangent, to the end at atan(...)/..., and then still."""
    law = courses.candidate(("k0+k*[A]^2", SINGLE))
    k0, k, a = 1e-5, 0.01, 0.05
    d = (k0 * k) ** 0.5
    end = np.arctan(a * (k / k0) ** 0.5) / d
    times = np.array([0.1, 0.9, 0.9999, 1.0001, 3, 1e3]) * end
    now, _, trouble = courses.batch(courses.chosen(law), {"k0": k0, "k": k}, {"A": a, "P": 0}, times)
    oracle = (k0 / k) ** 0.5 * np.tan(np.arctan(a * (k / k0) ** 0.5) - d * np.minimum(times, end))
    np.testing.assert_allclose(now["A"][0], np.maximum(oracle, 0), atol=1e-14)
    assert not trouble[0]


# ---- a factor of time alone


def test_dying_catalyst() -> None:
    """k exp(-kd t)[A]: ln(A0/A) = k (1 - exp(-kd t))/kd, with kd from next to nothing to fast."""
    law = courses.candidate(("k*catalyst*exp(-kd*time)*[A]", SINGLE))
    kd, k, catalyst = np.array([1e-14, 1e-5, 1e-3, 0.5]), 2e-3, 0.5
    times = np.geomspace(1, 1e4, 9)
    path = courses.chosen(law, "catalyst")
    values = {"k": k, "kd": kd, "catalyst": catalyst}
    now, rates, trouble = courses.batch(path, values, {"A": 0.1, "P": 0}, times)
    tau = -np.expm1(-kd[:, None] * times) / kd[:, None]
    np.testing.assert_allclose(now["A"], 0.1 * np.exp(-k * catalyst * tau), rtol=1e-12, atol=1e-15)
    expected = k * catalyst * np.exp(-kd[:, None] * times) * now["A"]
    np.testing.assert_allclose(rates[:, 0], expected, rtol=1e-11, atol=1e-18)
    assert path.name == "quadratic" and not np.any(trouble)


@pytest.mark.parametrize("text", ["k/(1+b*time)*[A]", "k*(1+b*time)*[A]", "[A]*k/exp(b*time)"])
def test_other_clocks(text: str) -> None:
    """Lamp profiles: the integral of the factor by quadrature, a polynomial and an exponential below."""
    b, k, times = 1e-3, 2e-3, np.array([0.0, 10.0, 500.0, 2500.0])
    now, _, trouble = courses.batch(
        courses.chosen(courses.candidate((text, SINGLE))), {"k": k, "b": b}, {"A": 0.1, "P": 0}, times
    )
    integrals = {"k/": np.log1p(b * times) / b, "k*": times + b * times**2 / 2}
    tau = integrals.get(text[:2], -np.expm1(-b * times) / b)
    np.testing.assert_allclose(now["A"][0], 0.1 * np.exp(-k * tau), rtol=1e-12, atol=1e-15)
    assert not trouble[0]


def test_a_clock_that_runs_backward_is_trouble() -> None:
    law = courses.candidate(("k*(1-b*time)*[A]", SINGLE))
    values = {"k": 1e-3, "b": np.array([1e-4, 1e-2])}
    _, _, trouble = courses.batch(courses.chosen(law), values, {"A": 0.1, "P": 0}, [100.0, 1000.0])
    np.testing.assert_array_equal(trouble, [0, 1])


# ---- what cannot be solved says so


def test_trouble_is_a_value() -> None:
    """A double zero on the way, a domain that ends, a rate that explodes; their neighbours are fine."""
    double = courses.candidate(("k*([A]-c)^2*[A]*[A]", SINGLE))
    _, _, trouble = courses.batch(
        courses.chosen(double), {"k": 1.0, "c": [0.03, 0.5]}, {"A": 0.05, "P": 0}, [1e5]
    )
    np.testing.assert_array_equal(trouble, [1, 0])
    domain = courses.candidate(("k*log(c*[A])", SINGLE))
    _, _, trouble = courses.batch(
        courses.chosen(domain), {"k": 1e-3, "c": [40.0, -1.0]}, {"A": 0.05, "P": 0}, [10.0]
    )
    np.testing.assert_array_equal(trouble, [0, 1])
    explosive = courses.candidate(("k*[P]^2", {"P": 1}))
    _, _, trouble = courses.batch(courses.chosen(explosive), {"k": 1.0}, {"P": [0.1, 1.0]}, [5.0])
    np.testing.assert_array_equal(trouble, [0, 1])


def test_unknown_names_are_refused() -> None:
    with pytest.raises(CallError, match=r"the rate of 'under test' names pressure, given nowhere"):
        law = courses.candidate(("k*[A]", SINGLE))
        text = courses.candidate(("k*pressure*[A]", SINGLE)).steps
        courses.chosen(type(law)(law.name, 1.0, text, law.constants))


def test_nothing_to_react() -> None:
    """Absent reactants and time 0 give what was started with."""
    for text in ("k*[A]*[B]", "k*[A]^n*[B]", "k*[A]/(n+[A])*[B]"):
        path = courses.chosen(courses.candidate((text, BOTH)))
        values = {"k": 0.1, "n": 1.3} if "n" in text else {"k": 0.1}
        now, rates, trouble = courses.batch(
            path, values, {"A": 0.1, "B": [0.0, 0.2], "P": 0}, [0.0, 0.0, 50.0]
        )
        np.testing.assert_array_equal(now["A"][0], 0.1)
        np.testing.assert_array_equal(now["A"][1, :2], 0.1)
        assert np.all(rates[0] == 0) and rates[1, 0, 0] > 0 and not np.any(trouble)
