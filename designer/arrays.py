"""The one place that first imports jax, and the small unrolled linear algebra of the kernel.

LAPACK inside compiled, vmapped code hangs for ever on few cores, so ``jnp.linalg`` and
``jax.scipy.linalg`` are never used. Matrices of the kernel are small (up to a dozen rows): they are
nested lists of arrays, one array per entry over all lanes, and factorisations are unrolled.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

os.environ.setdefault("JAX_PLATFORMS", "cpu")

import jax
import jax.numpy as jnp

jax.config.update("jax_enable_x64", True)

Array = Any
Matrix = list[list[Array]]
Vector = list[Array]

FUNCTIONS = {"exp": jnp.exp, "log": jnp.log, "sqrt": jnp.sqrt}


def keep_compiled(folder: Path) -> None:
    """Keep compiled kernels in ``folder`` between commands (compilation is the cold start)."""
    jax.config.update("jax_compilation_cache_dir", str(folder))
    jax.config.update("jax_persistent_cache_min_compile_time_secs", 0.0)
    jax.config.update("jax_persistent_cache_min_entry_size_bytes", 0)


def side_by_side(function: Callable[[Any], Any], items: Iterable[Any]) -> list[Any]:
    """``function`` of every item, in threads, results in order. Compilation and compiled code leave the
    interpreter free, so laws are compiled and run next to each other."""
    todo = list(items)
    with ThreadPoolExecutor(max(1, min(len(todo), os.cpu_count() or 1))) as pool:
        return list(pool.map(function, todo))


def cholesky(matrix: Matrix) -> tuple[Matrix, Array]:
    """Lower Cholesky factor of a symmetric matrix and the smallest pivot.

    matrix[i][j] for j <= i. A pivot that is not positive is replaced by 1, so the result is always
    finite; it then means nothing, nor do later pivots, and the smallest pivot is at most 0.
    """
    size = len(matrix)
    lower: Matrix = [[jnp.zeros(())] * size for _ in range(size)]
    smallest = jnp.asarray(jnp.inf)
    for j in range(size):
        pivot = matrix[j][j] - sum(lower[j][k] ** 2 for k in range(j))
        smallest = jnp.where(smallest > 0, jnp.minimum(smallest, pivot), smallest)
        lower[j][j] = jnp.sqrt(jnp.where(pivot > 0, pivot, 1.0))
        for i in range(j + 1, size):
            inner = matrix[i][j] - sum(lower[i][k] * lower[j][k] for k in range(j))
            lower[i][j] = inner / lower[j][j]
    return lower, smallest


def forward(lower: Matrix, right: Sequence[Array]) -> Vector:
    """Solve L x = b."""
    out: Vector = []
    for i, value in enumerate(right):
        out.append((value - sum(lower[i][k] * out[k] for k in range(i))) / lower[i][i])
    return out


def backward(lower: Matrix, right: Sequence[Array]) -> Vector:
    """Solve L' x = b."""
    size = len(right)
    out: Vector = [jnp.zeros(())] * size
    for i in reversed(range(size)):
        rest = sum(lower[k][i] * out[k] for k in range(i + 1, size))
        out[i] = (right[i] - rest) / lower[i][i]
    return out


def solve(lower: Matrix, right: Sequence[Array]) -> Vector:
    """Solve L L' x = b."""
    return backward(lower, forward(lower, right))


def log_determinant(lower: Matrix) -> Array:
    """ln det(L L')."""
    return 2 * sum((jnp.log(lower[i][i]) for i in range(len(lower))), jnp.zeros(()))
