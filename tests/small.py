"""A study small enough to be worked out by hand: A -> P, first order, k known to a factor of 2."""

from __future__ import annotations

from pathlib import Path

from designer import checking, studyfile
from designer.records import Study

TEXT = """\
title    = "Decay of A"
question = "k within 5 %"
free_order = false

[[reactions]]
equation = "A -> P"

[conditions]
A           = { from = "10 mM", to = "40 mM" }
temperature = "25 degC"

[[candidates]]
name = "first order"
rate = "k*[A]"
k    = { value = "0.1 1/min", give_or_take = 2, activation_energy = "80 kJ/mol" }

[[readings]]
name       = "A by HPLC"
signal     = "[A]"
relative   = "1 %"
absolute   = "0.05 mM"
time_error = "3 s"

[run_errors]
rate        = "0.5 %"
temperature = "0.1 K"
time_zero   = "4 s"
scale       = "0.7 %"
baseline    = "0.02 mM"
[run_errors.prepared]
A = { stock = "0.6 %", each_run = "0.8 %" }

[plan]
runs    = 2
samples = 4

[limits]
first_sample = "1 min"
spacing      = "1 min"
longest_run  = "1 h"
booked       = "8 h"
"""


def study(*changes: tuple[str, str]) -> Study:
    """The study, with pieces of its text replaced."""
    return checking.build(studyfile.parse(changed(*changes)))


def changed(*changes: tuple[str, str]) -> str:
    text = TEXT
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    return text


def folder(home: Path, *changes: tuple[str, str]) -> Path:
    """A folder that holds the study."""
    home.mkdir(parents=True, exist_ok=True)
    (home / "study.toml").write_text(changed(*changes), encoding="utf-8")
    return home
