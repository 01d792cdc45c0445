"""Virtual studies: expected information against brute force, draws, pilots, and what must not change.

The small study is G4-07 of the check values (Lindley 1956; Chaloner & Verdinelli 1995; values computed for
this project): first or second order, [A] = 1, ln k ~ N(ln 0.1, 0.5^2), one reading with an error of 0.05.
"""

from __future__ import annotations

from dataclasses import replace
from math import log

import decay
import numpy as np
import pytest

from designer import gates, virtual
from designer.likelihood import Design, Readings
from designer.records import Pilot, RunErrors
from designer.virtual import Bench, Scores

CASE = decay.CASES["G4-07"]
MIDDLE, SPREAD, ERROR = 0.1, 0.5, 0.05
STUDIES = 400
LEVELS = np.linspace(-0.4, 1.4, 181)  # of the reading: beyond them lies less than 1e-10


@pytest.fixture(scope="module")
def bench() -> Bench:
    laws = tuple(decay.order(n, decay.lognormal("k", MIDDLE, SPREAD)) for n in (1, 2))
    return virtual.ready(decay.study(laws, ERROR, samples=2), lanes=128)


def design(first: float, second: float | None = None) -> Design:
    """One run with one or two readings."""
    times = np.array([[first, first if second is None else second]])
    return Design(np.ones((1, 1)), times, np.array([[[1.0], [float(second is not None)]]]))


def concluded(bench: Bench, where: Design, seed: int = 1) -> Scores:
    truths = virtual.draw(bench, where, STUDIES, seed, "test")
    return virtual.conclude(bench, where, truths, careful=True)


def gains(bench: Bench, scores: Scores) -> np.ndarray:
    """ln P(true law | readings) - ln P(true law), of every study; the laws are believed equally."""
    found = virtual.probabilities(bench, scores.log_evidence)
    return np.log(found[np.arange(len(found)), scores.truth]) - log(0.5)


def evidence_at(bench: Bench, time: float) -> np.ndarray:
    """p(reading | law) on LEVELS, by the kernel and its repairs: (law, level)."""
    values = np.zeros((len(LEVELS), 1, 2, 1))
    values[:, 0, 0, 0] = LEVELS
    read = Readings(values, np.zeros_like(values))
    return np.exp([gates.assured(k, design(time), read).log_evidence for k in bench.kernels])


def evidence_by_hand(time: float) -> np.ndarray:
    """The same by quadrature over ln k."""
    u = np.linspace(-8, 8, 1601)
    k = MIDDLE * np.exp(SPREAD * u)
    means = (np.exp(-k * time), 1 / (1 + k * time))
    prior = np.exp(-u * u / 2) / np.sqrt(2 * np.pi) * (u[1] - u[0])
    noise = [np.exp(-(((LEVELS[:, None] - m) / ERROR) ** 2) / 2) / np.sqrt(2 * np.pi) / ERROR for m in means]
    return np.array([each @ prior for each in noise])


def information(density: np.ndarray) -> tuple[float, float]:
    """About k under the first law, H[p(y)] - H[noise], and about which law: nats."""
    step = LEVELS[1] - LEVELS[0]
    logs = np.log(np.maximum(density, 1e-300))
    about_k = -(density[0] * logs[0]).sum() * step - log(ERROR * np.sqrt(2 * np.pi * np.e))
    both = np.log(np.maximum(density.mean(0), 1e-300))
    return float(about_k), float((density * (logs - both)).sum() * step / 2)


@pytest.mark.parametrize("index", range(5))
def test_expected_information_by_evidence_on_a_grid(bench: Bench, index: int) -> None:
    """Evidence of single readings, where the belief in k is far from normal: information to 0.001."""
    time = CASE["inputs"]["times"][index]
    about_k, about_law = information(evidence_at(bench, time))
    assert about_k == pytest.approx(CASE["expected"]["eig_k"][index], abs=1e-3)
    assert about_law == pytest.approx(CASE["expected"]["mi_model"][index], abs=1e-3)


@pytest.mark.parametrize("index", range(5))
def test_expected_information_by_virtual_studies(bench: Bench, index: int) -> None:
    """Within 3 standard errors (of five such checks one in 75 would fail by chance; the seed is fixed)."""
    found = gains(bench, concluded(bench, design(CASE["inputs"]["times"][index])))
    error = found.std() / np.sqrt(len(found))
    assert abs(found.mean() - CASE["expected"]["mi_model"][index]) < 3 * error + 1e-3
    assert error < 0.025


def test_expected_information_of_two_readings_by_brute_force(bench: Bench) -> None:
    """Each study's evidence by quadrature over ln k, its mean gain against that of the kernel."""
    where = design(8.0, 40.0)
    truths = virtual.draw(bench, where, STUDIES, 1, "test")
    read = virtual.readings_of(bench, where, truths).values[:, 0, :, 0]
    u = np.linspace(-8, 8, 801)
    kt = MIDDLE * np.exp(SPREAD * u)[:, None] * where.times[0]
    prior = np.exp(-u * u / 2) / np.sqrt(2 * np.pi) * (u[1] - u[0])
    columns = []
    for mean in (np.exp(-kt), 1 / (1 + kt)):
        density = np.exp(-(((read[:, None] - mean) / ERROR) ** 2) / 2) / np.sqrt(2 * np.pi) / ERROR
        columns.append(np.log(density.prod(-1) @ prior))
    expected = np.stack(columns, 1)
    scores = concluded(bench, where)
    near = expected > expected.max(1, keepdims=True) - 7
    assert np.abs(scores.log_evidence - expected)[near & ~scores.doubtful[:, None]].max() < 0.05
    by_hand = gains(bench, scores._replace(log_evidence=expected))
    assert gains(bench, scores).mean() == pytest.approx(by_hand.mean(), abs=1e-3)


def test_order_of_candidates_changes_nothing(bench: Bench) -> None:
    """Known answer 24: random numbers go with what a candidate is."""
    turned = replace(
        bench,
        study=replace(bench.study, candidates=bench.study.candidates[::-1]),
        laws=bench.laws[::-1],
        kernels=bench.kernels[::-1],
        prior=bench.prior[::-1],
        standing=bench.standing[::-1],
    )
    where = design(8.0, 40.0)
    one, other = concluded(bench, where), concluded(turned, where)
    back = np.concatenate([np.arange(STUDIES, 2 * STUDIES), np.arange(STUDIES)])
    assert other.log_evidence[back][:, ::-1] == pytest.approx(one.log_evidence, abs=1e-9)
    assert gains(turned, other)[back] == pytest.approx(gains(bench, one), abs=1e-9)


def test_draws_depend_on_seed_and_purpose_alone(bench: Bench) -> None:
    where = design(8.0)
    first, again = (virtual.draw(bench, where, 5, 1, "test") for _ in range(2))
    other = virtual.draw(bench, where, 5, 2, "test")
    purpose = virtual.draw(bench, where, 5, 1, "something else")
    assert (first[0].u == again[0].u).all()
    assert (first[0].noise == again[0].noise).all()
    assert not np.isclose(first[0].u, other[0].u).any()
    assert not np.isclose(first[0].u, purpose[0].u).any()
    assert not np.isclose(first[0].u, first[1].u).any()


@pytest.mark.parametrize(("first", "second"), [(8.0, 40.0), (20.0, 20.0), (40.0, 2.0)])
def test_another_sample_does_not_inform_less(bench: Bench, first: float, second: float) -> None:
    """Known answer 22, within 3 standard errors of the paired difference."""
    alone = gains(bench, concluded(bench, design(first)))
    both = gains(bench, concluded(bench, design(first, second)))
    more = both - alone
    assert more.mean() > -3 * more.std() / np.sqrt(len(more))


def test_a_reading_that_tells_nothing_changes_nothing(bench: Bench) -> None:
    """Known answer 22: at time 0 [A] is 1 whatever the law and k."""
    alone = concluded(bench, design(20.0))
    both = concluded(bench, design(20.0, 0.0))
    assert gains(bench, both) == pytest.approx(gains(bench, alone), abs=1e-6)
    assert both.spread == pytest.approx(alone.spread, rel=1e-4)


# ---- pilots


@pytest.fixture(scope="module")
def piloted() -> Bench:
    """A pilot saw half of A converted after 5 s, give or take 0.02; rates scatter by 20 % between runs."""
    laws = tuple(decay.order(n, decay.lognormal("k", MIDDLE, SPREAD)) for n in (1, 2))
    study = decay.study(laws, ERROR, samples=1)
    pilot = Pilot((("A", 1.0),), ((5.0, 0.5),), 0.02, "A")
    return virtual.ready(replace(study, pilots=(pilot,), run_errors=RunErrors(rate=0.2)), lanes=256)


def after_the_pilot() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Evidence of each law and mean and SD of u = (ln k - ln 0.1)/0.5, by quadrature over u and the error."""
    u, z = np.linspace(-6, 6, 1201)[:, None], np.linspace(-6, 6, 601)[None]
    kt = MIDDLE * np.exp(SPREAD * u + 0.2 * z) * 5.0
    prior = np.exp(-(u * u + z * z) / 2) / (2 * np.pi) * 0.01 * 0.02
    found = []
    for left in (np.exp(-kt), 1 / (1 + kt)):
        density = np.exp(-(((0.5 - (1 - left)) / 0.02) ** 2) / 2) / np.sqrt(2 * np.pi) / 0.02 * prior
        mean = (density * u).sum() / density.sum()
        found.append((density.sum(), mean, np.sqrt((density * (u - mean) ** 2).sum() / density.sum())))
    evidence, mean, spread = np.array(found).T
    return evidence, mean, spread


def test_beliefs_after_a_pilot(piloted: Bench) -> None:
    evidence, _, _ = after_the_pilot()
    assert piloted.standing == pytest.approx(evidence / evidence.sum(), abs=2e-3)
    assert piloted.standing[1] != pytest.approx(0.5, abs=0.01)


def test_draws_after_a_pilot(piloted: Bench) -> None:
    """Truths of virtual studies follow what the pilot left of the belief, to a few standard errors of 2000
    resampled draws."""
    _, mean, spread = after_the_pilot()
    for index in range(2):
        random = np.random.default_rng(index)
        u = virtual.truth_draws(piloted, index, 2000, random)[:, 0]
        assert u.mean() == pytest.approx(mean[index], abs=4 * spread[index] / np.sqrt(700))
        assert u.std() == pytest.approx(spread[index], rel=0.1)


def test_a_pilot_rides_along_in_every_study(piloted: Bench) -> None:
    run = piloted.axes.carried
    where = Design(
        np.concatenate([run.conditions, np.ones((1, 1))]),
        np.concatenate([run.times, np.array([[20.0]])]),
        np.concatenate([run.mask, np.array([[[1.0, 0.0]]])]),
    )
    read = virtual.readings_of(piloted, where, virtual.draw(piloted, where, 3, 1, "test"))
    assert (read.values[:, 0, 0, 1] == 0.5).all()
    assert len(np.unique(read.values[:, 1, 0, 0])) == 6
