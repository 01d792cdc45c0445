"""Plans are put within every limit of the study, and what cannot be done is said with what would do.

The judge of these tests is written from the meaning of each limit (study-file reference), apart from the
program's own. Studies are generated; nothing is compiled.
"""

from __future__ import annotations

from dataclasses import replace

import ester
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from designer.allowed import Allowed, allowed, broken_limits, fit_conditions, fit_times
from designer.errors import InfeasibleError
from designer.records import Condition, Limits, PlanSize, Run, Schedule, Study, Vessel
from designer.rounding import rounded
from designer.search import Proposal

SLACK = 1e-8  # relative: a plan may lie on a limit
PER_LITRE = (1.0, *ester.CONCENTRATION[1:])  # any dimension: these levers never meet a rate here
PRESSURE = Condition("pressure", False, PER_LITRE, "bar", 2.0, 9.0, (2.0, 5.0, 9.0))
CATALYST = Condition("catalyst", False, PER_LITRE, "g/L", 0.4, 0.4)


@st.composite
def studies(draw: st.DrawFn) -> Study:
    """The ester study with other limits, caps, stocks and vessel; always one that can be done."""
    share = st.floats(0, 1)
    runs, samples = draw(st.integers(1, 4)), draw(st.integers(1, 6))
    start = draw(st.booleans()) and samples > 1
    first, spacing = draw(st.just(0.0) | st.floats(0.1, 600)), draw(st.sampled_from([0.0, 7.0, 60.0, 130.0]))
    shortest = max(first + (samples - start - 1) * spacing, 1.0)
    longest = shortest * draw(st.floats(1, 40))
    setup = draw(st.floats(0, 3600))
    booked = draw(st.none() | st.floats(1, 20).map(lambda f: f * runs * (setup + shortest)))
    stocks, caps = [], []
    if draw(st.booleans()):
        stocks = [("ester", draw(st.floats(0.02, 0.4))), ("hydroxide", draw(st.floats(0.05, 1.0)))]
    if draw(st.booleans()):
        caps = [("ester", 0.005 + 0.12 * draw(share)), ("pressure", draw(st.sampled_from([2.0, 4.0, 9.0])))]
    vessel = Vessel(0.05, 0.0005, draw(st.none() | st.floats(1e-4, 2e-3)))
    found = replace(
        ester.study(),
        conditions=(*ester.study().conditions, PRESSURE, CATALYST),
        plan=PlanSize(runs, samples, start),
        limits=Limits(None, None, None, first, spacing, longest, setup, booked),
        stocks=tuple(stocks),
        caps=tuple(caps),
        vessel=vessel,
    )
    return found


def offered(study: Study) -> Allowed | None:
    """What may be chosen, where anything may."""
    try:
        return allowed(study)
    except InfeasibleError:
        return None


def proposal(study: Study, seed: int) -> Proposal:
    """A wild one: out of order, before the start, far past the end, far outside each range."""
    random = np.random.default_rng(seed)
    size = (study.plan.runs, study.plan.samples)
    times = study.limits.longest_run * random.uniform(-0.1, 2.0, size) * 10 ** random.uniform(-4, 0, size)
    span = np.array([[c.low, c.high] for c in study.conditions])
    conditions = span[:, 0] / 3 + random.uniform(0, 1.5, (size[0], len(span))) * span[:, 1]
    return Proposal(conditions, times, np.zeros(size[0]))


def times_keep_the_limits(study: Study, times: np.ndarray) -> None:
    limits, start = study.limits, int(study.plan.assay_at_start)
    assert times.shape == (study.plan.runs, study.plan.samples)
    assert (times[:, :start] == 0).all()
    taken = times[:, start:]
    assert (taken >= limits.first_sample * (1 - SLACK)).all()
    assert (np.diff(taken, axis=1) >= limits.spacing * (1 - SLACK) - SLACK).all()
    assert (times <= limits.longest_run * (1 + SLACK)).all()
    if limits.booked is not None:
        assert times[:, -1].sum() + len(times) * limits.setup_per_run <= limits.booked * (1 + SLACK)


def conditions_keep_the_limits(study: Study, conditions: np.ndarray) -> None:
    caps, stocks = dict(study.caps), dict(study.stocks)
    filled = np.zeros(len(conditions))
    for column, condition in zip(conditions.T, study.conditions, strict=True):
        high = min(condition.high, caps.get(condition.name, np.inf))
        assert (column >= condition.low * (1 - SLACK)).all() and (column <= high * (1 + SLACK)).all()
        assert not condition.levels or np.isin(column, condition.levels).all()
        if condition.name in stocks:
            drawn = column / stocks[condition.name]  # parts of the vessel
            least = (study.vessel.smallest_pipetted or 0.0) / study.vessel.volume
            assert (drawn >= least * (1 - SLACK)).all()
            filled += drawn
    assert (filled <= 1 + SLACK).all()


def schedule(study: Study, conditions: np.ndarray, times: np.ndarray) -> Schedule:
    names = [condition.name for condition in study.conditions]
    rows = zip(conditions.tolist(), times.tolist(), strict=True)
    return Schedule(tuple(Run(tuple(zip(names, a, strict=True)), tuple(b)) for a, b in rows))


@settings(deadline=None, max_examples=150)
@given(studies(), st.integers(0, 2**32))
def test_a_fitted_plan_keeps_every_limit(study: Study, seed: int) -> None:
    offer = offered(study)
    if offer is None:
        return
    wild = proposal(study, seed)
    conditions, times = fit_conditions(offer, wild.conditions), fit_times(offer, wild.times)
    times_keep_the_limits(study, times)
    conditions_keep_the_limits(study, conditions)
    assert broken_limits(study, schedule(study, conditions, times)) == ()


@settings(deadline=None, max_examples=150)
@given(studies(), st.integers(0, 2**32))
def test_a_plan_as_written_keeps_every_limit(study: Study, seed: int) -> None:
    offer = offered(study)
    if offer is None:
        return
    wild = proposal(study, seed)
    fitted = Proposal(
        fit_conditions(offer, wild.conditions), fit_times(offer, wild.times), np.zeros(len(wild.times))
    )
    written = rounded(offer, fitted)
    times_keep_the_limits(study, written.times)
    conditions_keep_the_limits(study, written.conditions)
    assert broken_limits(study, schedule(study, written.conditions, written.times)) == ()


@settings(deadline=None, max_examples=100)
@given(studies(), st.integers(0, 2**32))
def test_what_is_within_the_limits_stays_as_it_is(study: Study, seed: int) -> None:
    offer = offered(study)
    if offer is None:
        return
    wild = proposal(study, seed)
    conditions, times = fit_conditions(offer, wild.conditions), fit_times(offer, wild.times)
    np.testing.assert_allclose(fit_conditions(offer, conditions), conditions, rtol=1e-9)
    np.testing.assert_allclose(fit_times(offer, times), times, rtol=1e-9)


def test_most_generated_studies_can_be_done() -> None:
    """Else the properties above would hold of nothing."""
    feasible = []

    @settings(deadline=None, max_examples=100, database=None)
    @given(studies())
    def collect(study: Study) -> None:
        feasible.append(offered(study) is not None)

    collect()
    assert np.mean(feasible) > 0.5


def test_written_times_and_amounts() -> None:
    """Half minutes up to ten minutes, minutes up to an hour, two figures in mM (common practice)."""
    offer = allowed(replace(ester.study(), plan=PlanSize(1, 4)))
    found = rounded(
        offer,
        Proposal(np.array([[0.01234, 0.1567]]), np.array([[71.0, 401.0, 1234.0, 9000.0]]), np.zeros(1)),
    )
    np.testing.assert_allclose(found.conditions, [[0.012, 0.16]], rtol=1e-12)
    np.testing.assert_allclose(found.times, [[60.0, 390.0, 1260.0, 9000.0]])


def limited(**changes: float) -> Study:
    """Two runs of 5 samples: the ester study, with other limits."""
    study = replace(ester.study(), plan=PlanSize(2, 5))
    return replace(study, limits=replace(study.limits, **changes))


@pytest.mark.parametrize(
    ("study", "said"),
    [
        # first sample at 60 s, then four gaps of 600 s: 2460 s; 2000 s hold 1 + floor(1940 / 600) = 4
        (limited(spacing=600.0, longest_run=2000.0), ("2460 s", "2000 s", "4 samples")),
        (limited(first_sample=900.0, longest_run=800.0), ("900 s", "800 s", "sample earlier")),
        # two runs of 45 min and 60 + 4 x 60 s: 1 h 40 min; 1 h holds one
        (limited(booked=3600.0), ("1.67 h", "1 h", "1 run")),
        (replace(limited(), caps=(("ester", 0.004),)), ("ester", "0.005", "0.004", "cap")),
        # 1 mL of a 1 M stock in 50 mL is 20 mM, above the 10 mM asked for at most
        (
            replace(
                limited(),
                conditions=(replace(limited().conditions[0], high=0.01), limited().conditions[1]),
                stocks=(("ester", 1.0),),
                vessel=Vessel(0.05, 0.0005, 0.001),
            ),
            ("ester", "0.02", "0.01", "weaker stock"),
        ),
        # 5 mM of a 6 mM stock and 20 mM of a 50 mM stock: 0.833 + 0.4 of the vessel
        (replace(limited(), stocks=(("ester", 0.006), ("hydroxide", 0.05))), ("1.23", "stronger stock")),
    ],
)
def test_limits_that_leave_nothing(study: Study, said: tuple[str, ...]) -> None:
    with pytest.raises(InfeasibleError) as caught:
        allowed(study)
    assert all(text in str(caught.value) for text in said), str(caught.value)


def test_levels_that_none_of_the_limits_leaves() -> None:
    """One of 2 or 9 bar, with a cap of 5 and at least 3: neither is left, and no pressure in between."""
    pressure = replace(PRESSURE, levels=(2.0, 9.0))
    study = replace(
        ester.study(),
        conditions=(*ester.study().conditions, pressure),
        caps=(("pressure", 5.0),),
        stocks=(("pressure", 15.0),),
        vessel=Vessel(0.05, 0.0005, 0.01),
    )
    with pytest.raises(InfeasibleError, match="pressure"):
        allowed(study)


def test_a_cap_at_the_foot_of_a_range_fixes_the_condition() -> None:
    offer = allowed(replace(ester.study(), caps=(("ester", 0.005),)))
    assert [lever.name for lever in offer.levers] == ["hydroxide"]
    assert fit_conditions(offer, np.array([[0.05, 0.1]]))[0, 0] == 0.005


def test_amounts_from_stocks_give_way_together_but_not_below_what_is_asked() -> None:
    """Least parts of the vessel 0.1 and 0.5; asked 0.5 and 0.9; the room of 0.4 above the least is shared
    as the wishes above it, 0.4 each."""
    study = replace(ester.study(), stocks=(("ester", 0.05), ("hydroxide", 0.04)))
    fitted = fit_conditions(allowed(study), np.array([[0.025, 0.036]]))
    np.testing.assert_allclose(fitted / [0.05, 0.04], [[0.3, 0.7]], rtol=1e-12)


RUN = ((0.02, 0.05), (60.0, 300.0))
LIMITS = Limits(2, 3, 5, 60.0, 60.0, 3600.0, 600.0, 8000.0)


@pytest.mark.parametrize(
    ("rows", "named"),
    [
        ((RUN, RUN), None),
        ((((0.02, 0.05), (30.0, 300.0)),), "first sample"),
        ((((0.02, 0.05), (300.0, 310.0)),), "spacing"),
        ((((0.02, 0.05), (60.0, 3700.0)),), "longest run"),
        ((((0.02, 0.05), (60.0, 120.0, 180.0, 240.0)),), "more than 3 a run"),
        ((((0.02, 0.05), (60.0,)),) * 3, "3 runs"),
        ((((0.02, 0.05), (60.0, 120.0, 180.0)),) * 2, "6 samples"),
        ((((0.02, 0.05), (60.0, 3600.0)),) * 2, "booked"),
        ((((0.11, 0.05), (60.0,)),), "ester is outside"),
        ((((0.09, 0.05), (60.0,)),), "ester is outside"),  # the cap
        ((((0.02, 0.01), (60.0,)),), "hydroxide is outside"),
        ((((0.02, 0.05, 4.0), (60.0,)),), "pressure is none of the levels on offer"),
        ((((0.005, 0.05), (60.0,)),), "ester needs less than can be pipetted"),
        ((((0.08, 0.13), (60.0,)),), "than the vessel holds"),
    ],
)
def test_a_limit_that_is_broken_is_named(rows: tuple, named: str | None) -> None:
    """Stocks 0.2 and 0.2 M in 50 mL, not less than 1.5 mL: 6 mM at least; 80 and 130 mM overfill."""
    study = replace(
        ester.study(),
        conditions=(*ester.study().conditions, PRESSURE),
        limits=LIMITS,
        caps=(("ester", 0.085),),
        stocks=(("ester", 0.2), ("hydroxide", 0.2)),
        vessel=Vessel(0.05, 0.0005, 0.0015),
    )
    names = ("ester", "hydroxide", "pressure")
    runs = [Run(tuple(zip(names, (*values, 5.0)[:3], strict=True)), tuple(times)) for values, times in rows]
    found = broken_limits(study, Schedule(tuple(runs)))
    if named is None:
        assert found == ()
    else:
        assert len(found) == len(rows) or len(found) == 1
        assert all(named in text for text in found), found
