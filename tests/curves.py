"""Curves with known derivatives, for the tests of information: each returns (points, 1 or 2, parameters).

Derivatives are by hand, by theta; ``differences`` below checks every one of them.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

Jacobian = Callable[[np.ndarray], np.ndarray]
GAS = 8.314462618  # J/(mol K), CODATA 2018


def _stack(*columns: np.ndarray) -> np.ndarray:
    return np.stack(columns, axis=-1)[:, None, :]


def decay(a: float, k: float) -> Jacobian:
    """y = a exp(-k t) by (a, k)."""

    def jacobian(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]
        return _stack(np.exp(-k * t), -a * t * np.exp(-k * t))

    return jacobian


def approach(a: float, k: float) -> Jacobian:
    """y = a (1 - exp(-k t)) by (a, k)."""

    def jacobian(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]
        return _stack(1 - np.exp(-k * t), a * t * np.exp(-k * t))

    return jacobian


def reversible(forth: float, back: float) -> Jacobian:
    """B/A0 = k1/(k1 + k-1) (1 - exp(-(k1 + k-1) t)) by (k1, k-1)."""
    total = forth + back

    def jacobian(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]
        done, slope = 1 - np.exp(-total * t), t * np.exp(-total * t)
        return _stack(
            back / total**2 * done + forth / total * slope, -forth / total**2 * done + forth / total * slope
        )

    return jacobian


def intermediate(first: float, second: float) -> Jacobian:
    """B of A -> B -> C from A0 = 1, by (k1, k2)."""
    gap = first - second

    def jacobian(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]
        fast, slow = np.exp(-first * t), np.exp(-second * t)
        by_first = -second / gap**2 * (slow - fast) + first / gap * t * fast
        by_second = first / gap**2 * (slow - fast) - first / gap * t * slow
        return _stack(by_first, by_second)

    return jacobian


def both(first: float, second: float) -> Jacobian:
    """A and B of A -> B -> C, two readings of each sample."""

    def jacobian(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]
        return np.concatenate(
            [_stack(-t * np.exp(-first * t), 0 * t), intermediate(first, second)(points)], axis=1
        )

    return jacobian


def compartment(out: float, into: float, size: float) -> Jacobian:
    """y = th3 (exp(-th1 t) - exp(-th2 t)) by (th1, th2, th3)."""

    def jacobian(points: np.ndarray) -> np.ndarray:
        t = points[:, 0]
        slow, fast = np.exp(-out * t), np.exp(-into * t)
        return _stack(-size * t * slow, size * t * fast, slow - fast)

    return jacobian


def saturation(v: float, k: float) -> Jacobian:
    """v S/(K + S) by (V, K)."""

    def jacobian(points: np.ndarray) -> np.ndarray:
        s = points[:, 0]
        return _stack(s / (k + s), -v * s / (k + s) ** 2)

    return jacobian


def arrhenius_decay(k: float, energy: float, reference: float) -> Jacobian:
    """c/c0 = exp(-k(T) t) at (t, T), by (k at the reference temperature, E)."""

    def jacobian(points: np.ndarray) -> np.ndarray:
        t, shift = points[:, 0], (1 / points[:, 1] - 1 / reference) / GAS
        done = k * np.exp(-energy * shift) * t
        slope = -done * np.exp(-done)  # by ln k
        return _stack(slope / k, -shift * slope)

    return jacobian


def arrhenius_line(points: np.ndarray) -> np.ndarray:
    """ln k = ln A - E/(R T) by (ln A, E)."""
    return _stack(np.ones(len(points)), -1 / (GAS * points[:, 0]))


def polynomial(points: np.ndarray) -> np.ndarray:
    """b0 + b1 x + b2 x^2."""
    x = points[:, 0]
    return _stack(np.ones(len(x)), x, x**2)


def order_decay(n: float) -> Jacobian:
    """c of dc/dt = -k c^n, c0 = k = 1, by k: -t c^n."""

    def jacobian(points: np.ndarray) -> np.ndarray:
        return _stack(-points[:, 0] * left(n, points[:, 0]) ** n)

    return jacobian


def left(n: float, t: np.ndarray) -> np.ndarray:
    """Fraction left after time t of an order-n decay with k c0^(n-1) = 1."""
    if n == 1:
        return np.exp(-t)
    return np.maximum(1 + (n - 1) * t, 0.0) ** (-1 / (n - 1))
