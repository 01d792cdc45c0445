"""Published and derived values beside the program's own (tests/validation), and docs/validation.md.

Sources stand beside each value in tests/validation and tests/reference, and in the document.
"""

from __future__ import annotations

from dataclasses import replace

import pytest
from validation import document
from validation.collection import LEFT_OUT, everything
from validation.registry import Check, Values, cases

CHECKS = {check.id: check for check in everything()}
FOUND: dict[str, Values] = {}


def found(check: Check) -> Values:
    if check.id not in FOUND:
        FOUND[check.id] = check.find()
    return FOUND[check.id]


@pytest.mark.parametrize("name", CHECKS)
def test_value(name: str) -> None:
    check = CHECKS[name]
    assert check.holds(found(check)), f"{found(check)} for {check.relation} {check.value}: {check.statement}"


def test_document_is_up_to_date() -> None:
    old = document.PATH.read_text(encoding="utf-8").splitlines()
    wrong = document.out_of_date(old, document.lines(found))
    assert not wrong, "run python -m tests.validation"


def test_every_check_has_a_name_of_its_own() -> None:
    assert len(CHECKS) == len(everything())


@pytest.mark.parametrize("group", [1, 2])
def test_every_value_of_the_group_is_checked_or_left_out_with_a_reason(group: int) -> None:
    for case, content in cases(group).items():
        for key in content["expected"]:
            assert (f"{case} {key.replace('_', ' ')}" in CHECKS) != ((case, key) in LEFT_OUT)


def test_every_check_names_source_and_provenance() -> None:
    assert all(check.source and check.provenance and check.statement for check in CHECKS.values())


def test_control_a_wrong_value_is_seen() -> None:
    """A value off by twice the tolerance, one short, and nan: none of them may pass."""
    check = Check("X", "x", "made up", (2.0, 0.0), lambda: (), "none", "none", relative=0.01)
    assert check.holds((2.019, 1e-10))
    assert not check.holds((2.04, 0.0)) and not check.holds((2.0, 1e-8))
    assert not check.holds((2.0,)) and not check.holds((float("nan"), 0.0))
    least = replace(check, value=(0.9,), relation=">=", relative=0.0)
    assert least.holds((0.95,)) and not least.holds((0.89,)) and not least.holds((float("nan"),))


@pytest.mark.parametrize(
    ("old", "same"),
    [
        ("| q | 2 | 2.001 | < 1e-09 | 0.01 rel |", True),
        ("| q | 2 | 2.002 | 0.001 | 0.01 rel |", True),
        ("| q | 2 | 2.004 | 0.002 | 0.01 rel |", False),
        ("| q | 2 | 2.001, 3 | 0.001 | 0.01 rel |", False),
        ("| q | 2.1 | 2.001 | 0.001 | 0.01 rel |", False),
        ("| q | 2 | 2.001 | 0.001 | 0.1 rel |", False),
    ],
)
def test_control_of_the_comparison(old: str, same: bool) -> None:
    """One unit of the last digit is noise, three are not; other columns must agree to the letter."""
    assert document.same_line(old, "| q | 2 | 2.001 | 0.0005 | 0.01 rel |") is same
