"""How much a set of samples says about the constants of one named candidate, at a best guess.

A plan is a list of samples with weights that sum to 1. Sample i adds the matrix m_i = F_i' F_i, where
the rows F_i are the derivatives of what is read in units of its own error (``standardised``), and the
plan has the information M = sum_i w_i m_i for one sample on average; n samples have n M. Every measure is
a positive amount of information, concave in M and of degree 1 (twice the samples, twice the amount):

    D    det(M)^(1/p)                        all p parameters together
    Ds   det(K' M^- K)^(-1/s)                s of them (columns of K), the others being a nuisance
    A    1 / tr(M^-1)                        mean variance
    c    1 / (c' M^- c)                      one quantity with gradient c

Because of both properties the sensitivity s(x) = tr(G m(x)), G the gradient of the logarithm of the
amount, gives a bound that holds for every design within the region, fractional repeats included:

    best amount <= amount of this plan * largest sensitivity / target

with target p for D, s for Ds, 1 for A and c; at the best design the largest sensitivity equals the target
and is reached at every point of the support. Equivalence theorem: Kiefer & Wolfowitz 1960 (D); Fedorov &
Hackl 1997 (the others); a singular M is served by any generalised inverse (Pukelsheim 1993, ch. 7).

The unit is a sample, beliefs are left out, and parameters are meant in logarithms (``in_logarithms``):
then a variance is the square of a relative standard error and A needs no choice of units.
Logarithms are natural; the order of the parameters is that of the last axis of the rows.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from designer.errors import CallError

RANK = 1e-10  # singular values of scaled rows below this part of the largest count as zero
RANK_OF_MATRIX = 3e-8  # the same where only F'F is known: rounding has already eaten half of the digits
WITHIN = 1e-5  # part of an asked direction that may lie outside what can be estimated


@dataclass(frozen=True)
class Sensitivities:
    """What the candidate says about samples: derivatives of the mean reading, and its variance.

    jacobian: (samples, readings, parameters); variance: (samples, readings) or one number, in squared
    units of the reading; variance_jacobian: shaped like jacobian, given where the dependence of the
    variance on the parameters is to count as information of its own.
    """

    jacobian: np.ndarray
    variance: np.ndarray | float = 1.0
    variance_jacobian: np.ndarray | None = None


@dataclass(frozen=True)
class Term:
    """One part of a measure: share of it, and the combinations K (parameters, s) it is about."""

    share: float
    combinations: np.ndarray
    determinant: bool


@dataclass(frozen=True)
class Measure:
    """What is to be made large. target: largest sensitivity at the best design."""

    kind: str
    terms: tuple[Term, ...]
    target: float

    @property
    def parameters(self) -> int:
        return int(self.terms[0].combinations.shape[0])


def in_logarithms(jacobian: np.ndarray, values: Sequence[float]) -> np.ndarray:
    """Derivatives by ln theta from derivatives by theta: dy/d(ln theta) = theta dy/d(theta).

    jacobian: (..., parameters); values: the best guesses theta, all above 0.
    Raises CallError for a value that has no logarithm.
    """
    at = np.asarray(values, dtype=float)
    if not np.all(at > 0):
        raise CallError(f"a parameter must be above 0 to have a logarithm; found {at.tolist()}")
    return np.asarray(jacobian, dtype=float) * at


def standardised(given: Sensitivities | np.ndarray) -> np.ndarray:
    """Rows F (samples, rows, parameters) with m_i = F_i' F_i the information of sample i.

    Readings are independent and normal with mean y and variance v: one row dy/v^(1/2) each, and, with
    variance_jacobian, one more dv/(2^(1/2) v). A bare array (samples, readings, parameters), or
    (samples, parameters) where one thing is read, has variance 1.
    Raises CallError when shapes do not fit, or something is not finite, or a variance is not above 0.
    """
    if not isinstance(given, Sensitivities):
        given = Sensitivities(np.asarray(given, dtype=float))
    jacobian = np.asarray(given.jacobian, dtype=float)
    if jacobian.ndim == 2:
        jacobian = jacobian[:, None, :]
    if jacobian.ndim != 3:
        raise CallError(f"a jacobian has axes (samples, readings, parameters); found shape {jacobian.shape}")
    variance = _variance(given.variance, jacobian.shape[:2])
    rows = jacobian / np.sqrt(variance)[..., None]
    if given.variance_jacobian is not None:
        slope = np.asarray(given.variance_jacobian, dtype=float).reshape(jacobian.shape)
        rows = np.concatenate([rows, slope / (np.sqrt(2) * variance[..., None])], axis=1)
    if not np.all(np.isfinite(rows)):
        raise CallError("a derivative of a reading is not finite; leave such samples out of the region")
    return rows


def _variance(given: np.ndarray | float, shape: tuple[int, ...]) -> np.ndarray:
    variance = np.asarray(given, dtype=float)
    if variance.ndim == 1:
        variance = variance[:, None]
    try:
        variance = np.broadcast_to(variance, shape)
    except ValueError:
        message = f"variance has shape {variance.shape}, the readings have (samples, readings) = {shape}"
        raise CallError(message) from None
    if not np.all(variance > 0):
        raise CallError("the variance of a reading must be above 0")
    return variance


def information(rows: np.ndarray, weights: Sequence[float] | np.ndarray | None = None) -> np.ndarray:
    """M = sum_i w_i F_i' F_i, (parameters, parameters), for one sample on average.

    weights: one a sample, not negative; they are divided by their sum. None: all equal.
    """
    shares = _shares(weights, len(rows))
    return np.einsum("i,irp,irq->pq", shares, rows, rows)


def _shares(weights: Sequence[float] | np.ndarray | None, count: int) -> np.ndarray:
    shares = np.ones(count) if weights is None else np.asarray(weights, dtype=float)
    if shares.shape != (count,) or np.any(shares < 0) or not 0 < shares.sum() < np.inf:
        raise CallError(f"expected {count} weights, none negative and not all 0; found {shares.tolist()}")
    return shares / shares.sum()


# ---- the measures ------------------------------------------------------------------------------


def _all_together(parameters: int, gradient: Sequence[float] | None, subset: Sequence[int] | None) -> Measure:
    return Measure("D", (Term(1.0, np.eye(parameters), True),), float(parameters))


def _mean_variance(
    parameters: int, gradient: Sequence[float] | None, subset: Sequence[int] | None
) -> Measure:
    return Measure("A", (Term(1.0, np.eye(parameters), False),), 1.0)


def _one_quantity(parameters: int, gradient: Sequence[float] | None, subset: Sequence[int] | None) -> Measure:
    if gradient is None:
        raise CallError("measure c needs the gradient of the asked quantity by the parameters")
    asked = np.asarray(gradient, dtype=float).reshape(-1, 1)
    if asked.shape[0] != parameters or not np.any(asked) or not np.all(np.isfinite(asked)):
        raise CallError(
            f"expected a finite gradient of {parameters} numbers, not all 0; found {list(gradient)}"
        )
    return Measure("c", (Term(1.0, asked, False),), 1.0)


def _some_of_them(parameters: int, gradient: Sequence[float] | None, subset: Sequence[int] | None) -> Measure:
    chosen = sorted(set(subset or ()))
    if not chosen or chosen[0] < 0 or chosen[-1] >= parameters:
        raise CallError(f"measure Ds needs indices of parameters, from 0 to {parameters - 1}; found {subset}")
    return Measure("Ds", (Term(1.0, np.eye(parameters)[:, chosen], True),), float(len(chosen)))


KINDS: dict[str, Callable[[int, Sequence[float] | None, Sequence[int] | None], Measure]] = {
    "D": _all_together,
    "A": _mean_variance,
    "c": _one_quantity,
    "Ds": _some_of_them,
}


def measure(
    kind: str,
    parameters: int,
    *,
    gradient: Sequence[float] | None = None,
    subset: Sequence[int] | None = None,
) -> Measure:
    """The measure of that name for so many parameters.

    gradient: of the asked quantity by the parameters, for c; subset: indices of interest, for Ds.
    Raises CallError for an unknown name or a missing or unfitting argument.
    """
    if kind not in KINDS:
        raise CallError(f"'{kind}' is no measure of information here; {', '.join(KINDS)} are")
    if parameters < 1:
        raise CallError(f"a measure needs at least one parameter; found {parameters}")
    return KINDS[kind](parameters, gradient, subset)


def compromise(parts: Sequence[tuple[float, Measure]]) -> Measure:
    """Weighted geometric mean of amounts, sum_j share_j ln amount_j; target 1.

    Shares must be positive or 0 and are divided by their sum, which keeps degree 1 and so the bound.
    Atkinson 2008 (the DT compromise is of this form).
    """
    total = sum(share for share, _ in parts)
    if not total > 0 or any(share < 0 for share, _ in parts):
        raise CallError("a compromise needs shares that are not negative and not all 0")
    if len({part.parameters for _, part in parts}) != 1:
        raise CallError("the parts of a compromise must be about the same parameters")
    terms = [
        Term(share / total * term.share, term.combinations, term.determinant)
        for share, part in parts
        if share > 0
        for term in part.terms
    ]
    return Measure("compromise", tuple(terms), 1.0)


# ---- amount, criterion and sensitivity of a given plan -----------------------------------------


@dataclass(frozen=True)
class Factor:
    """What of the parameters a plan can estimate: M = B D^2 B' on its range.

    back: (parameters, rank), equals B D^-1 in units of the parameters, so that back back' is a generalised
    inverse of M; outside: (parameters, parameters - rank) spans what M says nothing about.
    """

    back: np.ndarray
    outside: np.ndarray
    scale: np.ndarray


def factorised(stacked: np.ndarray, rank: float = RANK) -> Factor:
    """Factor of M = stacked' stacked, stacked (rows, parameters), each parameter scaled to its own norm."""
    norm = np.sqrt(np.sum(stacked**2, axis=0))
    scale = np.where(norm > 0, norm, 1.0)
    scaled: np.ndarray = stacked / scale
    if len(scaled) > scaled.shape[1]:
        # the left vectors of a long list would be huge, and are not needed
        scaled = np.asarray(np.linalg.qr(scaled, mode="r"))
    _, values, right = np.linalg.svd(scaled, full_matrices=True)
    found = int(np.sum(values > rank * max(values[0] if len(values) else 0.0, 1e-300)))
    back = (right[:found].T / values[:found]) / scale[:, None]
    return Factor(back, right[found:].T, scale)


def _from_matrix(matrix: np.ndarray) -> Factor:
    matrix = np.asarray(matrix, dtype=float)
    diagonal = np.sqrt(np.maximum(np.diag(matrix), 0.0))
    scale = np.where(diagonal > 0, diagonal, 1.0)
    values, vectors = np.linalg.eigh(matrix / np.outer(scale, scale))
    root = (vectors * np.sqrt(np.maximum(values, 0.0))).T
    return factorised(root * scale, RANK_OF_MATRIX)


def estimable(factor: Factor, combinations: np.ndarray) -> bool:
    """Whether every combination (a column) lies in the range of M."""
    if factor.outside.shape[1] == 0:
        return True
    scaled = combinations / factor.scale[:, None]
    size = np.sqrt(np.sum(scaled**2, axis=0))
    return bool(np.all(np.sqrt(np.sum((factor.outside.T @ scaled) ** 2, axis=0)) <= WITHIN * size))


def _log_amount(term: Term, factor: Factor) -> float:
    if not estimable(factor, term.combinations):
        return -np.inf
    root = factor.back.T @ term.combinations
    if not term.determinant:
        return float(-np.log(np.sum(root**2)))
    sign, value = np.linalg.slogdet(root.T @ root)
    return float(-value / root.shape[1]) if sign > 0 else -np.inf


def log_amount(measure: Measure, factor: Factor) -> float:
    """ln of the amount; minus infinity where something asked cannot be estimated at all."""
    return sum(term.share * _log_amount(term, factor) for term in measure.terms)


def amount(measure: Measure, matrix: np.ndarray) -> float:
    """Amount of information of M by this measure, larger is better; 0 where something cannot be estimated.

    Two plans compare by the ratio of their amounts: half the amount needs twice the samples.
    """
    return float(np.exp(log_amount(measure, _from_matrix(matrix))))


def published(measure: Measure, logarithm: float) -> float:
    """The criterion in the form in which it is usually quoted, from the ln of the amount.

    D and Ds: ln det (larger is better); A and c: the variance for one sample (smaller is better);
    compromise: the weighted mean of ln amounts.
    """
    if measure.kind in ("A", "c"):
        return float(np.exp(-logarithm))
    return float(measure.target * logarithm)


def criterion(measure: Measure, matrix: np.ndarray) -> float:
    """Value of the criterion in its usual form (``published``) for the information matrix M."""
    return published(measure, log_amount(measure, _from_matrix(matrix)))


def gradient(measure: Measure, factor: Factor) -> np.ndarray:
    """G = d(ln amount)/dM, (parameters, parameters), of rank s; tr(G M) = 1."""
    total = np.zeros((measure.parameters, measure.parameters))
    for term in measure.terms:
        root = factor.back.T @ term.combinations
        total += term.share * factor.back @ projection(term, root) @ factor.back.T
    return total


def projection(term: Term, root: np.ndarray) -> np.ndarray:
    """G of one term in coordinates where M is the identity; root: the combinations there, (rank, s)."""
    if not term.determinant:
        return root @ root.T / np.sum(root**2)
    return root @ np.linalg.solve(root.T @ root, root.T) / root.shape[1]


def sensitivity(measure: Measure, matrix: np.ndarray, rows: np.ndarray) -> np.ndarray:
    """Sensitivity of every sample of ``rows`` under a plan with information M: (samples,).

    target * tr(G m(x)); D: tr(M^-1 m(x)), the variance of the predicted readings in units of their errors.
    sensitivity / target - 1 is the slope of ln amount towards that sample. Where M is singular the
    Moore-Penrose inverse of the scaled M serves: the bound holds, but need not be tight.
    Raises CallError where something asked cannot be estimated with M at all.
    """
    factor = _from_matrix(matrix)
    if not all(estimable(factor, term.combinations) for term in measure.terms):
        raise CallError("a plan that cannot estimate what is asked has no sensitivities")
    return measure.target * traces(gradient(measure, factor), rows)


def traces(matrix: np.ndarray, rows: np.ndarray) -> np.ndarray:
    """tr(matrix m_i) for every sample i."""
    return np.einsum("irp,pq,irq->i", rows, matrix, rows, optimize=True)


def efficiency(measure: Measure, matrix: np.ndarray, reference: np.ndarray) -> float:
    """Amount of a plan as a share of that of another: the part of the other's samples it is worth."""
    return float(
        np.exp(log_amount(measure, _from_matrix(matrix)) - log_amount(measure, _from_matrix(reference)))
    )


def standard_error(matrix: np.ndarray, gradient: Sequence[float], samples: float = 1.0) -> float:
    """SE of a quantity from ``samples`` samples spread as in M: (c' M^- c / samples)^(1/2).

    In ln-parameters and for one of them this is a relative standard error. Infinity where M says nothing.
    """
    asked = measure("c", len(gradient), gradient=gradient)
    return float(np.sqrt(criterion(asked, matrix) / samples))
