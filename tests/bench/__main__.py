"""Rewrite docs/performance.md from measurements made now: ``python -m tests.bench [--all-studies]``."""

from __future__ import annotations

import platform
import sys
from pathlib import Path

from tests.bench import commands

PAGE = Path(__file__).parents[2] / "docs" / "performance.md"
EVERY = ("ester", "dye", "lactone", "hydrogenation")

HEAD = """# Performance

Written by `python -m tests.bench`, which measures everything on this page in one run (`--all-studies` plans
all of `studies/`). Compare within the page: absolute times on shared machines mean little. Machine of this
run: {cores} cores, Python {python}, jax {jax}.

## Evidence

One fit with its log evidence, in batches, beside a loop over `scipy.optimize.least_squares` doing the
same fits one by one in plain numpy (`tests/bench/throughput.py` says how the two compare). Goal: at least
200 times the loop from a cold start with the exact Hessian, 400 times warm-started.
"""

COMMANDS = """
## Commands

"First time" is with an empty compilation cache; "again" is the same command after it.
"""

GROWTH = """
## Growth

One look at a plan: every candidate fitted to every virtual study, as the search does at each step.
"""


def main() -> None:
    import os
    from importlib.metadata import version

    studies = EVERY if "--all-studies" in sys.argv else ("ester",)
    # before anything large is loaded here: a child's peak memory begins with its parent's
    ran = commands.lines(studies)
    from tests.bench import growth, throughput

    head = HEAD.format(cores=os.cpu_count(), python=platform.python_version(), jax=version("jax"))
    parts = [head, *throughput.lines(), COMMANDS, *ran, GROWTH, *growth.lines()]
    PAGE.write_text("\n".join(parts) + "\n", encoding="utf8")
    sys.stdout.write(PAGE.read_text(encoding="utf8"))


if __name__ == "__main__":
    main()
