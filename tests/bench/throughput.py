"""Evidence throughput against a loop over ``scipy.optimize.least_squares`` doing the same fits.

Both fit one virtual study of the ester (12 readings in 3 runs, 9 errors of the runs, 1 or 2 constants)
from a scan of the constants. The loop is plain numpy with the closed form of the rate law; its residuals
are the readings over their SD at the law's own mean and the coordinates themselves (the prior), which is
the kernel's problem without the logarithm of the SD, so the loop has the easier task.
"""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from designer.arrays import jax
from designer.evidence import Kernel, Point
from designer.likelihood import Design, Readings
from designer.signals import law
from designer.virtual import simulate
from tests import ester

LOOP = 12  # fits of the loop (each takes milliseconds)


@dataclass(frozen=True)
class Throughput:
    candidate: str
    loop: float  # s a fit
    cold: float
    warm: float


def _studies(count: int) -> tuple[Design, Readings, np.ndarray]:
    study = ester.study()
    cases = [case for case in ester.reference() if case["design"] == "varied 3x4"][:1]
    design = Design(*ester.arrays_of(cases)[0])
    random = np.random.default_rng(5)
    truth = law(study, study.candidates[2])
    u, z = random.standard_normal((count, 2)), random.standard_normal((count, 3, 3))
    noise = random.standard_normal((count, 3, 4, 1))
    made = jax.jit(jax.vmap(lambda a, b, e: simulate(truth, a, b, e, design.conditions, design.times)))(
        u, z, noise
    )
    return design, Readings(*(np.asarray(x) for x in made)), u


def _curve(name: str, constants: np.ndarray, z: np.ndarray, design: Design) -> tuple[np.ndarray, np.ndarray]:
    """Ester and its slope in time: (run, time)."""
    e0 = (design.conditions[:, 0] * np.exp(0.010 * z[:, 0]))[:, None]
    h0 = (design.conditions[:, 1] * np.exp(0.015 * z[:, 1]))[:, None]
    factor = np.exp(0.008 * z[:, 2])[:, None]
    t = np.asarray(design.times)
    if name == "M4":
        k = np.exp(np.log(1.39e-3) + 0.667909 * constants[0]) * factor
        left = e0 * np.exp(-k * t)
        return left, -k * left
    k = np.exp(np.log(0.0278) + 0.667909 * constants[-1]) * factor
    k0 = np.exp(np.log(5.6e-4) + 0.978457 * constants[0]) * factor if name == "M3" else 0.0 * k
    nu = 2.0 if name == "M2" else 1.0
    # x' = (k0 + k (h0 - nu x)) (e0 - x): roots e0 and (h0 + k0/k)/nu
    other = (h0 + k0 / k) / nu
    gap = other - e0
    grown = np.expm1(np.clip(nu * k * gap * t, -700, 700))
    x = e0 * other * grown / (other * (grown + 1) - e0)
    x = np.minimum(x, np.minimum(e0, h0 / nu))
    return e0 - x, -(k0 + k * (h0 - nu * x)) * (e0 - x)


def _loop(name: str, size: int, design: Design, readings: Readings, count: int) -> float:
    nodes = np.linspace(-3, 3, 13)[:, None] if size == 1 else np.random.default_rng(0).normal(size=(65, 2))

    def residuals(x: np.ndarray, read: np.ndarray) -> np.ndarray:
        mean, slope = _curve(name, x[:size], x[size:].reshape(3, 3), design)
        spread = np.sqrt(3e-5**2 + (0.012 * mean) ** 2 + (5.0 * slope) ** 2)
        return np.concatenate([((read - mean) / spread).ravel(), x])

    begin = time.perf_counter()
    for index in range(count):
        read = readings.values[index, :, :, 0]
        starts = [np.concatenate([node, np.zeros(9)]) for node in nodes]
        start = min(starts, key=lambda x: float((residuals(x, read) ** 2).sum()))
        least_squares(residuals, start, args=(read,))
    return (time.perf_counter() - begin) / count


def _best(function, repeats: int = 3) -> float:  # type: ignore[no-untyped-def]
    taken = []
    for _ in range(repeats):
        begin = time.perf_counter()
        function()
        taken.append(time.perf_counter() - begin)
    return min(taken)


def measure(count: int = 1024, lanes: int = 256) -> list[Throughput]:
    """Seconds a fit for laws M1 (one constant) and M3 (two), in one run."""
    design, readings, _ = _studies(count)
    study = ester.study()
    found = []
    for index in (0, 2):
        candidate = study.candidates[index]
        kernel = Kernel(law(study, candidate), lanes)
        fit = kernel.fit(design, readings)
        near = Point(fit.u + 0.01, fit.z + 0.05)
        cold = _best(lambda kernel=kernel: kernel.fit(design, readings)) / count
        warm = _best(lambda kernel=kernel, near=near: kernel.fit(design, readings, near)) / count
        loop = _loop(candidate.name, index // 2 + 1, design, readings, LOOP)
        found.append(Throughput(candidate.name, loop, cold, warm))
    return found


def lines() -> list[str]:
    rows = [
        "| law | loop | cold, exact Hessian | times the loop | warm-started | times the loop |",
        "|---|---|---|---|---|---|",
    ]
    for x in measure():
        rows.append(
            f"| {x.candidate} | {x.loop * 1e3:.2f} ms | {x.cold * 1e6:.0f} us | {x.loop / x.cold:.0f} | "
            f"{x.warm * 1e6:.0f} us | {x.loop / x.warm:.0f} |"
        )
    return rows
