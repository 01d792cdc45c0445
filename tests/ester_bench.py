"""The ester study compiled once for all tests: every design padded to 3 runs of 8 samples.

Compilation is what these tests cost, so they share the kernels of this module; a run or sample that a
design does not have is masked.
"""

from __future__ import annotations

from functools import cache

import ester
import numpy as np

from designer import virtual
from designer.layout import arrays_of
from designer.likelihood import Design, Readings
from designer.records import Run, Schedule
from designer.virtual import Bench

RUNS, SAMPLES, LANES = 3, 8, 64
VARIED = (
    ((0.02, 0.03), (240.0, 900.0, 2400.0, 5400.0)),
    ((0.08, 0.12), (90.0, 300.0, 720.0, 1800.0)),
    ((0.02, 0.2), (60.0, 150.0, 300.0, 540.0)),
)


@cache
def bench(run_error_factor: float = 1.0) -> Bench:
    return virtual.ready(ester.study(run_error_factor), samples=SAMPLES, lanes=LANES)


def varied() -> Design:
    """The varied 3 x 4 design of the reference studies."""
    runs = [Run((("ester", a), ("hydroxide", b)), times) for (a, b), times in VARIED]
    return arrays_of(bench().axes, Schedule(tuple(runs)))


def padded(cases: list[dict]) -> tuple[Design, Readings]:
    """Reference studies that share a design, as arrays of the common shape."""
    (conditions, times, mask), (values, side) = ester.arrays_of(cases)
    more = (0, RUNS - len(times)), (0, SAMPLES - times.shape[1])
    design = Design(
        np.pad(conditions, (more[0], (0, 0)), mode="edge"),
        np.pad(times, more, mode="edge"),
        np.pad(mask, (*more, (0, 0))),
    )
    return design, Readings(*(np.pad(x, ((0, 0), *more, (0, 0)), mode="edge") for x in (values, side)))
