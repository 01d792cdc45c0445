"""Any network by an adaptive integrator: the judge of the other paths, and their fallback.

Tsit5 at rtol 1e-7 where the problem is mild, Kvaerno5 at 1e-8 where it is stiff, with a chord root finder
and an unrolled linear solver. An integration that runs out of steps is ``trouble``, no exception.

The integrator itself is differentiated forward only (its loop has no fixed length); ``both_ways`` turns
its forward Jacobian into a rule that runs backward too, to any order.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from typing import Any

# Solving for tangents raises on what is not finite, whatever ``throw`` says; as NaN it becomes ``trouble``.
os.environ.setdefault("EQX_ON_ERROR", "nan")

import diffrax
import lineax
import optimistix
from jax.flatten_util import ravel_pytree

from designer.arrays import Array, jax, jnp
from designer.records import Candidate
from designer.trajectories.implicit import (
    Slope,
    amount_of,
    factorised,
    finished,
    solved,
    system,
)
from designer.trajectories.path import Curve, Path, filled

MILD = (1e-7, 1e-10)  # rtol, and atol as a share of the largest starting concentration
STIFF = (1e-8, 1e-11)
MOST_STEPS = 4096
FIRST_STEP = 1e-8  # of the whole time


class Unrolled(lineax.AbstractLinearSolver):
    """Elimination of a small dense system by unrolled code (compiled LAPACK calls may hang)."""

    def init(self, operator, options):  # type: ignore[no-untyped-def]
        matrix = operator.as_matrix()
        size = matrix.shape[0]
        return factorised([[matrix[i, j] for j in range(size)] for i in range(size)])

    def compute(self, state, vector, options):  # type: ignore[no-untyped-def]
        lower, upper = state
        parts = [vector[i] for i in range(vector.shape[0])]
        return jnp.stack(solved(lower, upper, parts)), lineax.RESULTS.successful, {}

    def transpose(self, state, options):  # type: ignore[no-untyped-def]
        lower, upper = state
        places = range(len(lower))
        # (L U)' = U' L' = (U' / D) (D L') with D the diagonal of U: a unit lower and an upper factor again
        down = [[upper[j][i] / upper[j][j] for j in places] for i in places]
        over = [[upper[i][i] * (lower[j][i] if i != j else 1.0) for j in places] for i in places]
        return (down, over), options

    def conj(self, state, options):  # type: ignore[no-untyped-def]
        return state, options

    def assume_full_rank(self) -> bool:
        return True


def both_ways(function: Callable[[Array, Array], Array]) -> Callable[[Array, Array], Array]:
    """``function(inputs (inputs,), constants)`` differentiable in its inputs forward and backward, any order.

    Each derivative is the forward Jacobian of ``function`` times the tangent; that product is linear, and so
    runs backward. The constants have no derivative.
    """

    def value_and_jacobian(inputs: Array, constants: Array) -> Array:
        def twice(x: Array) -> tuple[Array, Array]:
            value = function(x, constants)
            return value, value

        jacobian, value = jax.jacfwd(twice, has_aux=True)(inputs)
        return jnp.concatenate([value[..., None], jacobian], axis=-1)

    wrapped = jax.custom_jvp(function)

    def rule(primals, tangents):  # type: ignore[no-untyped-def]
        joined = both_ways(value_and_jacobian)(*primals)
        return joined[..., 0], joined[..., 1:] @ tangents[0]

    wrapped.defjvp(rule)
    return wrapped


def path(candidate: Candidate, stiff: bool = True) -> Path:
    """Kvaerno5 (``stiff``) or Tsit5 in the extents of the independent reactions."""
    network = system(candidate)

    def solve(values: dict[str, Array], start: dict[str, Array], factor: Array, times: Array) -> Curve:
        start = filled(candidate, start)
        inputs = ({n: jnp.asarray(v, float) for n, v in values.items()}, start, jnp.asarray(factor, float))
        flat, unflatten = ravel_pytree(inputs)

        def slope(extents: list[Array], time: Array) -> list[Array]:
            return network.slope(*inputs, extents, time)

        def integrated(flat: Array, times: Array) -> Array:
            values, start, factor = unflatten(flat)

            def scaled(extents: list[Array], time: Array) -> list[Array]:
                return network.slope(values, start, factor, extents, time)

            return _integrated(scaled, network.size, times, amount_of(start), stiff)

        found = both_ways(integrated)(flat, jax.lax.stop_gradient(times))
        extents = from_rates(slope, [found[i] for i in range(network.size)], times)
        error = jnp.where(jnp.all(jnp.isfinite(found)), 0.0, jnp.inf)
        return finished(network, values, start, factor, times, extents, error)

    return Path("integrator", False, solve)


def _integrated(slope: Slope, size: int, times: Array, amount: Array, stiff: bool) -> Array:
    """Extents (size, times), NaN where the integration failed; inside, time runs from 0 to 1."""
    rtol, atol = STIFF if stiff else MILD
    last = jnp.maximum(jnp.max(times), 1e-300)
    order = jnp.argsort(times)

    def field(time: Array, y: Array, _: None) -> Array:
        moved = slope([y[i] * amount for i in range(size)], time * last)
        return jnp.stack(moved) * (last / amount)

    # ten times the tolerances stall the stepper on stiff problems, a thousand times change no digit
    chord: Any = optimistix.Chord(rtol=rtol * 300, atol=atol * 300, linear_solver=Unrolled())
    solver = diffrax.Kvaerno5(root_finder=chord) if stiff else diffrax.Tsit5()
    found = diffrax.diffeqsolve(
        diffrax.ODETerm(field),
        solver,
        t0=0.0,
        t1=1.0,
        dt0=FIRST_STEP,
        y0=jnp.zeros(size),
        saveat=diffrax.SaveAt(ts=times[order] / last),
        stepsize_controller=diffrax.PIDController(rtol=rtol, atol=atol),
        adjoint=diffrax.ForwardMode(),
        max_steps=MOST_STEPS,
        throw=False,
    )
    good = found.result == diffrax.RESULTS.successful
    back = jnp.argsort(order)
    return jnp.where(good, found.ys.T[:, back] * amount, jnp.nan)


def from_rates(slope: Slope, extents: list[Array], times: Array) -> list[Array]:
    """The same values, with their first and second derivatives in time put in from the rates."""
    held_times = jax.lax.stop_gradient(times)
    past = times - held_times  # 0, with derivative 1
    first = slope(extents, held_times)
    second = jax.jvp(slope, (extents, held_times), (first, jnp.ones_like(times)))[1]
    return [y + f * past + g * past**2 / 2 for y, f, g in zip(extents, first, second, strict=True)]
