"""What is drawn in the figure of a plan, not its pixels."""

from __future__ import annotations

from dataclasses import replace

import handmade
import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from designer import planfigure
from designer.outcomes import Curve


@pytest.fixture(scope="module")
def figure() -> Figure:
    return planfigure.plan_figure(handmade.study(), handmade.plan())


def curve(axes: Axes, label: str) -> np.ndarray:
    line = next(line for line in axes.get_lines() if line.get_label() == label)
    return np.asarray(line.get_xydata())


def test_one_panel_for_each_run_and_one_for_the_chances(figure: Figure) -> None:
    assert [axes.get_title() for axes in figure.axes] == [
        "run 1: ester 20 mM, hydroxide 20 mM",
        "run 2: ester 80 mM, hydroxide 120 mM",
        "run 3: ester 5 mM, hydroxide 200 mM",
        "",
    ]
    assert {axes.get_ylabel() for axes in figure.axes[:3]} == {"ester by HPLC / mM"}
    assert {axes.get_xlabel() for axes in figure.axes[:3]} == {"time / min"}


def test_curves_are_those_of_the_candidates_in_the_units_of_the_file(figure: Figure) -> None:
    drawn = curve(figure.axes[0], "hydroxide plays no part")
    # first order: 20*exp(-k t) mM, with t in min
    assert drawn[:, 1] == pytest.approx(20 * np.exp(-handmade.K1 * 60 * drawn[:, 0]), rel=1e-5, abs=1e-6)
    assert drawn[-1, 0] == pytest.approx(90.0)
    assert len(figure.axes[0].collections) == 4  # a fan for each candidate


def test_fans_reach_from_the_low_to_the_high_end_of_the_belief(figure: Figure) -> None:
    fan = figure.axes[0].collections[0].get_paths()[0].vertices
    at_end = fan[np.isclose(fan[:, 0], 90.0), 1]
    # equal starting amounts, k three times larger and smaller: 20/(1 + k*20 mM*t) mM
    assert at_end.min() == pytest.approx(20 / (1 + 3 * handmade.K2 * 0.02 * 5400), rel=1e-5)
    assert at_end.max() == pytest.approx(20 / (1 + handmade.K2 / 3 * 0.02 * 5400), rel=1e-5)


def test_candidates_differ_without_colour(figure: Figure) -> None:
    lines = [line for line in figure.axes[0].get_lines() if not line.get_label().startswith("_")]
    assert len({str(line.get_linestyle()) for line in lines}) == len(lines) == 4


def test_samples_are_marked_and_numbered(figure: Figure) -> None:
    axes = figure.axes[0]
    at = [line.get_xdata()[0] for line in axes.get_lines() if len(set(line.get_xdata())) == 1]
    assert at == pytest.approx([4, 15, 40, 90])
    assert [text.get_text() for text in axes.texts] == ["1", "2", "3", "4"]


def test_the_lowest_trusted_reading_is_drawn(figure: Figure) -> None:
    level = [line for line in figure.axes[2].get_lines() if set(line.get_ydata()) == {0.1}]
    assert len(level) == 1  # 0.1 mM


def test_chances_stand_beside_those_of_the_other_plans_with_their_errors(figure: Figure) -> None:
    axes = figure.axes[-1]
    assert [label.get_text() for label in axes.get_yticklabels()] == [
        "this plan",
        "one level, equal steps",
        "three flooded repeats (breaks limits)",
    ]
    top, mean = axes.containers
    assert list(top.lines[0].get_xdata()) == pytest.approx([0.975, 0.885, 0.555])
    assert list(mean.lines[0].get_xdata()) == pytest.approx([0.97, 0.88, 0.55])
    bar = top.lines[2][0].get_segments()[0]
    assert bar[:, 0] == pytest.approx([0.975 - 0.006, 0.975 + 0.006])


def test_each_reading_has_panels_of_its_own_and_a_recorded_one_its_stretch() -> None:
    study = handmade.recorded_study()
    both = replace(study, readings=(*study.readings, replace(study.readings[0], name="by hand", every=None)))
    line = Curve(1, "reversible", "by hand", (0.0, 1200.0), (1.0, 0.5), (0.9, 0.4), (1.1, 0.6))
    plan = replace(handmade.recorded_plan(), curves=(line, replace(line, reading="absorbance")))
    figure = planfigure.plan_figure(both, plan)
    assert [axes.get_ylabel() for axes in figure.axes] == ["absorbance / AU", "by hand / AU", ""]
    assert len(figure.axes[0].patches) == 1 and not figure.axes[1].patches
    assert figure.axes[0].patches[0].get_width() == pytest.approx(1200.0)  # s, the unit of this study


def test_equal_plans_give_equal_bytes(figure: Figure) -> None:
    again = planfigure.plan_figure(handmade.study(), handmade.plan())
    first = planfigure.png(again)
    assert first[:4] == b"\x89PNG"
    assert first == planfigure.png(planfigure.plan_figure(handmade.study(), handmade.plan()))
    assert b"Matplotlib" not in first
