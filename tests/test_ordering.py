"""No run far beyond what was shown calm: a factor of 2 in concentration, 10 K (common practice)."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import ester
import numpy as np
import pytest

from designer import ordering
from designer.records import Condition, Heat
from designer.search import Proposal

KELVIN = (0.0, 0.0, 0.0, 1.0, 0.0, 0.0, 0.0)
TEMPERATURE = Condition("temperature", False, KELVIN, "degC", 298.15, 338.15)


def hill(already_run: dict[str, float] | None = None, warm: bool = False) -> SimpleNamespace:
    """What the order asks of a hill: its study."""
    study = ester.study()
    conditions = (*study.conditions, TEMPERATURE) if warm else study.conditions
    shown = None if already_run is None else tuple(already_run.items())
    study = replace(study, conditions=conditions, heat=Heat(reaction=-6e4), already_run=shown)
    return SimpleNamespace(offer=SimpleNamespace(study=study))


def proposal(*rows: tuple[float, ...]) -> Proposal:
    return Proposal(np.array(rows), np.ones((len(rows), 1)), np.zeros(len(rows)))


@pytest.mark.parametrize(
    ("row", "size"),
    [
        ((0.02, 0.05), 0.5),  # as before: half of the step allowed
        ((0.04, 0.05), 1.0),  # twice as much: just at it
        ((0.02, 0.15), 1.5),  # the larger of the two counts
        ((0.08, 0.10), 2.0),
        ((0.005, 0.02), 0.2),
    ],
)
def test_size_of_a_step_in_concentration(row: tuple[float, float], size: float) -> None:
    plan = proposal((0.02, 0.05), row)
    assert ordering._boldness(hill(), plan, [0], 1) == pytest.approx(size)
    assert ordering._is_calm(hill(), plan, [0], 1) == (size <= 1)


@pytest.mark.parametrize(("warmer", "size"), [(5.0, 0.5), (10.0, 1.0), (15.0, 1.5)])
def test_size_of_a_step_in_temperature(warmer: float, size: float) -> None:
    plan = proposal((0.02, 0.05, 298.15), (0.01, 0.02, 298.15 + warmer))
    assert ordering._boldness(hill(warm=True), plan, [0], 1) == pytest.approx(max(size, 0.25))
    assert ordering._is_calm(hill(warm=True), plan, [0], 1) == (size <= 1)


def test_the_highest_of_all_earlier_runs_counts() -> None:
    plan = proposal((0.01, 0.02), (0.02, 0.04), (0.04, 0.08))
    assert not ordering._is_calm(hill(), plan, [0], 2)
    assert ordering._is_calm(hill(), plan, [0, 1], 2) and ordering._is_calm(hill(), plan, [1, 0], 2)


def test_what_was_run_before_the_study_counts() -> None:
    plan = proposal((0.04, 0.08), (0.05, 0.08))
    shown = hill({"ester": 0.02, "hydroxide": 0.04})
    assert ordering._is_calm(shown, plan, [], 0) and not ordering._is_calm(shown, plan, [], 1)


def test_nothing_run_yet_begins_with_the_mildest() -> None:
    plan = proposal((0.04, 0.08), (0.01, 0.02), (0.02, 0.02))
    assert [ordering._is_calm(hill(), plan, [], run) for run in range(3)] == [False, True, False]


def order(monkeypatch: pytest.MonkeyPatch, plan: Proposal, heat: bool, worth: list[float]) -> tuple:
    """The order and its notes, where every run adds a worth of its own."""
    study = hill().offer.study
    study = study if heat else replace(study, heat=Heat())
    monkeypatch.setattr(
        ordering, "_worth_of", lambda hill, final, rows: (sum(worth[r] for r in rows), np.zeros(4))
    )
    fake = SimpleNamespace(offer=SimpleNamespace(study=study))
    rows, _, notes = ordering.in_order(fake, SimpleNamespace(proposal=plan))  # type: ignore[arg-type]
    return rows, notes


def test_with_heat_the_order_climbs_step_by_step(monkeypatch: pytest.MonkeyPatch) -> None:
    plan = proposal((0.08, 0.08), (0.04, 0.04), (0.02, 0.02))
    rows, notes = order(monkeypatch, plan, heat=True, worth=[3, 2, 1])
    assert rows == [2, 1, 0] and len(notes) == 1 and "factor of 2" in notes[0]


def test_without_heat_the_most_valuable_run_comes_first(monkeypatch: pytest.MonkeyPatch) -> None:
    plan = proposal((0.08, 0.08), (0.04, 0.04), (0.02, 0.02))
    rows, notes = order(monkeypatch, plan, heat=False, worth=[3, 2, 1])
    assert rows == [0, 1, 2] and not notes


def test_a_step_that_no_order_avoids_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    rows, notes = order(monkeypatch, proposal((0.08, 0.16), (0.02, 0.04)), heat=True, worth=[3, 2])
    assert rows == [1, 0] and any("run 2 steps further" in note for note in notes)
