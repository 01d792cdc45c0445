"""Known answers of practice for sampling times and levels, through the local criteria.

Each value is a closed form derived in the comment beside it; the rounded figures in brackets are the ones
commonly quoted. Statement numbers 1 to 9 follow the project's list of known answers.
"""

from __future__ import annotations

from collections.abc import Callable

import curves
import numpy as np
import pytest
from scipy.optimize import brentq

from designer.continuous import Design, best_design, local
from designer.information import (
    Sensitivities,
    criterion,
    in_logarithms,
    information,
    measure,
    standard_error,
    standardised,
)
from designer.region import box

Given = Callable[[np.ndarray], Sensitivities | np.ndarray]


def alone(k: float, start: float = 1.0) -> Given:
    """First order with known start, by ln k: dC/d(ln k) = -k t C0 exp(-k t)."""
    return lambda points: in_logarithms(curves.decay(start, k)(points)[..., 1:], [k])


def times(found: Design) -> np.ndarray:
    assert found.bound == pytest.approx(found.target, abs=1e-5)
    return found.points[:, 0]


def test_1_first_order_one_time_at_one_over_k() -> None:
    k, start, error = 0.05, 0.1, 0.001
    found = best_design(measure("D", 1), alone(k, start), box((0, 400)))
    assert times(found) == pytest.approx([1 / k])
    assert 1 - np.exp(-k * found.points[0, 0]) == pytest.approx(0.632, abs=5e-4)
    # |dC/d ln k| = C0/e there, so SE(ln k) = e sigma/C0 (2.72 % for 1 %)
    rows = standardised(Sensitivities(alone(k, start)(found.points), error**2))
    assert standard_error(information(rows), [1.0]) == pytest.approx(np.e * error / start)
    assert standard_error(information(rows), [1.0]) == pytest.approx(0.0272, abs=5e-5)


@pytest.mark.parametrize(("constant", "relative", "quoted"), [(0.005, 0.01, 1.298), (0.002, 0.02, 2.208)])
def test_2_constant_and_relative_error(constant: float, relative: float, quoted: float) -> None:
    def given(points: np.ndarray) -> Sensitivities:
        mean = np.exp(-0.2 * points[:, 0])
        return Sensitivities(alone(0.2)(points), constant**2 + (relative * mean) ** 2)

    found = best_design(measure("D", 1), given, box((0, 60)))
    # d/dt of t^2 C^2/(a^2 + b^2 C^2) = 0: k t = 1 + (b/a)^2 exp(-2 k t)
    root = brentq(lambda u: u - 1 - (relative / constant) ** 2 * np.exp(-2 * u), 1, 20)
    assert 0.2 * times(found) == pytest.approx([root], rel=1e-6)
    assert root == pytest.approx(quoted, abs=5e-4)


@pytest.mark.parametrize("end", [10.0, 40.0, 160.0])
def test_3_constant_relative_error_later_is_better(end: float) -> None:
    k, start, relative = 0.05, 2.0, 0.02

    def variance(points: np.ndarray) -> np.ndarray:
        return (relative * start * np.exp(-k * points[:, 0])) ** 2

    one = best_design(
        measure("D", 1), lambda x: Sensitivities(alone(k, start)(x), variance(x)), box((0, end))
    )
    assert times(one).tolist() == [end]
    # y/(relative y) is linear in t on the log scale: (1, -k t)/relative, hence the two ends
    both = lambda x: Sensitivities(in_logarithms(curves.decay(start, k)(x), (start, k)), variance(x))  # noqa: E731
    two = best_design(measure("D", 2), both, box((0, end)))
    assert times(two).tolist() == [0.0, end]
    assert two.weights == pytest.approx([0.5, 0.5])
    # SE(ln k) with known start, one reading at the end: relative/(k end), ever smaller
    matrix = information(standardised(Sensitivities(alone(k, start)(one.points), variance(one.points))))
    assert standard_error(matrix, [1.0]) == pytest.approx(relative / (k * end))


@pytest.mark.parametrize(("k", "start"), [(0.3, 0.1), (2.0, 0.05)])
def test_4_second_order_half_way(k: float, start: float) -> None:
    def given(points: np.ndarray) -> np.ndarray:
        # C = C0/(1 + k C0 t), dC/d(ln k) = -k t C^2
        return (-k * points[:, 0] * (start / (1 + k * start * points[:, 0])) ** 2)[:, None]

    found = best_design(measure("D", 1), given, box((0, 30 / (k * start))))
    assert times(found) == pytest.approx([1 / (k * start)])
    assert 1 / (1 + k * start * found.points[0, 0]) == pytest.approx(0.5)


@pytest.mark.parametrize(("end", "quoted"), [(20.0, 8.36), (60.0, 16.86), (100.0, 19.32)])
def test_5_three_unknowns(end: float, quoted: float) -> None:
    k = 0.05

    def given(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]  # y = A + B exp(-k t) by (A, B, k), B = 1
        return np.stack([np.ones(len(t)), np.exp(-k * t), -t * np.exp(-k * t)], axis=-1)

    found = best_design(measure("D", 3), given, box((0, end)))
    middle = 1 / k - end * np.exp(-k * end) / (1 - np.exp(-k * end))
    assert times(found) == pytest.approx([0.0, middle, end], rel=1e-6, abs=1e-9)
    assert found.weights == pytest.approx([1 / 3] * 3, abs=1e-5)
    assert middle == pytest.approx(quoted, abs=5e-3)


@pytest.mark.parametrize("end", [20.0, 25.0, 300.0])
def test_6_start_and_k_unknown(end: float) -> None:
    given = lambda x: in_logarithms(curves.decay(0.1, 0.05)(x), (0.1, 0.05))  # noqa: E731
    found = best_design(measure("D", 2), given, box((0, end)))
    # det of the two-point design at 0 and t is (k t exp(-k t))^2 / 4: t = 1/k, allowed from end = 1/k on
    assert times(found) == pytest.approx([0.0, 20.0], rel=1e-5, abs=1e-9)  # flat at the very end
    assert found.weights == pytest.approx([0.5, 0.5], abs=1e-5)


def test_7_saturation_constant_error() -> None:
    k, most = 0.08, 2.0
    given = lambda x: in_logarithms(curves.saturation(1.0, k)(x), (1.0, k))  # noqa: E731
    found = best_design(measure("D", 2), given, box((0, most)))
    assert times(found) == pytest.approx([k * most / (2 * k + most), most], rel=1e-6)
    assert found.points[0, 0] == pytest.approx(0.0741, abs=5e-5)


def test_8_saturation_constant_relative_error() -> None:
    v, k, least, most = 1.5, 0.08, 0.01, 2.0

    def given(points: np.ndarray) -> Sensitivities:
        mean = v * points[:, 0] / (k + points[:, 0])
        return Sensitivities(in_logarithms(curves.saturation(v, k)(points), (v, k)), (0.03 * mean) ** 2)

    found = best_design(measure("D", 2), given, box((least, most)))
    # rows (1, -K/(K + S)): a straight line in K/(K + S), monotone in S, hence the two ends
    assert times(found).tolist() == [least, most]
    assert found.weights == pytest.approx([0.5, 0.5], abs=1e-5)


@pytest.mark.parametrize(
    ("cold", "hot", "asked", "share", "inflation"),
    [(40, 70, 25, 0.73, 2.15), (50, 70, 20, 0.61, 4.51), (25, 50, 20, 0.85, 1.44)],
)
def test_9_effort_at_two_temperatures(
    cold: float, hot: float, asked: float, share: float, inflation: float
) -> None:
    low, high, aim = (1 / (celsius + 273.15) for celsius in (cold, hot, asked))
    # ln k at the asked temperature = c1 ln k(cold) + c2 ln k(hot), linear in x = 1/T
    first, second = (aim - high) / (low - high), (aim - low) / (high - low)
    closed, wider = abs(first) / (abs(first) + abs(second)), abs(first) + abs(second)
    assert closed == pytest.approx(share, abs=5e-3) and wider == pytest.approx(inflation, abs=5e-3)

    # by (ln k at the asked temperature, E): the first is the asked quantity
    def rows(points: np.ndarray) -> np.ndarray:
        return np.stack([np.ones(len(points)), -(1 / points[:, 0] - aim) / curves.GAS], axis=-1)

    extrapolated = measure("c", 2, gradient=[1.0, 0.0])
    ends = np.array([[cold + 273.15], [hot + 273.15]])
    listed = local(extrapolated, rows(ends))
    assert listed.weights == pytest.approx([closed, 1 - closed], abs=1e-5)
    assert np.sqrt(criterion(extrapolated, listed.information)) == pytest.approx(wider, rel=1e-6)
    # no temperature in between would do better
    anywhere = best_design(extrapolated, rows, box((cold + 273.15, hot + 273.15)))
    assert times(anywhere) == pytest.approx(ends[:, 0])
    assert anywhere.weights == pytest.approx(listed.weights, abs=1e-5)
