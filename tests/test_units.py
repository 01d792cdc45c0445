"""Units: factors against another library and published definitions; refusals; round trips."""

from __future__ import annotations

import time

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from designer import units
from designer.units import UnitError


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("25 degC", 298.15),  # 0 degC = 273.15 K, SI brochure
        ("1 atm", constants.atm / 1e5),
        ("1 psi", constants.psi / 1e5),
        ("1 cal", constants.calorie),
        ("1 week", constants.week),
        ("1 month", 30.4 * 86400),  # a month is 30.4 d here
        ("1.2 %", 0.012),
        ("3 U", 3e-6 / 60),  # enzyme unit: 1 umol/min
        ("-85 kJ/mol", -85e3),
        ("0.5 AU", 0.5),
        ("4", 4.0),
        ("10 µM", 1e-5),
        ("10 uM", 1e-5),
        ("850 kg/m^3", 850.0),  # g/L
        ("1 month", 2626560.0),
    ],
)
def test_internal_values(text: str, value: float) -> None:
    assert units.read(text).value == pytest.approx(value, rel=1e-9)


@pytest.mark.parametrize(
    ("ours", "theirs", "internal"),
    [
        ("L/(mol*min)", "L/(mol*min)", "dm^3/(mol*s)"),
        ("mol/(g*min*bar)", "mol/(g*min*bar)", "mol/(g*s*bar)"),
        ("kJ/(kg*K)", "kJ/(kg*K)", "J/(g*K)"),
        ("L/(mol*cm)", "L/(mol*cm)", "dm^2/mol"),
        ("M^-1 s^-1", "M^-1 s^-1", "dm^3/mol/s"),
        ("mM/h", "mM/h", "mol/dm^3/s"),
        ("mg/mL", "mg/mL", "g/dm^3"),
        ("kcal/mol", "kcal/mol", "J/mol"),
        ("mol^0.5/(L^0.5*d)", "mol^0.5/(L^0.5*day)", "mol^0.5/dm^1.5/s"),
        ("W/L", "W/L", "J/s/dm^3"),
        ("mmol/(m^2*week)", "mmol/(m^2*week)", "mol/dm^2/s"),
        ("MPa", "MPa", "bar"),
    ],
)
def test_factors_against_the_library_as_it_comes(ours: str, theirs: str, internal: str) -> None:
    registry = pint.UnitRegistry()
    expected = registry.Quantity(1.0, theirs).to(internal).magnitude
    assert units.scale(ours)[0] == pytest.approx(expected, rel=1e-9)


def test_pressure_times_volume_is_no_energy() -> None:
    assert units.read("1 L*bar").dimension != units.read("1 J").dimension


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("9**9**9", "'**9**9' is not written as a unit"),
        ("5 m^9^9", "'m^9^9' has a power of something other than one unit"),
        ("5 (m)^9", "'(m)^9' has a power of something other than one unit"),
        ("5 __import__", "'__import__' is not written as a unit"),
        ("5 sec", "there is no unit 'sec'; perhaps 's'"),
        ("5 hours", "there is no unit 'hours'; perhaps 'h'"),
        ("5 ml", "there is no unit 'ml'; perhaps 'mL'"),
        ("5 parsec", "there is no unit 'parsec'"),
        ("five mM", "'five mM' does not begin with a number"),
        ("nan", "'nan' does not begin with a number"),
        ("inf s", "'inf s' does not begin with a number"),
        ("1e400", "'1e400' is no finite number"),
        ("-300 degC", "'-300 degC' lies below absolute zero"),
        ("5 degC/min", "'degC/min' is not written as a unit"),
        ("5 mM)", "'mM)' is not written as a unit"),
        ("5 m/", "'m/' is not written as a unit"),
        ("", "'' does not begin with a number"),
        ("1" * 100, "a quantity of more than 80 characters"),
    ],
)
def test_refusals(text: str, message: str) -> None:
    begun = time.perf_counter()
    with pytest.raises(UnitError) as caught:
        units.read(text)
    if text == "5 degC/min":  # degC is no unit of products
        assert "degC" in str(caught.value)
    else:
        assert str(caught.value) == message
    assert time.perf_counter() - begun < 5  # a tower of powers would run for ever


def test_words_and_printing() -> None:
    assert units.dimension_words(units.TIME) == "a time (s)"
    assert units.dimension_words(units.CONCENTRATION) == "a concentration (mol/L)"
    assert units.dimension_words(units.NONE) == "a plain number"
    second_order = units.read("1 L/(mol*s)").dimension
    assert units.dimension_words(second_order) == "L/(mol*s)"
    assert units.unit_of(second_order, "min") == "L/(mol*min)"
    assert units.unit_of(units.NONE) == ""
    assert units.show(298.15, "degC") == "25 degC"
    assert units.show(0.0278, "L/(mol*min)") == "1.67 L/(mol*min)"  # 0.0278 * 60 = 1.668
    assert units.show(5400.0, "h") == "1.5 h"


UNITS = [u for u in units.known() if u not in ("%",)]


@given(
    st.floats(1e-12, 1e12),
    st.sampled_from(UNITS),
    st.sampled_from(UNITS),
    st.sampled_from([-2, -1, 0.5, 2, 3]),
)
@settings(max_examples=150, deadline=None)
def test_what_is_shown_reads_back(number: float, first: str, second: str, power: float) -> None:
    unit = f"{first}/{second}^{power:g}"
    quantity = units.read(f"{number!r} {unit}")
    back = units.read(units.show(quantity.value, unit, digits=17))
    assert back.dimension == quantity.dimension
    assert back.value == pytest.approx(quantity.value, rel=1e-13)


@given(st.lists(st.sampled_from([-2.0, -1.5, -1.0, -0.5, 0.0, 0.5, 1.0, 2.0, 3.0]), min_size=7, max_size=7))
@settings(max_examples=150, deadline=None)
def test_a_deduced_unit_has_the_dimension_it_stands_for(exponents: list[float]) -> None:
    dimension = tuple(exponents)
    factor, found = units.scale(units.unit_of(dimension))
    assert found == pytest.approx(dimension, abs=1e-6)
    assert factor == pytest.approx(1.0)
