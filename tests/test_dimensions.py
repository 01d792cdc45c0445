"""Deduced dimensions: textbook laws, contradictions in words, and a check by change of units."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from designer import expressions, units
from designer.dimensions import Deduction, exponents, written
from designer.expressions import Binary, Call, Name, Negative, Node, Number, Species

RATE = units.read("1 mol/(L*s)").dimension
KNOWN = {
    "time": units.TIME,
    "catalyst": units.MASS_CONCENTRATION,
    "pressure": units.PRESSURE,
    "c_ref": units.CONCENTRATION,
}
SPECIES = {"A": units.CONCENTRATION, "B": units.CONCENTRATION, "S": units.CONCENTRATION}
FUNCTIONS = {"exp": math.exp, "log": math.log, "sqrt": math.sqrt}

# (rate, units of its constants, as textbooks give them)
LAWS = [
    ("k*[A]", {"k": "1/s"}),
    ("k*[A]*[B]", {"k": "L/(mol*s)"}),
    ("k*[A]^2*[B]", {"k": "L^2/(mol^2*s)"}),
    ("k*[A]^0.5", {"k": "mol^0.5/(L^0.5*s)"}),
    ("k*sqrt([A])*[B]", {"k": "L^0.5/(mol^0.5*s)"}),
    ("k", {"k": "mol/(L*s)"}),
    ("(k0+k*[B])*[A]", {"k0": "1/s", "k": "L/(mol*s)"}),
    ("V*[S]/(Km+[S])", {"V": "mol/(L*s)", "Km": "mol/L"}),
    ("V*[S]/(Km+[S]+[S]^2/Ki)", {"V": "mol/(L*s)", "Km": "mol/L", "Ki": "mol/L"}),
    ("V*([S]/Km)^n/(1+([S]/Km)^n)", {"V": "mol/(L*s)", "Km": "mol/L", "n": ""}),
    ("r*([A]/c_ref)^n", {"r": "mol/(L*s)", "n": ""}),
    ("k*catalyst*exp(-kd*time)*pressure*[A]", {"k": "L/(g*s*bar)", "kd": "1/s"}),
    ("k*[A]*[B]/(1+K*[B])", {"k": "L/(mol*s)", "K": "L/mol"}),
    ("kf*[A] - kf/K*[B]", {"kf": "1/s", "K": ""}),
    ("k*[A]*log(1+[B]/K)", {"k": "1/s", "K": "mol/L"}),
    ("k*[A]^-1*[B]^(3/2)", {"k": "mol^0.5/(L^0.5*s)"}),
]


def deduced(rate: str) -> Deduction:
    deduction = Deduction(KNOWN, SPECIES)
    deduction.whole(expressions.parse(rate), RATE, "the rate")
    return deduction


@pytest.mark.parametrize(("rate", "constants"), LAWS)
def test_textbook_units(rate: str, constants: dict[str, str]) -> None:
    deduction = deduced(rate)
    assert deduction.clashes == []
    for name, unit in constants.items():
        assert deduction.dimension(name) == pytest.approx(units.scale(unit)[1], abs=1e-9), name


@pytest.mark.parametrize(("rate", "constants"), LAWS)
def test_a_change_of_units_changes_nothing(rate: str, constants: dict[str, str]) -> None:
    """Independent of the algebra: with every base unit rescaled, the rate rescales as a rate."""
    del constants
    deduction, node = deduced(rate), expressions.parse(rate)
    scales = (7.0, 0.3, 1.9, 0.11, 3.0, 13.0, 0.7)

    def factor(dimension: tuple[float, ...]) -> float:
        return math.prod(s**d for s, d in zip(scales, dimension, strict=True))

    species = {"A": 0.2, "B": 0.5, "S": 0.3}
    names = dict.fromkeys(expressions.names(node), 0.6)
    names.update({"time": 1.3, "catalyst": 0.4, "pressure": 5.0, "c_ref": 1.5})
    dimensions = {name: KNOWN.get(name) or deduction.dimension(name) or units.NONE for name in names}
    rescaled = {name: value * factor(dimensions[name]) for name, value in names.items()}
    moved = {name: value * factor(units.CONCENTRATION) for name, value in species.items()}
    before = expressions.evaluate(node, names, species, species, FUNCTIONS)
    after = expressions.evaluate(node, rescaled, moved, moved, FUNCTIONS)
    assert after == pytest.approx(before * factor(RATE), rel=1e-9)


@pytest.mark.parametrize(
    ("rate", "part", "message"),
    [
        ("k*[A]*(1+[B])", "1 + [B]", "a plain number and a concentration (mol/L) cannot be added"),
        ("k*[A]*exp(time)", "exp(time)", "exp takes a plain number, not a time (s)"),
        ("k*[A]*log([B])", "log([B])", "log takes a plain number, not a concentration (mol/L)"),
        (
            "k*[A]^n",
            "[A]^n",
            "the base of an exponent that is itself unknown must be a plain number, "
            "not a concentration (mol/L)",
        ),
        ("k*2^[A]", "2^[A]", "an exponent must be a plain number, not a concentration (mol/L)"),
        ("[A]*[B]", "[A]*[B]", "the rate must be mol/(L*s) but is mol^2/L^2"),
        (
            "k*[A] + k*[B]*[A]",
            "k*[A] + k*[B]*[A]",
            "its parts differ by a factor of L/mol, whatever the constants are",
        ),
    ],
)
def test_contradictions_in_words(rate: str, part: str, message: str) -> None:
    (clash, *_) = deduced(rate).clashes
    assert clash.part == part
    assert clash.message == message


def test_a_product_of_unknowns_waits_for_a_stated_unit() -> None:
    deduction = deduced("k*q*[A]")
    assert deduction.dimension("k") is None
    deduction.state("q", units.scale("1/min")[1])
    assert deduction.clashes == []
    assert deduction.dimension("k") == units.NONE


def test_orders_are_the_names_in_exponents() -> None:
    node = expressions.parse("k*([A]/c_ref)^(n+1)*exp(m*log([B]/K)^p)")
    assert exponents(node) == {"n", "p"}


def test_study_constants_count_as_numbers_in_exponents() -> None:
    deduction = Deduction({**KNOWN, "two": units.NONE}, SPECIES, {"two": 2.0})
    deduction.whole(expressions.parse("k*[A]^two"), RATE, "the rate")
    assert deduction.clashes == []
    assert deduction.dimension("k") == units.scale("L/(mol*s)")[1]


def nodes() -> st.SearchStrategy[Node]:
    leaves = st.one_of(
        st.integers(1, 9).map(lambda n: Number(float(n))),
        st.sampled_from(["a", "b"]).map(Name),
        st.sampled_from([Species("A"), Species("B", True)]),
    )
    return st.recursive(
        leaves,
        lambda inner: st.one_of(
            st.builds(Negative, inner),
            st.builds(Binary, st.sampled_from("+-*/"), inner, inner),
            st.builds(lambda base, n: Binary("^", base, Number(float(n))), inner, st.integers(0, 2)),
            st.builds(lambda argument: Call("exp", Binary("/", argument, Number(1e3))), leaves),
        ),
        max_leaves=8,
    )


@given(nodes())
@settings(max_examples=200, deadline=None)
def test_what_is_written_means_the_same(node: Node) -> None:
    def value(part: Node) -> float | None:
        try:
            return expressions.evaluate(
                part, {"a": 1.7, "b": 0.9}, {"A": 0.3, "B": 2.1}, {"A": 1.1, "B": 0.7}, FUNCTIONS
            )
        except (ZeroDivisionError, OverflowError):
            return None

    read, meant = value(expressions.parse(written(node))), value(node)
    if read is None or meant is None:
        assert read is meant
    else:
        assert read == pytest.approx(meant, rel=1e-9)
