"""A realistic compiled batch ends. LAPACK inside compiled code waits for ever on few cores: that is why the
kernel unrolls its factorisations, and this is what would show a relapse."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

BATCH = """
import ester, numpy as np
from designer import signals
from designer.evidence import Kernel
from designer.likelihood import Design, Readings
study = ester.study()
cases = [case for case in ester.reference() if case["design"] == "varied 3x4"]
design, readings = ester.arrays_of(cases)
many = Readings(*(np.tile(x, (64, 1, 1, 1)) for x in readings))
fit = Kernel(signals.law(study, study.candidates[2]), 512).fit(Design(*design), many)
assert fit.log_evidence.shape == (1024,)
assert np.isfinite(fit.log_evidence).all()
print("ended", fit.u.shape[1])
"""
LIMIT = 240  # s: takes some 10 s; a slow machine must not be taken for a hang


def test_a_batch_of_fits_ends() -> None:
    tests = Path(__file__).parent
    paths = os.pathsep.join([str(tests), str(tests.parent)])
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", BATCH],
        env={**os.environ, "PYTHONPATH": paths},
        capture_output=True,
        text=True,
        timeout=LIMIT,
        check=False,
    )
    assert done.stderr == ""
    assert done.stdout.split() == ["ended", "2"]
