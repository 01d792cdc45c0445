"""From the raw file to the study: beliefs, half-lives, the free-order alternative, bad input.

The file is the ester study (benchmark numbers, invented data); each test changes one thing in it.
"""

from __future__ import annotations

from math import exp, log, sqrt
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from designer import checking, halflife, plainlaw, reactions, studyfile
from designer.errors import StudyFileError
from designer.expressions import parse
from designer.records import Z90, Belief, Pilot, Step, Study

ROOT = Path(__file__).parent.parent
TEXT = (ROOT / "studies" / "ester" / "study.toml").read_text(encoding="utf-8")
K2 = 'k        = { value = "0.0278 L/(mol*s)", give_or_take = 3 }'  # of 'two hydroxide per ester'
K3 = 'k      = { value = "0.0278 L/(mol*s)", give_or_take = 3 }'  # of 'with a hydroxide-free path'
RATE1 = '"k*[ester]*[hydroxide]"'
AT = 'at = { ester = "50 mM", hydroxide = "50 mM" }'
ABRUPT = "under 'with a hydroxide-free path' the rate does not fall to 0 as hydroxide runs out"


def changed(*pairs: tuple[str, str]) -> str:
    text = TEXT
    for old, new in pairs:
        assert old in text
        text = text.replace(old, new, 1)
    return text


def built(*pairs: tuple[str, str]) -> Study:
    return checking.build(studyfile.parse(changed(*pairs)))


def problems(*pairs: tuple[str, str]) -> list[str]:
    with pytest.raises(StudyFileError) as caught:
        built(*pairs)
    return [str(problem) for problem in caught.value.problems]


def test_the_ester_study() -> None:
    study = built()
    first, second, third, fourth, free = study.candidates
    # equal starting concentrations c: half-life 1/(k c), so k = 1/(0.05 mol/L * 720 s)
    assert exp(first.constant("k").belief.centre) == pytest.approx(1 / (0.05 * 720), rel=1e-9)
    assert first.constant("k").belief.spread == pytest.approx(log(3) / Z90)
    assert first.constant("k").unit == "L/(mol*min)"
    assert dict(second.steps[0].equation.stoichiometry) == {
        "ester": -1,
        "hydroxide": -2,
        "acid": 1,
        "phenolate": 1,
    }
    assert (second.overrides, first.overrides) == (True, False)
    assert third.constant("k0").belief == Belief("lognormal", log(5.6e-4), log(5) / Z90)
    assert fourth.species == ("ester", "acid", "phenol")
    assert free.free_order
    assert [c.belief for c in study.candidates] == pytest.approx([0.2375] * 4 + [0.05])
    ester, hydroxide, temperature = study.conditions
    assert (ester.low, ester.high, ester.unit, ester.is_species) == (0.005, 0.1, "mM", True)
    assert (hydroxide.low, hydroxide.high) == (0.02, 0.2)
    assert (temperature.low, temperature.is_fixed, temperature.is_species) == (298.15, True, False)
    (reading,) = study.readings
    assert (reading.name, reading.relative, reading.time_error, reading.unit) == (
        "ester by HPLC",
        0.012,
        5.0,
        "mM",
    )
    assert (reading.absolute, reading.lowest) == pytest.approx((3e-5, 1e-4))
    assert study.run_errors.rate == 0.008
    assert [(p.name, p.stock, p.each_run) for p in study.run_errors.prepared] == [
        ("ester", 0.0, 0.01),
        ("hydroxide", 0.0, 0.015),
    ]
    limits = study.limits
    assert (limits.first_sample, limits.spacing, limits.longest_run) == (60, 60, 10800)
    assert (limits.setup_per_run, limits.booked) == (2700, 57600)
    assert study.aim.precision == (("k", 0.05),)
    assert study.time_unit == "min"
    assert len(study.warnings) == 1
    assert study.warnings[0].startswith(ABRUPT)


@pytest.mark.parametrize(
    ("text", "numbers"),
    [
        ("ester + 2 hydroxide -> acid + phenol", {"ester": -1, "hydroxide": -2, "acid": 1, "phenol": 1}),
        ("A ->", {"A": -1}),
        ("Fe2+ + OH- -> FeOH2+", {"Fe2+": -1, "OH-": -1, "FeOH2+": 1}),
        ("2 NO2 -> 2 NO + O2", {"NO2": -2, "NO": 2, "O2": 1}),
        ("0.5 ethyl acetate + Co(NH3)5Cl -> P", {"ethyl acetate": -0.5, "Co(NH3)5Cl": -1, "P": 1}),
        ("A + P -> 2 P", {"A": -1, "P": 1}),  # autocatalysis
        ("A + C -> B + C", {"A": -1, "C": 0, "B": 1}),
    ],
)
def test_equations(text: str, numbers: dict[str, float]) -> None:
    assert dict(reactions.equation(text).stoichiometry) == numbers


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("A + B", "no '->' in 'A + B'"),
        ("A -> B -> C", "more than one '->' in 'A -> B -> C'"),
        ("-> B", "nothing stands before '->' in '-> B'"),
        ("A -> A", "nothing is used up in 'A -> A'"),
        ("0 A -> B", "'0 A' has no positive number before it"),
        ("A + + B -> C", "'+ B' is no species in 'A + + B -> C'"),
        ("2A -> B", "'2A' is no species in '2A -> B'; part the 2 from the species by a space"),
    ],
)
def test_what_is_no_equation(text: str, message: str) -> None:
    with pytest.raises(reactions.EquationError) as caught:
        reactions.equation(text)
    assert str(caught.value) == message


# half-lives


def law(rate: str, equation: str, names: dict[str, float], **start: float) -> halflife.Start:
    step = Step(reactions.equation(equation), parse(rate), rate)
    return halflife.Start((step,), names, start)


A, B, T = 0.05, 0.08, 720.0


@pytest.mark.parametrize(
    ("rate", "equation", "names", "start", "expected"),
    [
        ("k*[A]", "A -> P", {}, {"A": A}, log(2) / T),
        ("k*[A]^2", "A -> P", {}, {"A": A}, 1 / (A * T)),
        ("k*[A]^2", "2 A -> P", {}, {"A": A}, 1 / (2 * A * T)),  # rate of reaction: A is lost twice as fast
        ("k", "A -> P", {}, {"A": A}, A / 2 / T),
        # n-th order: t = (2^(n-1) - 1) / ((n-1) k A^(n-1))
        ("k*[A]^1.5", "A -> P", {}, {"A": A}, (2**0.5 - 1) / (0.5 * A**0.5 * T)),
        # mixed second order: kt = ln[(B - A/2)/B / (1/2)] / (B - A)
        ("k*[A]*[B]", "A + B -> P", {}, {"A": A, "B": B}, log((B - A / 2) / B * 2) / ((B - A) * T)),
        # two B for each A: kt = ln[(B - A)/B / (1/2)] / (B - 2A), here with B = 3A
        ("k*[A]*[B]", "A + 2 B -> P", {}, {"A": A, "B": 3 * A}, log(2 * A / (3 * A) * 2) / (A * T)),
        # saturation: V t = Km ln 2 + A/2
        ("V*[A]/(Km+[A])", "A -> P", {"Km": 0.02}, {"A": A}, (0.02 * log(2) + A / 2) / T),
        # reversible: x = K/(1+K) (1 - exp(-k(1+1/K) t)) at x = 1/2
        ("k*([A] - [P]/K)", "A -> P", {"K": 4.0}, {"A": A}, -log(1 - 0.5 * 5 / 4) / (1.25 * T)),
        # catalyst dying: k (1 - exp(-d t))/d = ln 2
        ("k*[A]*exp(-d*time)", "A -> P", {"d": 1e-3}, {"A": A}, log(2) * 1e-3 / (1 - exp(-1e-3 * T))),
    ],
)
def test_constants_from_half_lives(
    rate: str, equation: str, names: dict[str, float], start: dict[str, float], expected: float
) -> None:
    unknown = "V" if "V" in rate else "k"
    begin = law(rate, equation, names, **start)
    assert halflife.solve(begin, unknown, T) == pytest.approx(expected, rel=1e-6)
    assert halflife.half_life(begin.with_constant(unknown, expected), 1e6) == pytest.approx(T, rel=1e-6)


def test_a_half_life_that_is_not_proportional_takes_its_spread_from_both_ends() -> None:
    belief = (
        built(
            ('k0     = { value = "5.6e-4 1/s", give_or_take = 5 }', 'k0     = "1e-4 1/s"'),
            (K3, f'k = {{ half_life = "12 min", give_or_take = 3, {AT} }}'),
        )
        .candidates[2]
        .constant("k")
        .belief
    )

    # E' = -(k0 + kE)E with equal amounts: t = ln[(k0 + kE0/2) / (k0/2 + kE0/2)] / k0
    def time(k: float) -> float:
        return log((1e-4 + k * A / 2) / (1e-4 / 2 + k * A / 2)) / 1e-4

    assert time(exp(belief.centre)) == pytest.approx(T, rel=1e-6)
    ends = [np.exp(belief.centre + s * belief.spread * Z90) for s in (-1, 1)]
    from scipy.optimize import brentq

    exact = [log(brentq(lambda k, t=t: time(k) - t, 1e-6, 10)) for t in (3 * T, T / 3)]
    assert belief.spread * Z90 == pytest.approx((exact[1] - exact[0]) / 2, rel=1e-6)
    assert log(ends[1] / ends[0]) > 2 * log(3)  # wider than 1/k would have it


def test_half_life_through_a_network() -> None:
    text = (ROOT / "studies" / "lactone" / "study.toml").read_text(encoding="utf-8")
    old = 'k1     = { value = "0.02 1/min", give_or_take = 3,'
    study = checking.build(
        studyfile.parse(text.replace(old, 'k1     = { half_life = "30 min", give_or_take = 3,'))
    )
    # one way: ln 2 / 30 min; reversible only: 1/2 = K/(1+K) (1 - exp(-k(1+1/K)t)), K = sqrt(20)
    one_way = study.candidates[1].constant("k1")
    assert exp(one_way.belief.centre) * 1800 == pytest.approx(log(2), rel=1e-5)
    assert one_way.belief.spread * Z90 == pytest.approx(log(3), rel=1e-5)
    assert one_way.reference_temperature == pytest.approx(313.15)
    assert study.candidates[2].constant("k1").unit == "1/min"


def test_a_reversible_network_at_its_reference() -> None:
    k = 20**0.5  # middle of K from 1 to 20
    text = (ROOT / "studies" / "lactone" / "study.toml").read_text(encoding="utf-8")
    head, tail = text.split('name   = "reversible, nothing lost"')
    old = 'k1     = { value = "0.02 1/min", give_or_take = 3,'
    tail = tail.replace(old, 'k1     = { half_life = "30 min", give_or_take = 1.5,')
    study = checking.build(studyfile.parse(f'{head}name   = "reversible, nothing lost"{tail}'))
    expected = -log(1 - 0.5 * (1 + k) / k) / (1 + 1 / k)
    assert exp(study.candidates[2].constant("k1").belief.centre) * 1800 == pytest.approx(expected, rel=1e-5)


# beliefs


@pytest.mark.parametrize(
    ("stated", "family", "points"),
    [  # (probability, value in internal units)
        (
            '{ value = "0.03 L/(mol*s)", give_or_take = 4 }',
            "lognormal",
            [(0.05, 0.0075), (0.5, 0.03), (0.95, 0.12)],
        ),
        ('{ low = "0.6 L/(mol*min)", high = "6 L/(mol*min)" }', "lognormal", [(0.05, 0.01), (0.95, 0.1)]),
        (
            '{ value = "0.03 L/(mol*s)", within = "0.003 L/(mol*s)" }',
            "positive",
            [(0.05, 0.027), (0.95, 0.033)],
        ),
        ('{ uniform = ["0 L/(mol*s)", "3 L/(mol*s)"] }', "uniform", [(0.05, 0.15), (0.5, 1.5)]),
        ('"3 M^-1 min^-1"', "exact", [(0.5, 0.05)]),
        ('{ value = "0.05 L/(mol*s)" }', "exact", [(0.05, 0.05), (0.95, 0.05)]),
    ],
)
def test_beliefs_in_words(stated: str, family: str, points: list[tuple[float, float]]) -> None:
    belief = built((K2, f"k = {stated}")).candidates[1].constant("k").belief
    assert belief.family == family
    for probability, value in points:
        assert plainlaw.quantile(belief, stats.norm.ppf(probability)) == pytest.approx(value, rel=1e-9)


def test_orders_and_fractions() -> None:
    study = built(
        (RATE1, '"(f*k + (1-f)*k)*[ester]*([hydroxide]/c_ref)^n"'),
        (
            "belief = 0.25\n",
            "belief = 0.25\nn = { low = 0.5, high = 1.5 }\nf = { low = 0.2, high = 0.6, fraction = true }\n",
        ),
        ("[[readings]]", '[constants]\nc_ref = "1 M"\n[[readings]]'),
    )
    order, fraction = (study.candidates[0].constant(name).belief for name in ("n", "f"))
    assert (order.family, order.centre) == ("positive", 1.0)
    assert order.spread == pytest.approx(0.5 / Z90)
    for probability, value in ((0.05, 0.2), (0.95, 0.6)):
        assert plainlaw.quantile(fraction, stats.norm.ppf(probability)) == pytest.approx(value, rel=1e-9)
    # equal amounts, order 1 + n in all: t = (2^n - 1)/(n k A^n), n at the median of the cut normal
    n = stats.truncnorm(-1 / order.spread, np.inf, 1, order.spread).median()
    expected = (2**n - 1) / (n * A**n * T)
    assert exp(study.candidates[0].constant("k").belief.centre) == pytest.approx(expected, rel=1e-6)


def test_a_normal_cut_at_0_matches_an_independent_one() -> None:
    belief = Belief("positive", 0.4, 0.5)
    judge = stats.truncnorm(-0.4 / 0.5, np.inf, 0.4, 0.5)
    u = np.array([-2.0, -0.5, 0.0, 1.0, 2.5])
    assert plainlaw.quantile(belief, u) == pytest.approx(judge.ppf(stats.norm.cdf(u)), rel=1e-9)


def test_arrhenius() -> None:
    text = (ROOT / "studies" / "lactone" / "study.toml").read_text(encoding="utf-8")
    k1 = checking.build(studyfile.parse(text)).candidates[0].constant("k1")
    assert k1.activation_energy == Belief("normal", 75e3, 15e3 / Z90)
    assert k1.reference_temperature == pytest.approx(313.15)
    # Q10 = 2 near 25 to 35 degC means 52.9 kJ/mol (known answer)
    assert plainlaw.arrhenius(52.9e3, 308.15, 298.15) == pytest.approx(2, rel=2e-3)


# the free-order alternative


def test_free_order_of_the_ester_study() -> None:
    study = built()
    free = study.candidates[-1]
    ester, hydroxide = sqrt(0.005 * 0.1), sqrt(0.02 * 0.2)
    assert dict(study.constants) == pytest.approx({"ester_ref": ester, "hydroxide_ref": hydroxide})
    assert free.steps[0].text == "r0*([ester]/ester_ref)^n_ester*([hydroxide]/hydroxide_ref)^n_hydroxide"
    assert free.steps[0].equation == study.candidates[0].steps[0].equation  # all alike: that of [[reactions]]
    # orders in hydroxide: 1, 1, k OH/(k0 + k OH), 0, equally believed
    third = 0.0278 * hydroxide / (5.6e-4 + 0.0278 * hydroxide)
    orders = np.array([1, 1, third, 0])
    assert free.constant("n_hydroxide").belief.centre == pytest.approx(orders.mean(), rel=1e-6)
    assert free.constant("n_hydroxide").belief.spread == 0.5  # their own spread, 0.41, is less
    assert orders.std() < 0.5
    assert free.constant("n_ester").belief.centre == pytest.approx(1, rel=1e-6)
    # ln r0: mixture of ln(k E OH) etc.; the third by sampling k0 and k
    draws = np.random.default_rng(1).normal(size=(400_000, 2))
    k0 = 5.6e-4 * np.exp(draws[:, 0] * log(5) / Z90)
    k = 0.0278 * np.exp(draws[:, 1] * log(3) / Z90)
    path = np.log((k0 + k * hydroxide) * ester)
    means = [log(ester * hydroxide / 36), log(0.0278 * ester * hydroxide), path.mean(), log(1.39e-3 * ester)]
    variance = np.mean([(log(3) / Z90) ** 2] * 2 + [path.var(), (log(3) / Z90) ** 2]) + np.var(means)
    assert free.constant("r0").belief.centre == pytest.approx(np.mean(means), abs=3e-3)
    assert free.constant("r0").belief.spread == pytest.approx(sqrt(variance), abs=3e-3)


def test_free_order_stoichiometry_is_that_of_the_most_believed() -> None:
    study = built(
        ("belief = 0.25\nk      = { half", "belief = 0.2\nk      = { half"),
        (f"belief   = 0.25\n{K2}", f"belief   = 0.3\n{K2}"),
    )
    assert dict(study.candidates[-1].steps[0].equation.stoichiometry)["hydroxide"] == -2


def test_free_order_stoichiometry_in_a_tie_is_that_of_the_reactions() -> None:
    own = 'equation = "ester + 3 hydroxide -> acid"\nrate   = "k*[ester]*[hydroxide]"'
    stated = 'k = { value = "0.0278 L/(mol*s)", give_or_take = 3 }'
    given = f'k      = {{ half_life = "12 min", give_or_take = 3, {AT} }}'
    study = built(('rate   = "k*[ester]*[hydroxide]"', own), (given, stated))
    assert dict(study.candidates[0].steps[0].equation.stoichiometry)["hydroxide"] == -3
    assert dict(study.candidates[-1].steps[0].equation.stoichiometry)["hydroxide"] == -1


def test_free_order_share_and_names() -> None:
    study = built(
        ("title  ", "free_order = 0.1\ntitle  "),
        ("[[readings]]", '[constants]\nester_ref = "1 M"\nr0 = 3\n[[readings]]'),
    )
    assert [c.belief for c in study.candidates] == pytest.approx([0.225] * 4 + [0.1])
    assert study.candidates[-1].steps[0].text.startswith("r0_*([ester]/ester__ref)^n_ester_*")
    without = built(("title  ", "free_order = false\ntitle  "))
    assert without.candidates == without.listed
    assert any("free-order alternative is left out" in warning for warning in without.warnings)


def test_free_order_of_the_hydrogenation() -> None:
    text = (ROOT / "studies" / "hydrogenation" / "study.toml").read_text(encoding="utf-8")
    study = checking.build(studyfile.parse(text))
    free = study.candidates[-1]
    # orders in catalyst: 1, 1, 1, 0, 1; in alkene: 0, 1, 1/(1 + K S), 0, 1 with S = sqrt(0.08), K = 10
    assert free.constant("n_catalyst").belief.centre == pytest.approx(0.8, rel=1e-6)
    alkene = (2 + 1 / (1 + 10 * sqrt(0.08))) / 5
    assert free.constant("n_alkene").belief.centre == pytest.approx(alkene, rel=1e-6)
    assert study.condition("pressure").levels == (2.0, 5.0, 9.0)
    assert study.heat.density == pytest.approx(850)
    assert study.plan.samples == 22  # (90 - 3) min in steps of twice 2 min, and the first


# pilots and smaller tables


def test_pilots() -> None:
    pilot = f'pilot = ["40 % conversion after 30 min", "62 % conversion after 1 h"], {AT}'
    lines = pilot.replace("], at", "]\nat")
    table = f'[[pilots]]\n{lines}\nerror = "2 %"\n[[readings]]'
    study = built((K2, K2.replace("give_or_take = 3", f"give_or_take = 3, {pilot}")), ("[[readings]]", table))
    at = (("ester", 0.05), ("hydroxide", 0.05), ("temperature", 298.15))
    readings = ((1800.0, 0.4), (3600.0, 0.62))
    assert study.pilots == (Pilot(at, readings, 0.03, "ester"), Pilot(at, readings, 0.02, "ester"))


def test_smaller_tables() -> None:
    tables = (
        '[already_run]\nester = "20 mM"\nvolume = "10 mL"\n[stocks]\nhydroxide = "1.00 M"\n'
        '[heat]\nreaction = "-85 kJ/mol"\nheat_capacity = "4.18 kJ/(kg*K)"\n'
        '[costs]\nrun = "45 min"\nsample = "4 min"\n[stop]\nleast_runs = 3\nadequacy = true\n[aim]'
    )
    study = built(("[aim]", tables), ("title  ", 'floors = ["good practice"]\ntitle  '))
    assert dict(study.already_run or ()) == {"ester": 0.02, "volume": pytest.approx(0.01)}
    assert study.stocks == (("hydroxide", 1.0),)
    assert (study.heat.reaction, study.heat.density) == (-85e3, None)
    assert study.heat.heat_capacity == pytest.approx(4.18)
    assert study.costs == (("run", 2700.0), ("sample", 240.0))
    assert study.stop == (("least_runs", 3.0), ("adequacy", 1.0))
    assert study.floors == ("good practice",)
    assert built().already_run is None


def test_beliefs_left_out_are_equal() -> None:
    text = "\n".join(line for line in TEXT.splitlines() if not line.startswith("belief"))
    study = checking.build(studyfile.parse(text))
    assert [c.belief for c in study.candidates] == pytest.approx([0.2375] * 4 + [0.05])
