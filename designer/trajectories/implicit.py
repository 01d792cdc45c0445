"""Any network: the linearly implicit Euler method, extrapolated, on a grid that is the same for every draw.

The state is the extents y of independent reactions, so every balance holds exactly. One step of length
H is done with j = 1 .. K equal substeps h = H/j,

    (I - h J) (y_next - y) = h f(y, t_next),       J = df/dy at the start of the step,

and the K results are extrapolated to h = 0 (Aitken-Neville). The grid is logarithmic over eight decades up to
the last time, finer in the last three, with the times themselves inserted. Small systems
are eliminated by unrolled code.

Reference: Deuflhard, Hairer and Zugck (1987) Numerische Mathematik 51:501.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from designer.arrays import Array, Matrix, jax, jnp
from designer.records import Candidate
from designer.trajectories import structure
from designer.trajectories.path import Curve, Path, filled, held, rate, rates_along

EARLY = (1e-8, 1e-3, 20)  # share of the last time: from, to, steps; fast transients that die away
LATE = (1e-3, 1.0, 30)  # where most readings are
COLUMNS = 7
LARGEST_ERROR = 1e-5  # of the largest starting concentration, by the method's own estimate, summed over steps
RUNNING_OUT = 1e-7  # share of what there is, below which a rate that ignores its reactant is shut off

Slope = Callable[[list[Array], Array], list[Array]]


@dataclass(frozen=True)
class System:
    """A candidate as dy/dt = f(y, t) in the extents y of its independent reactions."""

    candidate: Candidate
    basis: structure.Basis

    @property
    def size(self) -> int:
        return len(self.basis.columns)

    def concentrations(self, start: Mapping[str, Array], extents: list[Array]) -> dict[str, Array]:
        now = {name: start[name] for name in self.candidate.species}
        for column, extent in zip(self.basis.columns, extents, strict=True):
            for name, number in column.items():
                now[name] = now[name] + number * extent
        return now

    def slope(
        self,
        values: Mapping[str, Array],
        start: Mapping[str, Array],
        factor: Array,
        extents: list[Array],
        time: Array,
    ) -> list[Array]:
        """dy/dt at extents y; the rate of a step whose reactant runs out without slowing it is shut off."""
        now = self.concentrations(start, extents)
        total: list[Array] = [jnp.zeros_like(extents[0])] * self.size
        amount = amount_of(start)
        for step, shares in zip(self.candidate.steps, self.basis.shares, strict=True):
            speed = factor * rate(step, values, now, start, time)
            for name, direction in structure.ignored(step):
                level = now[name] / (jnp.abs(now[name]) + RUNNING_OUT * amount)  # pulls back from below 0
                speed = jnp.where(direction * speed > 0, speed * level, speed)
            total = [t + share * speed if share else t for t, share in zip(total, shares, strict=True)]
        return total


def amount_of(start: Mapping[str, Array]) -> Array:
    """The largest starting concentration, as a scale."""
    largest: Array = jnp.asarray(1e-300)
    for value in start.values():
        largest = jnp.maximum(largest, value)
    return jax.lax.stop_gradient(largest)


def system(candidate: Candidate) -> System:
    return System(candidate, structure.basis(candidate))


def finished(
    network: System,
    values: Mapping[str, Array],
    start: Mapping[str, Array],
    factor: Array,
    times: Array,
    extents: list[Array],
    error: Array,
) -> Curve:
    """The curve of these extents; trouble where the error or an amount below 0 is too large to ignore."""
    now = network.concentrations(start, extents)
    amount = amount_of(start)
    below = jnp.min(jnp.stack([jnp.min(value + 0 * times) for value in now.values()]))
    good = (error < LARGEST_ERROR * amount) & (below > -LARGEST_ERROR * amount)  # false for NaN
    now = {name: held(value) for name, value in now.items()}
    rates = rates_along(network.candidate, values, now, start, factor, times)
    return Curve(now, rates, jnp.where(good, 0.0, 1.0))


def marks(refined: int = 1) -> np.ndarray:
    """Ends of the steps as shares of the last time, ``refined`` times as many as usual."""
    early, late = (np.geomspace(low, high, count * refined + 1) for low, high, count in (EARLY, LATE))
    return np.concatenate([early, late[1:]])


def path(
    candidate: Candidate,
    grid: np.ndarray | None = None,
    columns: int = COLUMNS,
    fallback: Path | None = None,
) -> Path:
    """The extrapolated method with ``columns`` columns on the steps of ``grid`` (``marks``)."""
    network = system(candidate)
    shares = marks() if grid is None else grid

    def solve(values: dict[str, Array], start: dict[str, Array], factor: Array, times: Array) -> Curve:
        start = filled(candidate, start)

        def slope(extents: list[Array], time: Array) -> list[Array]:
            return network.slope(values, start, factor, extents, time)

        extents, error = _march(slope, network.size, times, shares, columns)
        return finished(network, values, start, factor, times, extents, error)

    return Path("implicit", False, solve, fallback)


def _march(
    slope: Slope, size: int, times: Array, shares: np.ndarray, columns: int
) -> tuple[list[Array], Array]:
    """Extents at ``times`` (each (times,)) and the sum of the estimated errors, mol/L."""
    last = jnp.max(times)
    wanted = jnp.concatenate([last * shares, times])
    order = jnp.argsort(wanted)
    ends = wanted[order]
    lengths = jnp.diff(ends, prepend=0.0)
    begin = ([jnp.zeros(()) for _ in range(size)], jnp.zeros(()), jnp.zeros(()))

    def advance(state, length):  # type: ignore[no-untyped-def]
        extents, time, error = state
        extents, wrong = _step(slope, extents, time, length, columns)
        return (extents, time + length, error + wrong), extents

    (_, _, error), passed = jax.lax.scan(advance, begin, lengths)
    back = jnp.argsort(order)[len(shares) :]
    return [extent[back] for extent in passed], error


def _step(
    slope: Slope, extents: list[Array], time: Array, length: Array, columns: int
) -> tuple[list[Array], Array]:
    """One step of all sequences at once: (extents, estimated error)."""
    size = len(extents)
    counts = np.arange(1, columns + 1)
    h = length / counts
    unit = np.eye(size)

    def column(j: int) -> list[Array]:
        direction = [jnp.asarray(unit[i, j]) for i in range(size)]
        return jax.jvp(lambda y: slope(y, time + length), (extents,), (direction,))[1]

    # left to differentiation: holding it is hardly cheaper and costs a factor of 20 in sensitivities
    jacobian = [column(j) for j in range(size)]
    matrix = [[(1.0 if i == j else 0.0) - h * jacobian[j][i] for j in range(size)] for i in range(size)]
    lower, upper = factorised(matrix)
    begin = [jnp.broadcast_to(extent, (columns,)) for extent in extents]

    def substep(y: list[Array], count: Array) -> tuple[list[Array], None]:
        at = time + jnp.minimum(count, counts) * h
        change = solved(lower, upper, [h * value for value in slope(y, at)])
        active = count <= counts  # sequence j is ready after j substeps
        return [jnp.where(active, value + move, value) for value, move in zip(y, change, strict=True)], None

    y = jax.lax.scan(substep, begin, jnp.asarray(counts))[0]
    return _extrapolated([[value[j] for value in y] for j in range(columns)])


def _extrapolated(done: list[list[Array]]) -> tuple[list[Array], Array]:
    """Aitken-Neville in h with h_j = H/j; the estimate is the last correction."""
    previous: list[list[Array]] = []
    for j, result in enumerate(done, 1):
        row = [result]
        for k in range(1, j):
            ratio = j / (j - k) - 1.0
            row.append(
                [new + (new - old) / ratio for new, old in zip(row[k - 1], previous[k - 1], strict=True)]
            )
        previous = row
    error: Array = 0.0
    for best, next_best in zip(previous[-1], previous[-2], strict=True):
        error = error + jnp.abs(jax.lax.stop_gradient(best - next_best))
    return previous[-1], error


def factorised(matrix: Matrix) -> tuple[Matrix, Matrix]:
    """L and U of a small matrix of arrays, without row exchanges (I - h J is nearly diagonal or dominant)."""
    size = len(matrix)
    upper = [list(row) for row in matrix]
    lower = [[jnp.zeros_like(matrix[0][0])] * size for _ in range(size)]
    for k in range(size):
        for i in range(k + 1, size):
            lower[i][k] = upper[i][k] / upper[k][k]
            for j in range(k, size):
                upper[i][j] = upper[i][j] - lower[i][k] * upper[k][j]
    return lower, upper


def solved(lower: Matrix, upper: Matrix, right: list[Array]) -> list[Array]:
    """x with L U x = right."""
    size = len(right)
    middle: list[Array] = []
    for i in range(size):
        value = right[i]
        for k in range(i):
            value = value - lower[i][k] * middle[k]
        middle.append(value)
    out = list(middle)
    for i in reversed(range(size)):
        for k in range(i + 1, size):
            out[i] = out[i] - upper[i][k] * out[k]
        out[i] = out[i] / upper[i][i]
    return out
