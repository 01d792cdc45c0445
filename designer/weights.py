"""Best weights over a finite list of samples, for any measure of information.

With a logarithmic barrier of strength mu on n weights the optimum has every sensitivity at most 1 + n mu
(in units of the target), because the measure has degree 1; Newton steps on a shrinking mu so carry their
own proof. The barrier keeps M regular where the best design is singular (c, Ds), and its limit is the
generalised inverse for which the bound is tight. Samples enter by exchange: those with the largest
sensitivity join until none exceeds the target.

Exchange: Fedorov & Hackl 1997. Singular designs: Pukelsheim 1993. Barrier: Boyd & Vandenberghe 2004, ch. 11.
"""

from __future__ import annotations

import numpy as np

from designer.errors import ConvergenceError, InfeasibleError
from designer.information import (
    Factor,
    Measure,
    Term,
    estimable,
    factorised,
    gradient,
    log_amount,
    projection,
    traces,
)

CLOSE = 1e-6  # largest sensitivity over target - 1 at which the search stops
ADDED = 8  # samples that may join at once
LONGEST = 60  # exchanges


def stacked(rows: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Rows (all, parameters) with M = stacked' stacked."""
    return (rows * np.sqrt(weights)[:, None, None]).reshape(-1, rows.shape[2])


def _reduced(measure: Measure, rows: np.ndarray) -> tuple[Measure, np.ndarray, np.ndarray]:
    """The same task in coordinates where equal weights have M = identity.

    Returns the measure and rows there, and the matrix T with rows_there = rows @ T.
    """
    factor = factorised(rows.reshape(-1, rows.shape[2]) / np.sqrt(len(rows)))
    if not all(estimable(factor, term.combinations) for term in measure.terms):
        message = "no sample on offer says enough about what is asked: it cannot be estimated from any plan"
        raise InfeasibleError(message + ". Widen the conditions or times, or ask for something else.")
    terms = tuple(Term(t.share, factor.back.T @ t.combinations, t.determinant) for t in measure.terms)
    return Measure(measure.kind, terms, measure.target), rows @ factor.back, factor.back


def value_of(measure: Measure, rows: np.ndarray, weights: np.ndarray) -> float:
    return log_amount(measure, factor_of(rows, weights))


def slopes(measure: Measure, rows: np.ndarray, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """First and second derivatives of ln amount by the weights.

    In coordinates where M = I, with m_i there and G of each term: first tr(G m_i); second
    -2 tr(m_i m_j G) + s tr(m_i G m_j G) for a determinant of s, + tr(G m_i) tr(G m_j) for a trace.
    """
    upper = np.asarray(np.linalg.qr(stacked(rows, weights), mode="r"))
    there = np.linalg.solve(upper.T, rows.reshape(-1, rows.shape[2]).T).T.reshape(rows.shape)
    each = np.einsum("irp,irq->ipq", there, there)
    first, second = np.zeros(len(rows)), np.zeros((len(rows), len(rows)))
    for term in measure.terms:
        g = projection(term, np.linalg.solve(upper.T, term.combinations))
        flat = (each @ g).reshape(len(rows), -1)  # m_i G
        turned = np.swapaxes(each @ g, 1, 2).reshape(len(rows), -1)
        slope = np.einsum("ipp->i", each @ g)
        # tr(m_i m_j G) = sum (m_i)_ab (m_j G)_ba, and m_i is symmetric
        bend = -2 * each.reshape(len(rows), -1) @ flat.T
        if term.determinant:
            bend = bend + term.combinations.shape[1] * flat @ turned.T
        else:
            bend = bend + np.outer(slope, slope)
        first += term.share * slope
        second += term.share * (bend + bend.T) / 2
    return first, second


def _centred(measure: Measure, rows: np.ndarray, weights: np.ndarray, mu: float) -> np.ndarray:
    """Maximum of ln amount - (1 + n mu) sum w + mu sum ln w over w > 0; its weights sum to 1 unforced."""
    price = 1.0 + len(rows) * mu

    def objective(at: np.ndarray) -> float:
        return value_of(measure, rows, at) - price * at.sum() + mu * np.log(at).sum()

    now = objective(weights)
    for _ in range(50):
        first, second = slopes(measure, rows, weights)
        # Newton in ln-like steps (w scaled to 1) keeps the system well conditioned
        slope = weights * (first - price) + mu
        bend = mu * np.eye(len(rows)) - second * np.outer(weights, weights)
        step = np.linalg.solve(bend + 1e-14 * np.eye(len(rows)), slope)
        gain = float(slope @ step)
        if gain < 1e-3 * mu:
            break
        length = min(1.0, 0.95 / max(float(-step.min()), 1e-300))
        while length > 1e-6:
            tried = weights * (1 + length * step)
            value = objective(tried)
            if value >= now + 0.1 * length * gain:
                break
            length /= 2
        else:
            break  # rounding: the step no longer shows in the objective; sensitivities judge the result
        weights, now = tried, value
    return weights


def best_weights(measure: Measure, rows: np.ndarray, close: float = CLOSE) -> np.ndarray:
    """Weights of the best design on a short list of samples (all of them stay above 0, if barely)."""
    there, rows_there, _ = _reduced(measure, rows)
    count = len(rows)
    weights = np.full(count, 1.0 / count)
    if count == 1:
        return weights
    last = 0.1 * close / count
    for mu in np.geomspace(0.3 / count, last, max(2, int(np.ceil(np.log10(0.3 / count / last))) + 1)):
        weights = _centred(there, rows_there, weights, float(mu))
    return weights / weights.sum()


def _first_choice(measure: Measure, rows: np.ndarray) -> np.ndarray:
    """Indices to start the exchange from: a few multiplicative steps over the list, and a spanning set."""
    weights = np.full(len(rows), 1.0 / len(rows))
    for _ in range(20):
        first = traces(gradient(measure, factor_of(rows, weights)), rows)
        weights = weights * np.sqrt(first) + 1e-9
        weights /= weights.sum()
    chosen = set(np.argsort(-weights)[: 4 * ADDED].tolist())
    rest = rows.copy()
    for _ in range(rows.shape[2]):  # greedy pivots, so that M of the chosen is regular
        index = int(np.argmax(np.sum(rest**2, axis=(1, 2))))
        chosen.add(index)
        direction = rest[index][np.argmax(np.sum(rest[index] ** 2, axis=1))]
        direction = direction / max(np.sqrt(np.sum(direction**2)), 1e-300)
        rest = rest - (rest @ direction)[..., None] * direction
    return np.array(sorted(chosen))


def factor_of(rows: np.ndarray, weights: np.ndarray) -> Factor:
    """Factor of M that keeps the directions which only barely weighted samples see."""
    return factorised(stacked(rows, weights), 1e-15)


def exchanged(measure: Measure, rows: np.ndarray, close: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Best weights over a long list: (chosen indices, their weights, G in the coordinates of the rows)."""
    there, rows_there, turn = _reduced(measure, rows)
    chosen = _first_choice(there, rows_there)
    for _ in range(LONGEST):
        weights = best_weights(there, rows_there[chosen], close)
        g = gradient(there, factor_of(rows_there[chosen], weights))
        first = traces(g, rows_there)
        if first.max() <= 1 + close:
            return chosen, weights, turn @ g @ turn.T
        order = np.argsort(-first)
        joining = [i for i in order[: 4 * ADDED] if first[i] > 1 + close / 2 and i not in set(chosen)][:ADDED]
        if not joining:
            return chosen, weights, turn @ g @ turn.T
        chosen = np.concatenate([chosen, np.array(joining, dtype=int)])
    raise ConvergenceError(f"weights of the best design did not settle in {LONGEST} exchanges")
