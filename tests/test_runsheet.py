"""The run sheet: what is printed, to how many digits, and what it says about rivals.

Ratings are invented (``handmade``); predicted readings are checked against closed forms.
"""

from __future__ import annotations

import re
from dataclasses import replace
from math import exp, log

import handmade
import pytest

from designer import expectations, reasons, runsheet, wording
from designer.outcomes import Estimate, Inseparable, LocalRating, Predicted, Spread
from designer.records import Schedule
from designer.sampletable import cell

NEVER = r"\b(?:safe|validated|compliant|optimal|significant|discriminat\w*|hypothes[ie]s)\b"


@pytest.fixture(scope="module")
def sheet() -> str:
    return runsheet.text(handmade.study(), handmade.plan())


# times and numbers as a person writes them


@pytest.mark.parametrize(
    ("seconds", "unit", "written"),
    [
        (12.0, "s", "12 s"),
        (0.5, "s", "0.5 s"),
        (59.999, "s", "1 min"),
        (90.0, "min", "1 min 30 s"),
        (3599.0, "min", "59 min 59 s"),
        (5400.0, "min", "90 min"),
        (5400.0, "h", "1 h 30"),
        (7199.8, "min", "2 h"),
        (13200.0, "min", "3 h 40"),
        (3660.0, "h", "1 h 01"),
        (273600.0, "d", "3 d 4 h"),
    ],
)
def test_a_time_is_written_as_read_off_a_clock(seconds: float, unit: str, written: str) -> None:
    assert wording.clock(seconds, unit) == written


@pytest.mark.parametrize(
    ("value", "error", "written"),
    [
        (0.9734, 0.0114, "0.97 ± 0.01"),
        (0.9734, 0.0096, "0.97 ± 0.01"),  # the error rounds up to 0.01
        (0.9999, 0.003, "1.000 ± 0.003"),
        (134.2, 14.0, "130 ± 10"),
        (-0.001, 0.02, "0.00 ± 0.02"),  # no minus nought
        (0.5, 0.0, "0.5"),
        (float("nan"), float("nan"), "–"),
    ],
)
def test_no_more_digits_than_the_error_supports(value: float, error: float, written: str) -> None:
    assert wording.estimate(Estimate(value, error)) == written


def test_wide_tables_go_on_below_under_the_same_first_column() -> None:
    head = ["name", *(f"column {i}" for i in range(20))]
    lines = wording.columns(head, [["row", *("x" * 12 for _ in range(20))]])
    assert max(map(len, lines)) <= wording.WIDTH
    assert sum(line.split()[0] == "row" for line in lines) == 4  # six columns of 14 in the 94 left of a line
    assert sum(line.count("x" * 12) for line in lines) == 20


# the sheet as a whole


def test_lines_are_short_and_words_are_of_the_trade(sheet: str) -> None:
    every = sheet + runsheet.text(handmade.recorded_study(), handmade.recorded_plan())
    assert max(map(len, every.splitlines())) <= 100
    assert not re.findall(NEVER, every, re.IGNORECASE)
    assert not [line for line in every.splitlines() if line != line.rstrip()]


def test_the_decision_comes_first_then_the_number(sheet: str) -> None:
    lines = sheet.splitlines()
    assert lines[3:8] == [
        "Recommended: 3 runs of 4 samples, 12 in all, in the order given. It fits: 4 h 30 of your 16 h.",
        "The right law comes out on top in 97.5 ± 0.6 % of virtual studies; k comes out within 4.10 ± 0.07 %",
        "(half of its 95 % range; aim 5 %).",
        "Short of the aim: a probability of 0.95 is reached in 85 ± 1 % of studies when 'with a",
        "hydroxide-free path' is true; 90 % was asked for.",
    ]


def test_a_run_is_a_table_with_a_blank_for_the_actual_time(sheet: str) -> None:
    start = sheet.index("RUN 1 of 3")
    assert sheet[start:].splitlines()[:9] == [
        "RUN 1 of 3   ester 20 mM, hydroxide 20 mM",
        "  at temperature 25 degC",
        "  started at _______   ended at _______   by _______",
        "",
        "  predicted by each candidate: ester by HPLC in mM (and % left)",
        "  sample  time    actual   A            B            C            D",
        "  1-1     4 min   _______  17.6 (88 %)  17.8 (89 %)  15.5 (78 %)  14.3 (72 %)",
        "          separates first order in both from two hydroxide per ester: 25 against 51 % left",
        "  1-2     15 min  _______  13.3 (67 %)  14.4 (72 %)  8.7 (43 %)   5.72 (29 %)",
    ]


def test_predicted_readings_follow_the_closed_forms(sheet: str) -> None:
    # equal starting amounts, second order: 20/(1 + k*20 mM*t) mM; first order: 20*exp(-k t) mM
    a = 20 / (1 + handmade.K2 * 0.020 * 900)
    d = 20 * exp(-handmade.K1 * 900)
    row = next(line for line in sheet.splitlines() if line.startswith("  1-2"))
    assert row.split()[4] == f"{a:.1f}" and f"({5 * a:.0f} %)" in row
    assert f"{d:.2f} ({5 * d:.0f} %)" in row


def test_what_cannot_be_read_is_written_as_less_than(sheet: str) -> None:
    row = next(line for line in sheet.splitlines() if line.startswith("  3-4"))
    assert row.split()[2:] == ["min", "_______", "<0.1", "<0.1", "<0.1", "1.43", "(29", "%)"]
    reading = handmade.study().readings[0]
    barely = Predicted("x", reading.name, 2e-5, 3e-5, "", 0.001)
    assert cell(barely, reading) == "0.02 (<1 %)"


def test_a_mark_of_caution_stands_in_its_run(sheet: str) -> None:
    third = sheet[sheet.index("RUN 3 of 3") : sheet.index("WHAT TO EXPECT")]
    assert "  ▲ hydroxide 200 mM is beyond the highest already run" in third.splitlines()
    assert sheet.count("▲") == 1


def test_time_against_the_booking() -> None:
    plan = handmade.plan()
    assert runsheet.booking(plan) == "fits: 4 h 30 of your 16 h"
    assert runsheet.booking(replace(plan, booked=4 * 3600.0)) == (
        "needs 4 h 30, 30 min more than booked (4 h)"
    )
    assert runsheet.booking(replace(plan, booked=None)) == "takes 4 h 30"


def test_a_recorded_run_says_what_to_pipette_and_how_long_to_record() -> None:
    lines = runsheet.text(handmade.recorded_study(), handmade.recorded_plan()).splitlines()
    assert "  Record for 20 min, a reading every 2 s (nearer than 40 s they add nothing)." in lines
    # 10 uM of 100 uM in 3 mL is 0.3 mL; 50 mM of 1 M in 3 mL is 0.15 mL
    assert (
        "  Pipette 0.300 mL of dye stock (100 uM), 0.150 mL of hydroxide stock (1000 mM) and 2.55 mL of"
        in lines
    )
    assert (
        "Needed for all runs, without spills: 0.300 mL of dye, 0.150 mL of hydroxide and 2.55 mL of solvent."
        in lines
    )
    assert "  read    12 s   >1.5   >1.5   >1.5   >1.5" in lines  # above what the instrument can read
    assert "actual" not in "\n".join(lines)  # nothing is drawn by hand


def test_beliefs_after_pilots_are_shown_where_they_moved(sheet: str) -> None:
    assert "after pilots" not in sheet
    moved = runsheet.text(handmade.recorded_study(), handmade.recorded_plan())
    assert re.search(r"A +first order in both +25 % +40 %", moved)


# expectations


def test_broken_limits_are_named_below_their_plan(sheet: str) -> None:
    lines = sheet.splitlines()
    row = next(i for i, line in enumerate(lines) if line.startswith("  three flooded repeats"))
    assert " ".join(lines[row].split()[3:]) == ("55.5 ± 0.6 % 50 ± 1 % 0.550 ± 0.005 2.40 ± 0.07 % 2 h 39")
    assert lines[row + 1] == "      breaks limits: 24 samples in all, more than the limit of 20"


def test_the_trap_is_named_with_its_reason(sheet: str) -> None:
    told = " ".join(sheet.split())
    # SE of ln k of the handmade ratings: half-width/1.96
    assert (
        "'three flooded repeats' looks better on the constants (SE of ln k 0.0122 ± 0.0004 against "
        "0.0209 ± 0.0004 if 'first order in both' is true; k" in told
    )
    assert (
        "but gives the right law a mean probability of 0.550 ± 0.005 against 0.970 ± 0.005: its runs all "
        "start from the same conditions, so it measures a constant closely under a law that is taken for "
        "granted and cannot tell which law that is." in told
    )
    assert told.count("looks better on the constants") == 1  # the usual schedule is worse on both


def test_the_nearest_rival_is_the_one_with_the_highest_mean_probability() -> None:
    first, *rest = reasons.sentences(handmade.study(), handmade.plan())
    assert first == (
        "Better than the nearest rival, 'one level, equal steps': the mean probability of the right law is "
        "0.970 ± 0.005 against 0.880 ± 0.005; this plan spans more of ester (5 mM to 80 mM, the other only "
        "22.4 mM) and hydroxide (20 mM to 200 mM, the other only 63.2 mM)."
    )
    assert len(rest) == 1


def test_a_tie_and_a_better_rival_are_said_as_they_are() -> None:
    plan = handmade.plan()
    mine = handmade.schedule("mine")
    tie = replace(plan, alternatives=(handmade.rating(mine, 0.965, 0.05, 9000.0),))
    assert reasons.sentences(handmade.study(), tie) == [
        "No clear gain over the nearest rival, 'mine': the mean probability of the right law is "
        "0.970 ± 0.005 against 0.965 ± 0.005, a difference within its error; it pins k down more closely "
        "(4.10 ± 0.07 % against 5.00 ± 0.07 %)."
    ]
    better = replace(plan, alternatives=(handmade.rating(mine, 0.99, 0.04, 9000.0, ("too long",)),))
    assert reasons.sentences(handmade.study(), better) == [
        "'mine' does better than this plan: the mean probability of the right law is 0.970 ± 0.005 against "
        "0.990 ± 0.005, though it breaks limits."
    ]
    assert reasons.sentences(handmade.study(), replace(plan, alternatives=())) == []


def test_two_figures_differ_where_their_errors_say_so() -> None:
    # 0.05 apart, standard error of the difference sqrt(0.03^2 + 0.04^2) = 0.05
    assert reasons.difference(Estimate(0.95, 0.03), Estimate(0.90, 0.04)) == pytest.approx(1.0)
    assert reasons.difference(Estimate(0.9, 0.0), Estimate(0.8, 0.0)) == float("inf")
    assert reasons.difference(Estimate(float("nan"), 0.1), Estimate(0.8, 0.1)) == 0.0


def test_a_plan_as_good_on_the_law_is_no_trap() -> None:
    mine = handmade.rating(handmade.schedule(), 0.97, 0.04, 9000.0)
    assert reasons.is_trap(mine, handmade.rating(Schedule(handmade.schedule().runs), 0.5, 0.02, 9000.0))
    assert not reasons.is_trap(mine, handmade.rating(handmade.schedule(), 0.97, 0.02, 9000.0))
    assert not reasons.is_trap(mine, handmade.rating(handmade.schedule(), 0.5, 0.06, 9000.0))
    assert not reasons.is_trap(mine, handmade.rating(handmade.schedule(), 0.9, 0.02, 9000.0))  # a small loss


def test_looking_better_under_half_of_the_laws_is_enough_for_a_trap() -> None:
    # measured on the ester study: SE of ln k under each true law, and mean probability of the right law
    mine = handmade.rating(handmade.schedule(), 0.997, 0.033, 9000.0)
    flooded = handmade.rating(handmade.schedule(), 0.44, 0.064, 9000.0)
    mine = replace(mine, spreads=spreads(0.0150, 0.0177, 0.0253, 0.0088))
    flooded = replace(flooded, spreads=spreads(0.0131, 0.0131, 0.0885, 0.0152))
    assert reasons.closer(mine, flooded) == [
        ("first order in both", "k"),
        ("two hydroxide per ester", "k"),
    ]
    assert reasons.is_trap(mine, flooded)
    assert not reasons.is_trap(mine, replace(flooded, spreads=spreads(0.0131, 0.0177, 0.0885, 0.0152)))


def spreads(*values: float) -> tuple[Spread, ...]:
    laws = zip(handmade.LAWS, values, strict=True)
    return tuple(Spread(law, "k", Estimate(value, 0.0002)) for law, value in laws)


def test_pairs_that_no_plan_separates_come_with_the_lever_that_would() -> None:
    plan = handmade.plan()
    pairs = (Inseparable("a", "b", ("catalyst", "temperature")), Inseparable("a", "c", ()))
    told = " ".join(runsheet.text(handmade.study(), replace(plan, inseparable=pairs)).split())
    assert (
        "'a' and 'b' predict the same on the levers offered: no schedule of these runs separates them. "
        "Vary catalyst by a factor of 2 or temperature by 10 K: that would." in told
    )
    assert "Freeing one of the fixed conditions would not either" in told


def test_numerical_trouble_is_counted_and_shown(sheet: str) -> None:
    told = " ".join(sheet.split())
    assert "'this plan' 3 of 512 (12), 'one level, equal steps' 0 of 512 (0)" in told
    plan = handmade.plan()
    unsolved = replace(plan.rating, unsolved=(("first order in both", 4),))
    told = " ".join(runsheet.text(handmade.study(), replace(plan, rating=unsolved)).split())
    assert "left out: 4 of 'first order in both' under 'this plan'." in told
    none = replace(plan, rating=replace(plan.rating, doubtful=0, repaired=0))
    assert "Numerical trouble: none" in runsheet.text(handmade.study(), none)


def test_local_criteria_say_what_they_leave_out() -> None:
    local = (LocalRating("first", "D", 12.345678, 0.0634), LocalRating("second", "c k", 0.5, 9.6))
    lines = runsheet.text(handmade.study(), replace(handmade.plan(), local=local)).splitlines()
    start = lines.index("    candidate  D             c for k")
    assert lines[start + 1 : start + 3] == [
        "    first      12.3 (6.3 %)  –",
        "    second     –             0.5 (11 times)",
    ]
    assert "beliefs and errors of the runs left out" in " ".join(" ".join(lines).split())


def test_the_sheet_of_a_study_without_a_precision_aim_leaves_it_out() -> None:
    plan = handmade.plan()
    bare = replace(
        plan,
        rating=replace(plan.rating, precision=()),
        alternatives=tuple(replace(rating, precision=()) for rating in plan.alternatives),
    )
    text = runsheet.text(handmade.study(), bare)
    assert "half of its 95 % range" not in text and "within" not in text.splitlines()[4]
    assert expectations.expectations(handmade.study(), bare, {})


def test_the_mean_of_the_logarithm_is_that_of_the_rating(sheet: str) -> None:
    assert f"{log(0.97):.2f} ± 0.01" in sheet
