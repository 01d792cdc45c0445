"""Standard error of ln k on the ester study: samples within a run against independent runs."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import ester
import numpy as np

from designer import virtual
from designer.likelihood import Design
from validation.registry import Check, known

MOST_RUNS, MOST_SAMPLES = 4, 96
START = (0.05, 0.05)  # ester, hydroxide; mol/L
FIRST, LAST = 3 * 60.0, 40 * 60.0  # s
TABLE = {  # runs: {samples of each: SE of ln k}
    1: {4: 0.040, 8: 0.035, 24: 0.029, 96: 0.020},
    2: {4: 0.028, 8: 0.025},
    4: {4: 0.020, 8: 0.018},
}
SOURCE = "ester benchmark B1(c) of this project; invented data"


def design(runs: int, samples: int) -> Design:
    """Padded to one shape, so that one compilation serves the table."""
    times = np.full((MOST_RUNS, MOST_SAMPLES), LAST)
    times[:, :samples] = np.linspace(FIRST, LAST, samples)
    mask = np.zeros((MOST_RUNS, MOST_SAMPLES, 1))
    mask[:runs, :samples] = 1.0
    return Design(np.tile(START, (MOST_RUNS, 1)), times, mask)


def spreads() -> dict[str, Any]:
    """From the curvature of the log posterior where the readings are their own means."""
    whole = ester.study()
    only = replace(whole, candidates=(replace(whole.candidates[0], belief=1.0),))
    bench = virtual.ready(only, samples=MOST_SAMPLES, lanes=1)
    law, kernel = bench.laws[0], bench.kernels[0]
    found = {}
    for runs, row in TABLE.items():
        for samples in row:
            here = design(runs, samples)
            truth = virtual.Truth(
                np.zeros((1, len(law.structural))),
                np.zeros((1, MOST_RUNS, len(law.errors))),
                np.zeros((1, MOST_RUNS, MOST_SAMPLES, 1)),
            )
            fit = kernel.fit(here, virtual.readings_of(bench, here, [truth]))
            slope = virtual.slopes(law, "k", fit.u)
            assert slope is not None
            found[key(runs, samples)] = np.sqrt(slope[0] @ fit.covariance[0] @ slope[0])
    return found


def key(runs: int, samples: int) -> str:
    return f"{runs} run{'s' if runs > 1 else ''} of {samples}"


def checks() -> list[Check]:
    values = {key(runs, samples): value for runs, row in TABLE.items() for samples, value in row.items()}
    statement = "SE of ln k of the ester study, first order in both, 50 mM each, equal steps from 3 to 40 min"
    return known("P-01", statement, spreads, values, SOURCE, "computed", relative=0.05)
