"""Bad input of every kind: the problems that each gives, word for word, and what is only odd.

The file is the ester study; each case changes one thing in it.
"""

from __future__ import annotations

import random
from pathlib import Path

import pytest

from designer import checking, studyfile
from designer.errors import StudyFileError
from designer.records import Study

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


BAD = {
    "misspelt key of a table": (
        [("title  ", "titel  ")],
        ["titel: 'titel' is no key of this table. Perhaps 'title' is meant"],
    ),
    "misspelt key of a candidate": (
        [("belief = 0.25", "beleif = 0.25")],
        [
            "candidates[1].beleif: 'beleif' stands in no rate of 'first order in both'. Leave it "
            "out. Perhaps 'belief' is meant"
        ],
    ),
    "wrong unit": (
        [('spacing         = "1 min"', 'spacing = "1 mol/L"')],
        [
            'limits.spacing: the unit does not fit; expected a time (s) such as "5 min", found "1 '
            'mol/L", a concentration (mol/L)'
        ],
    ),
    "missing unit": (
        [('spacing         = "1 min"', "spacing = 1")],
        ['limits.spacing: the unit is missing; expected a time (s) such as "5 min", found 1'],
    ),
    "unknown unit": (
        [('spacing         = "1 min"', 'spacing = "1 mins"')],
        [
            "limits.spacing: there is no unit 'mins'; perhaps 'min'. Write a number, a space and "
            'a unit, such as "5 mM"'
        ],
    ),
    "wrong unit of a constant": (
        [(K2, 'k = { value = "0.0278 1/s", give_or_take = 3 }')],
        ['candidates[2].k.value: the unit does not fit; expected L/(mol*s), found "0.0278 1/s", 1/s'],
    ),
    "difference of temperature": (
        [('rate = "0.8 %"', 'temperature = "0.2 degC"')],
        [
            'run_errors.temperature: a difference of temperature; expected kelvin, such as "0.2 '
            'K", found 0.2 degC'
        ],
    ),
    "unknown species": (
        [(RATE1, '"k*[ester]*[hydroxid]"')],
        [
            "candidates[1].rate: there is no species 'hydroxid', which the rate of 'first order "
            "in both' names. Perhaps 'hydroxide' is meant"
        ],
    ),
    "species without brackets": (
        [(RATE1, '"k*[ester]*hydroxide"')],
        ["candidates[1].hydroxide: 'hydroxide' is a species. Write [hydroxide] for its concentration"],
    ),
    "unknown constant": (
        [(RATE1, '"k*q*[ester]*[hydroxide]"')],
        [
            "candidates[1].q: 'q' in the rate of 'first order in both' is not given. Add q = { "
            "value = ..., give_or_take = 3 } to the candidate"
        ],
    ),
    "unbalanced bracket": (
        [(RATE1, '"k*[ester]*(1+[hydroxide]"')],
        [
            "candidates[1].rate: the rate of 'first order in both' cannot be read: a '(' is never "
            'closed at character 11 of "k*[ester]*(1+[hydroxide]". Names, numbers, [species], + - '
            "* / ^ ( ) and exp, log, sqrt are all there is"
        ],
    ),
    "reaching for Python": (
        [(RATE1, '"__import__(1)"')],
        [
            "candidates[1].rate: the rate of 'first order in both' cannot be read: '__import__' "
            'is no function here; exp, log, sqrt are at character 1 of "__import__(1)". Names, '
            "numbers, [species], + - * / ^ ( ) and exp, log, sqrt are all there is"
        ],
    ),
    **{
        f"no number: {rate}": (
            [(RATE1, f'"{rate}"')],
            [
                "candidates[1].rate: the rate of 'first order in both' holds a number that does not exist. "
                "Look for a division by 0, the log or root of a negative number, or an enormous power"
            ],
        )
        for rate in (
            "k*[ester]*[hydroxide]/0",
            "k*[ester]*[hydroxide]*2^(1/0)",
            "(1-1)/(1-1)*k*[ester]*[hydroxide]",
            "k*[ester]*[hydroxide]*9^9^9",
            "k*[ester]*[hydroxide]*sqrt(-1)",
            "k*[ester]*[hydroxide]*log(0)",
            "k*[ester]*[hydroxide]*exp(1000)",
        )
    },
    "endless chain": (
        [(RATE1, '"k*[ester]' + "*1" * 985 + '"')],
        [
            "candidates[1].rate: the rate of 'first order in both' cannot be read: more than 400 names, "
            'numbers and marks at character 407 of "k*[ester]' + "*1" * 24 + '...". Names, numbers, '
            "[species], + - * / ^ ( ) and exp, log, sqrt are all there is"
        ],
    ),
    "sum of unlike things": (
        [(RATE1, '"k*[ester]*(1+[hydroxide])"')],
        [
            "candidates[1].rate: in 1 + [hydroxide]: a plain number and a concentration (mol/L) "
            "cannot be added. Check the form of the expression and the units it rests on"
        ],
    ),
    "unknown order of a concentration": (
        [(RATE1, '"k*[ester]^n"'), ("belief = 0.25", "belief = 0.25\nn = 2")],
        [
            "candidates[1].rate: in [ester]^n: the base of an exponent that is itself unknown "
            "must be a plain number, not a concentration (mol/L). Divide by a reference: "
            "([ester]/c_ref)^n, with c_ref in [constants]"
        ],
    ),
    "reversed range": (
        [('from = "5 mM", to = "100 mM"', 'from = "100 mM", to = "5 mM"')],
        [
            'conditions.ester: the range is reversed; expected from below to, found "100 mM" to '
            '"5 mM". Exchange the two ends'
        ],
    ),
    "negative range": (
        [('from = "5 mM", to = "100 mM"', 'from = "-5 mM", to = "100 mM"')],
        ['conditions.ester: below 0; expected 0 or more, found "-5 mM" to "100 mM"'],
    ),
    "reversed belief": (
        [(K2, 'k = { low = "2 L/(mol*s)", high = "1 L/(mol*s)" }')],
        [
            "candidates[2].k: the range is reversed or empty; expected low below high, found 2 "
            "L/(mol*s) to 1 L/(mol*s)"
        ],
    ),
    "factor below 1": (
        [(K2, 'k = { value = "0.0278 L/(mol*s)", give_or_take = 0.3 }')],
        ["candidates[2].k.give_or_take: out of range; expected a factor above 1, such as 3, found 0.3"],
    ),
    "beliefs that do not sum": (
        [("belief = 0.25", "belief = 0.5")],
        [
            "candidates: the beliefs of the candidates do not sum to 1; expected 1, found 1.25. "
            "Divide each by 1.25 to keep their ratios"
        ],
    ),
    "per cent without the sign": (
        [('relative   = "1.2 %"', "relative = 1.2")],
        [
            'readings[1].relative: out of range; expected a share such as "1.5 %", from 0 to '
            'below 1, found 1.2. Write "1.2 %" if percent is meant'
        ],
    ),
    "more runs than allowed": (
        [("runs    = 3", "runs    = 6")],
        [
            "plan.runs: more than limits.runs allows; expected at most 5, found 6. Lower "
            "plan.runs or raise limits.runs to 6"
        ],
    ),
    "more samples than allowed": (
        [("samples_total   = 36", "samples_total = 10")],
        [
            "plan: more than limits.samples_total allows; expected at most 10, found 12. Raise "
            "limits.samples_total to 12, or plan 3 samples a run"
        ],
    ),
    "run too short for its samples": (
        [('longest_run     = "3 h"', 'longest_run = "2 min"')],
        [
            "limits.longest_run: 4 samples do not fit into the longest run; expected at least 4 "
            "min, found 2 min. Let the longest run be 4 min, or take at most 2 samples in a run"
        ],
    ),
    "booking too short": (  # 3 runs of 45 min and at least 4 min: 147 min = 2.45 h
        [('booked          = "16 h"', 'booked = "2 h"')],
        [
            "limits.booked: 3 runs with their setting up need more time than is booked; expected "
            "at least 2.45 h, found 2 h booked. Book 2.45 h, or plan at most 2 runs"
        ],
    ),
    "vessel too small": (
        [('volume = "50 mL"', 'volume = "1.5 mL"')],
        [
            "vessel: the samples of a run use up more than there is; expected at most 1.5 mL, "
            "found 2 mL. Take at most 3 samples, or smaller ones"
        ],
    ),
    "range beyond a cap": (
        [('ester = "0.12 M"', 'ester = "0.05 M"')],
        [
            "conditions.ester: what is on offer goes beyond caps.ester; expected at most 50 mM, "
            "found 100 mM. Lower the range to 50 mM, or raise the cap if it is known to be higher"
        ],
    ),
    "half-life never reached": (  # two hydroxide for each ester, equal amounts: half the ester is left
        [(K2, f'k = {{ half_life = "12 min", give_or_take = 3, {AT} }}')],
        [
            "candidates[2].k.half_life: under 'two hydroxide per ester' the ester never falls to "
            "half at these conditions; expected a half-life of 12 min, found 50 % left in the "
            "end. Give k as a value with give_or_take; a conversion that was seen can stand "
            "beside it as a pilot"
        ],
    ),
    "half-life too long beside another path": (  # ln 2/5.6e-4 s = 20.6 min
        [(K3, f'k = {{ half_life = "12 min", give_or_take = 3, {AT} }}')],
        [
            "candidates[3].k.half_life: under 'with a hydroxide-free path' the ester falls to "
            "half sooner, whatever k is; expected a half-life of 36 min (an end of the 90 % range "
            "counts), found 20.6 min with k next to nothing. Give k as a value with give_or_take, "
            "or state a shorter half-life or smaller factor"
        ],
    ),
    "pilot without a belief": (
        [(K2, f'k = {{ pilot = "40 % conversion after 30 min", {AT} }}')],
        [
            "candidates[2].k: a belief cannot be read from this; expected value with give_or_take "
            "or within, or low and high, or uniform, or half_life with give_or_take, or value "
            "alone, found none of them. A pilot is an observation; the constant still needs a "
            "belief of its own beside it"
        ],
    ),
    "pilot in other words": (
        [(K2, K2.replace("= 3", f'= 3, pilot = "nearly done overnight", {AT}'))],
        [
            "candidates[2].k.pilot: an observation that cannot be read; expected words such as "
            '"40 % conversion after 30 min", found "nearly done overnight"'
        ],
    ),
    "no arrow": (
        [('"ester -> acid + phenol"', '"ester = acid + phenol"')],
        [
            "candidates[4].equation: no '->' in 'ester = acid + phenol'; expected an equation "
            'such as "ester + 2 hydroxide -> acid + phenol"'
        ],
    ),
    "unknown name in a signal": (
        [('signal     = "[ester]"', 'signal = "eps*[ester]"')],
        [
            "readings[1].signal: 'eps' in the signal is not known. Add eps to [constants]. Known "
            "here: temperature, time, rate"
        ],
    ),
    "unknown of a candidate in a signal": (
        [('signal     = "[ester]"', 'signal = "k*[ester]"')],
        [
            "readings[1].signal: 'k' is an unknown of a candidate, and a signal must mean the same "
            "under all. Give the signal a known number in [constants]; "
            "[run_errors] scale says how well it is known"
        ],
    ),
    "precision of nothing": (
        [("precision     = { k = ", "precision     = { kk = ")],
        ["aim.precision.kk: 'kk' is no constant of a candidate. Perhaps 'k' is meant"],
    ),
    "a reading without errors": (
        [('relative   = "1.2 %"', ""), ('absolute   = "0.03 mM"', "")],
        [
            'readings[1]: a reading without an error. Add relative = "1 %" or absolute, from '
            "repeated injections of one sample"
        ],
    ),
}


@pytest.mark.parametrize("name", BAD)
def test_bad_input(name: str) -> None:
    pairs, expected = BAD[name]
    assert problems(*pairs) == expected


def test_an_empty_file_says_what_is_needed() -> None:
    with pytest.raises(StudyFileError) as caught:
        checking.build(studyfile.parse(""))
    found = str(caught.value)
    for what in ("no reaction", "no conditions", "no candidate", "no reading", "no limits", "no plan"):
        assert what in found


def test_all_problems_at_once_in_the_order_of_the_file() -> None:
    found = problems(
        ('precision     = { k = "5 %" }', 'precison = { k = "5 %" }'),
        ('lowest     = "0.1 mM"', 'lowest = "0.1 min"'),
        ("give_or_take = 5", "give_or_tke = 5"),
        ('temperature = "25 degC"', 'temperature = "25 mM"'),
    )
    assert [text.split(":")[0] for text in found] == [
        "conditions.temperature",
        "candidates[3].k0.give_or_tke",
        "readings[1].lowest",
        "aim.precison",
    ]


# oddities


@pytest.mark.parametrize(
    ("pairs", "beginning"),
    [
        (
            [('rate = "0.8 %"', 'temperature = "0.1 K"')],
            "run_errors.temperature has no effect: no constant has",
        ),
        (
            [('first_sample    = "1 min"', 'first_sample = "150 min"')],
            "under 'hydroxide plays no part' the first sample, at 150 min, comes after 10 half-lives "
            "(one is about 8.31 min",  # ln 2/1.39e-3 s
        ),
        (
            [('signal     = "[ester]"', 'signal = "[phenol]"')],
            "'phenol' is neither started with nor made under 'two",
        ),
        (
            [('time_error = "5 s"', 'every = "5 s"')],
            "reading 'ester by HPLC' is recorded continuously and no memory",
        ),
    ],
)
def test_what_is_odd_is_a_warning(pairs: list[tuple[str, str]], beginning: str) -> None:
    assert any(warning.startswith(beginning) for warning in built(*pairs).warnings)


def test_nothing_else_is_odd_about_the_ester_study() -> None:
    assert [w for w in built().warnings if not w.startswith(ABRUPT)] == []


def test_damaged_files_end_in_a_study_or_in_problems() -> None:
    """Every line left out in turn, and 300 seeded damages: nothing but the one kind of error."""
    lines = TEXT.split("\n")
    texts = ["\n".join(lines[:i] + lines[i + 1 :]) for i in range(len(lines))]
    chance = random.Random(5)
    values = ['"5 mM"', "0", "-3", "nan", '""', "[]", "{}", "true", '"k"', '"[ester]"', '"1 %"', "1979-05-27"]
    for _ in range(300):
        damaged = list(lines)
        place = chance.choice([i for i, line in enumerate(lines) if "=" in line])
        damaged[place] = f"{damaged[place].split('=')[0]}= {chance.choice(values)}"
        texts.append("\n".join(damaged))
    ends = {"study": 0, "problems": 0}
    for text in texts:
        try:
            checking.build(studyfile.parse(text))
            ends["study"] += 1
        except StudyFileError as error:
            assert all(str(problem) for problem in error.problems)
            ends["problems"] += 1
    assert min(ends.values()) > 30
