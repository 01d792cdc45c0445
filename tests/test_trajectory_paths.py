"""Paths against each other, against scipy and by their derivatives: one judge, many members.

Shares of the largest starting concentration: 1e-6 between any two paths, 5e-6 where one is the integrator.
"""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from pathlib import Path as File
from typing import Any, NamedTuple

import courses
import numpy as np
import pytest
from courses import BOTH, SINGLE, Numbers
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from designer import expressions
from designer.arrays import jax, jnp
from designer.records import Candidate
from designer.trajectories import Path, implicit, integrator, linear

TIMES = np.array([3000.0, 0.0, 1.0, 30.0, 300.0, 300.0, 1e4])  # not sorted, repeated, with 0


class Case(NamedTuple):
    law: Candidate
    values: Numbers
    start: Numbers
    paths: tuple[str, ...]


def _case(steps: tuple, values: Numbers, start: Numbers, *paths: str) -> Case:  # type: ignore[type-arg]
    return Case(courses.candidate(*steps), values, start, paths)


DIMER = (
    ("k1*[A]^2 - k2*[B]", {"A": -2.0, "B": 1.0}),
    ("k3*[B]", {"B": -1.0, "C": 1.0}),
)
CASES = {
    "first order in both": _case(
        (("k*[A]*[B]", BOTH),),
        {"k": 0.03},
        {"A": 0.05, "B": 0.05, "P": 0.0},
        "chosen",
        "quadrature",
        "implicit",
    ),
    "order n": _case(
        (("k*[A]^n", SINGLE),),
        {"k": 0.02, "n": 1.4},
        {"A": 0.05, "P": 0.0},
        "chosen",
        "quadrature",
        "implicit",
    ),
    "orders of two": _case(
        (("k*([A]/ref)^n*([B]/ref)^m", BOTH),),
        {"k": 1e-4, "n": 0.7, "m": 1.3, "ref": 0.05},
        {"A": 0.05, "B": 0.08, "P": 0.0},
        "chosen",
        "integrator",
    ),
    "equilibrium": _case(
        (("k*[A]*[B]", {"A": -1, "B": -1, "P": 1}), ("k/K*[P]", {"A": 1, "B": 1, "P": -1})),
        {"k": 0.1, "K": 30.0},
        {"A": 0.05, "B": 0.07, "P": 0.01},
        "chosen",
        "implicit",
    ),
    "reversible, then lost": _case(
        (
            ("k1*[A]", {"A": -1, "B": 1}),
            ("k1/K*[B]", {"A": 1, "B": -1}),
            ("k2*[B]", {"B": -1, "C": 1, "D": 1}),
        ),
        {"k1": 7e-3, "k2": 2e-4, "K": 3.0},
        {"A": 0.05, "B": 0.0, "C": 0.0, "D": 0.0},
        "chosen",
        "implicit",
        "integrator",
    ),
    "dimer": _case(
        DIMER,
        {"k1": 1.0, "k2": 2e-2, "k3": 1e-3},
        {"A": 0.05, "B": 0.0, "C": 0.0},
        "chosen",
        "mild integrator",
    ),
    "stiff dimer": _case(
        DIMER,
        {"k1": 1e4, "k2": 2e2, "k3": 1e-3},
        {"A": 0.05, "B": 0.0, "C": 0.0},
        "chosen",
        "integrator",
    ),
    "decay that depends on concentration": _case(
        (
            ("k*[cat]*[A]", {"A": -1, "P": 1}),
            ("kd*[cat]*[P]", {"cat": -1, "dead": 1}),
        ),
        {"k": 1.0, "kd": 0.2},
        {"A": 0.05, "P": 0.0, "cat": 0.002, "dead": 0.0},
        "chosen",
        "mild integrator",
    ),
}


def _path(case: Case, name: str) -> Path:
    makers: dict[str, Callable[[], Path]] = {
        "chosen": lambda: courses.chosen(case.law),
        "quadrature": lambda: courses.quadrature(case.law),
        "implicit": lambda: implicit.path(case.law),
        "integrator": lambda: integrator.path(case.law),
        "mild integrator": lambda: integrator.path(case.law, stiff=False),
    }
    return makers[name]()


def _numbers(case: Case) -> np.ndarray:
    names = list(case.start)
    return np.array(
        [[dict(s.equation.stoichiometry).get(n, 0.0) for s in case.law.steps] for n in names], dtype=float
    )


def _independent(case: Case, times: np.ndarray) -> np.ndarray:
    """(species, times) by scipy's LSODA or Radau, rtol 1e-11."""
    matrix, names = _numbers(case), list(case.start)

    def slope(_: float, y: np.ndarray) -> np.ndarray:
        now = dict(zip(names, np.maximum(y, 0), strict=True))
        rates = [expressions.evaluate(s.rate, case.values, now, case.start, {}) for s in case.law.steps]
        return matrix @ np.array(rates)

    first = np.array(list(case.start.values()))
    moments = np.unique(times)
    options: dict[str, Any] = {"method": "Radau", "rtol": 1e-11, "atol": 1e-15, "t_eval": moments}
    found = solve_ivp(slope, (0, moments[-1]), first, **options)
    return found.y[:, np.searchsorted(moments, times)]


@pytest.mark.parametrize("name", CASES)
def test_every_path_finds_the_same(name: str) -> None:
    case = CASES[name]
    reference = _independent(case, TIMES)
    matrix, largest = _numbers(case), max(case.start.values())
    for kind in case.paths:
        now, rates, trouble = courses.batch(_path(case, kind), case.values, case.start, TIMES)
        found = np.stack([now[species][0] for species in case.start])
        allowed = 5e-6 if "integrator" in kind else 1e-6
        assert np.max(np.abs(found - reference)) < allowed * largest, kind
        assert not np.any(trouble), kind
        assert np.min(found) >= 0, kind
        # what the steps do to the amounts at the first moment is what their rates say
        at_once = matrix @ rates[0][:, 1]
        np.testing.assert_allclose(at_once, _slope_at_start(case), rtol=1e-9, atol=1e-15)


def _slope_at_start(case: Case) -> np.ndarray:
    rates = [expressions.evaluate(s.rate, case.values, case.start, case.start, {}) for s in case.law.steps]
    return _numbers(case) @ np.array(rates)


# ---- derivatives three ways

SMOOTH = {
    "quadratic": ("first order in both", "chosen", 1e-9, 1e-6),
    "power": ("order n", "chosen", 1e-9, 1e-6),
    "extent": ("orders of two", "chosen", 1e-7, 1e-5),
    "extent, with an equilibrium": ("equilibrium", "quadrature of the sum", 1e-7, 1e-5),
    "linear": ("reversible, then lost", "chosen", 1e-9, 1e-6),
    "implicit": ("dimer", "chosen", 2e-6, 1e-4),
    "integrator": ("dimer", "mild integrator", 2e-5, None),
}


def _smooth(kind: str) -> tuple[Callable[[Any], Any], Any]:
    name, path, _, _ = SMOOTH[kind]
    case = CASES[name]
    if path == "quadrature of the sum":
        law = courses.candidate(("k*[A]*[B] - k/K*[P]", BOTH))
        case = Case(law, case.values, case.start, ())
        path = "quadrature"
    return courses.in_logs(_path(case, path), case.values, case.start, np.array([20.0, 300.0, 3000.0]))


@pytest.mark.parametrize("kind", SMOOTH)
def test_first_derivatives_three_ways(kind: str) -> None:
    """Forward, backward and central differences with Richardson's correction, in ln of every input."""
    shares, at = _smooth(kind)
    fast = jax.jit(shares)
    forward = np.asarray(jax.jit(jax.jacfwd(shares))(at))
    direction = np.cos(np.arange(forward.shape[0]))
    backward = np.asarray(jax.jit(jax.grad(lambda z: shares(z) @ direction))(at))
    np.testing.assert_allclose(backward, direction @ forward, rtol=1e-9, atol=1e-10)

    def difference(step: float) -> np.ndarray:
        unit = np.eye(len(at)) * step
        return np.stack([(fast(at + e) - fast(at - e)) / (2 * step) for e in unit], axis=-1)

    exact = (4 * difference(5e-3) - difference(1e-2)) / 3
    assert np.max(np.abs(forward - exact)) < max(SMOOTH[kind][2], 1e-7)
    assert np.max(np.abs(forward)) > 0.1


@pytest.mark.parametrize("kind", [kind for kind in SMOOTH if SMOOTH[kind][3]])
def test_second_derivatives(kind: str) -> None:
    """Forward over forward along one direction against differences of the forward derivative; and backward
    over forward against forward over forward."""
    shares, at = _smooth(kind)
    direction = jnp.asarray(np.cos(1 + np.arange(len(at))))

    def along(z: Any) -> Any:
        return jax.jvp(shares, (z,), (direction,))[1]

    first = jax.jit(along)
    second = np.asarray(jax.jit(lambda z: jax.jvp(along, (z,), (direction,))[1])(at))

    def difference(step: float) -> np.ndarray:
        return np.asarray((first(at + step * direction) - first(at - step * direction)) / (2 * step))

    exact = (4 * difference(2e-3) - difference(4e-3)) / 3
    allowed = SMOOTH[kind][3]
    assert allowed is not None
    assert np.max(np.abs(second - exact)) < allowed
    weights = np.sin(1 + np.arange(len(second)))
    backward = np.asarray(jax.jit(jax.grad(lambda z: along(z) @ weights))(at))
    assert backward @ direction == pytest.approx(float(second @ weights), abs=allowed)


def test_derivatives_stay_finite_at_the_ends() -> None:
    """At time 0, long after the end, and about the moment when a zero-order reaction stops (5000 s)."""
    times = np.array([0.0, 4999.9, 5000.0, 5000.1, 1e6])
    for text, values in (("k", {"k": 1e-5}), ("k*[A]*[B]", {"k": 0.03}), ("k+k*[A]*[A]", {"k": 0.02})):
        path = courses.chosen(courses.candidate((text, BOTH)))
        shares, at = courses.in_logs(path, values, {"A": 0.05, "B": 0.05, "P": 0.0}, times)
        assert np.all(np.isfinite(jax.jit(jax.jacfwd(shares))(at)))
        assert np.all(np.isfinite(jax.jit(jax.jacfwd(jax.jacfwd(shares)))(at)))


def test_derivatives_across_an_abrupt_end() -> None:
    """P/A0 = k t / A0 before the end, 1 after it: derivatives in (ln k, ln A0, ln factor, ln t)."""
    zero = courses.chosen(courses.candidate(("k", SINGLE)))
    shares, at = courses.in_logs(zero, {"k": 1e-5}, {"A": 0.05, "P": 0.0}, np.array([4000.0, 6000.0]))
    # A at both times, P at both; shares are of A0 as it stands, so A alone moves with ln A0 at first
    expected = np.array([[-0.8, 1, -0.8, -0.8], [0, 0, 0, 0], [0.8, 0, 0.8, 0.8], [0, 1, 0, 0]])
    np.testing.assert_allclose(jax.jacfwd(shares)(at), expected, atol=1e-12)


# ---- networks


def test_any_network_of_first_order() -> None:
    """Five species, three generations, one way back, rates over eight decades: scipy's expm."""
    steps = (
        ("k1*[a]", {"a": -1, "b": 1}),
        ("k2*[a]", {"a": -1, "c": 2}),
        ("k3*[c]", {"c": -1, "d": 1}),
        ("k4*[c]", {"c": -1, "e": 1}),
        ("k5*[e]", {"c": 1, "e": -1}),
    )
    law = courses.candidate(*steps)
    network = linear.recognise(law)
    assert network is not None and network.species == ("a", "c", "e", "b")
    rng = np.random.default_rng(5)
    rates = 10.0 ** rng.uniform(-6, 2, (12, 5))
    times = np.geomspace(1e-3, 1e5, 7)
    values = {f"k{i + 1}": rates[:, i] for i in range(5)}
    start = {"a": 1.0, "b": 0.1, "c": 0.2, "d": 0.0, "e": 0.0}
    now, _, trouble = courses.batch(linear.path(law, network), values, start, times)
    found = np.stack([now[name] for name in start], axis=-1)
    for draw in range(12):
        k1, k2, k3, k4, k5 = rates[draw]
        matrix = np.zeros((5, 5))
        matrix[:, 0] = [-(k1 + k2), k1, 2 * k2, 0, 0]
        matrix[:, 2] = [0, 0, -(k3 + k4), k3, k4]
        matrix[:, 4] = [0, 0, k5, 0, -k5]
        oracle = np.stack([expm(matrix * t) @ np.array(list(start.values())) for t in times])
        assert np.max(np.abs(found[draw] - oracle)) < 1e-9  # scipy's own squarings lose the more
    assert not np.any(trouble)
    # b gets k1/(k1 + k2) of what a loses; d follows from the balance of all
    share = rates[:, 0] / (rates[:, 0] + rates[:, 1])
    np.testing.assert_allclose(now["b"] - 0.1, share[:, None] * (1 - now["a"]), atol=1e-14)


def test_what_is_not_linear_is_not_taken_for_it() -> None:
    for steps in (
        (("k1*[A]", {"A": -1, "B": -1, "C": 1}), ("k2*[C]", {"C": -1, "D": 1})),  # B may run out
        (("k1*[A]*[B]", {"A": -1, "B": 1}), ("k2*[B]", {"B": -1, "C": 1})),
        (("k1*[A]", {"A": -1, "B": 1}), ("k2*[B]*time", {"B": -1, "C": 1})),
        (("k1*[A]", {"A": 1}), ("k2*[A]", {"A": -1, "C": 1})),  # grows
        (("k1", {"A": -1, "B": 1}), ("k2*[B]", {"B": -1, "C": 1})),  # a source
    ):
        assert linear.recognise(courses.candidate(*steps)) is None
    taken = courses.candidate(("k1*[A] - k2*[B]", {"A": -1, "B": 1}), ("k3*cat*[B]/w", {"B": -1, "C": 1}))
    assert linear.recognise(taken) is not None
    negative = courses.candidate(
        ("k1*[A]", {"A": -1, "B": 1}), ("k2*[B]", {"B": -1, "C": 1}), negative=("k2",)
    )
    assert linear.recognise(negative) is None


def test_the_extrapolated_scheme_has_its_order() -> None:
    """Three columns: the error falls with the third power of the steps, by regression over four grids."""
    case = CASES["dimer"]
    reference = _independent(case, np.array([300.0]))
    errors = []
    refinements = [1, 2, 4, 8]
    for refined in refinements:
        path = implicit.path(case.law, implicit.marks(refined), columns=3)
        now, _, _ = courses.batch(path, case.values, case.start, [300.0])
        found = np.stack([now[species][0] for species in case.start])
        errors.append(np.max(np.abs(found - reference)))
    slope = np.polyfit(np.log(refinements), np.log(errors), 1)[0]
    assert -3.4 < slope < -2.6


def test_an_abrupt_stop_in_a_network() -> None:
    """A constant rate until A is gone at 2500 s, B lost in first order: B by hand on both sides."""
    law = courses.candidate(("k1", {"A": -1, "B": 1}), ("k2*[B]", {"B": -1, "C": 1}))
    path = courses.chosen(law)
    assert path.name == "integrator"
    k1, k2, times = 2e-5, 2e-3, np.array([2400.0, 2600.0, 3000.0])
    start = {"A": 0.05, "B": 0.0, "C": 0.0}
    now, rates, trouble = courses.batch(path, {"k1": k1, "k2": k2}, start, times)
    made = k1 / k2 * -np.expm1(-k2 * np.minimum(times, 2500))
    oracle = made * np.exp(-k2 * np.maximum(times - 2500, 0))
    np.testing.assert_allclose(now["B"][0], oracle, atol=5e-6 * 0.05)
    np.testing.assert_allclose(now["A"][0], [0.002, 0, 0], atol=5e-6 * 0.05)
    assert not np.any(trouble)
    assert rates[0, 0, 0] == pytest.approx(k1, rel=1e-3)
    # the fixed grid of the implicit scheme knows that it cannot
    _, _, trouble = courses.batch(implicit.path(law), {"k1": k1, "k2": k2}, start, times)
    assert trouble[0] == 1


def test_balances_hold_to_rounding() -> None:
    """Whatever the path: amounts weighted by atoms do not change (random draws; A = 2 units, B, C, D...)."""
    rng = np.random.default_rng(11)
    balances = {"dimer": {"A": 1, "B": 2, "C": 2}, "reversible, then lost": {"A": 1, "B": 1, "C": 1}}
    for name, weights in balances.items():
        case = CASES[name]
        size = 32
        values = {n: v * 10 ** rng.normal(0, 0.7, size) for n, v in case.values.items()}
        start = {n: np.abs(rng.normal(0.05, 0.02, size)) for n in case.start}
        now, _, trouble = courses.batch(courses.chosen(case.law), values, start, np.geomspace(1, 1e4, 5))
        total = sum(weight * now[n] for n, weight in weights.items())
        begin = sum(weight * start[n] for n, weight in weights.items())
        np.testing.assert_allclose(total, np.broadcast_to(begin[:, None], total.shape), rtol=1e-12)
        assert np.mean(trouble) < 0.05


def test_extreme_scales() -> None:
    """The same curve in any unit: concentrations times 1e-9 and times 1e6, seconds times 1e12."""
    law = courses.candidate(("V*[A]/(K+[A]+[A]^2/L)", SINGLE))
    base = {"V": 1e-4, "K": 0.01, "L": 0.05}
    times = np.geomspace(10, 2000, 6)
    path = courses.chosen(law)
    reference, _, _ = courses.batch(path, base, {"A": 0.05, "P": 0.0}, times)
    for mol, second in ((1e-9, 1.0), (1e6, 1.0), (1.0, 1e12), (1e-9, 1e-6)):
        values = {"V": base["V"] * mol / second, "K": base["K"] * mol, "L": base["L"] * mol}
        now, _, trouble = courses.batch(path, values, {"A": 0.05 * mol, "P": 0.0}, times * second)
        np.testing.assert_allclose(now["A"] / mol, reference["A"], atol=1e-12)
        assert not trouble[0]


HANG = """
import sys
sys.path.insert(0, {tests!r})
import courses, numpy as np
from designer.arrays import jax, jnp
from test_trajectory_paths import CASES
for name in ("first order in both", "orders of two", "reversible, then lost", "dimer"):
    case = CASES[name]
    shares, at = courses.in_logs(courses.chosen(case.law), case.values, case.start, np.geomspace(60, 6000, 4))
    draws = at + 0.1 * np.random.default_rng(1).normal(size=(512, len(at)))
    out = jax.jit(jax.vmap(jax.jacfwd(shares)))(draws)
    assert bool(jnp.all(jnp.isfinite(jax.block_until_ready(out))))
print("done")
"""


def test_compiled_batches_do_not_hang() -> None:
    """A realistic batch of Jacobians of each path in a process of its own, with a limit of time."""
    text = HANG.format(tests=str(File(__file__).parent))
    found = subprocess.run([sys.executable, "-c", text], capture_output=True, text=True, timeout=240)
    assert found.stdout.strip() == "done", found.stderr[-2000:]
