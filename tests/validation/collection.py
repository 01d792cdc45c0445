"""Every check there is, in the order of the document."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from validation import design_theory, invariance, kinetic_laws, order_table, practice, precision
from validation.registry import Check


@dataclass(frozen=True)
class Section:
    title: str
    checks: Callable[[], list[Check]]


SECTIONS = (
    Section("Best designs for one named law (reference group 1)", design_theory.checks),
    Section("Rate laws and definitions (reference group 2)", kinetic_laws.checks),
    Section("Known answers of practice, rules of the trade", practice.checks),
    Section("Telling orders of reaction apart", order_table.checks),
    Section("Samples and runs", precision.checks),
    Section("What must not change a plan or a probability", invariance.checks),
)
LEFT_OUT = {**design_theory.LEFT_OUT, **kinetic_laws.LEFT_OUT}


def everything() -> list[Check]:
    return [check for section in SECTIONS for check in section.checks()]
