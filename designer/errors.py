"""What can go wrong, as a tree.

    AliquotError
    ├── StudyFileError      the file is wrong: every problem of it, each with key, found, expected, advice
    ├── InfeasibleError     the file is right but no plan fits its limits; says the least relaxation
    ├── ConvergenceError    the mathematics did not converge where a number was indispensable
    └── CallError           the caller used the library wrongly

Trouble inside a batch of virtual studies is not an exception: it is counted and shown.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing wrong (or odd) in a study file.

    where: key path such as ``candidates[2].k.half_life`` or a line number in words.
    found, expected: what stands there and what should; either may be empty.
    advice: what to do next, a sentence.
    """

    where: str
    message: str
    found: str = ""
    expected: str = ""
    advice: str = ""

    def __str__(self) -> str:
        text = f"{self.where}: {self.message}" if self.where else self.message
        if self.expected:
            text += f"; expected {self.expected}"
        if self.found:
            text += f", found {self.found}" if self.expected else f"; found {self.found}"
        if self.advice:
            text += f". {self.advice}"
        return text


class AliquotError(Exception):
    """Everything this package raises on purpose."""


class StudyFileError(AliquotError):
    """The study file (or another file of the user's) cannot be used as it stands.

    problems holds every problem found, in the order of the file.
    """

    def __init__(self, problems: Iterable[Problem], source: str = "") -> None:
        self.problems = tuple(problems)
        self.source = source
        head = f"{source}: " if source else ""
        super().__init__("\n".join(f"{head}{problem}" for problem in self.problems))


class InfeasibleError(AliquotError):
    """No plan satisfies the limits; the message names the limit and the least change that would do."""


class ConvergenceError(AliquotError):
    """A calculation that was indispensable did not converge."""


class CallError(AliquotError):
    """A function of the library was called with arguments it cannot use."""
