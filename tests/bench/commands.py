"""Wall time and peak memory of commands as a user runs them, cold (empty compilation cache) and warm."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).parents[2]
RUN = "import sys; from designer.cli import main; sys.argv[0] = 'aliquot'; main()"


@dataclass(frozen=True)
class Taken:
    command: str
    goal: str
    wall: float
    peak: float  # MiB


def _run(arguments: list[str], cache: Path) -> tuple[float, float]:
    environment = {**os.environ, "XDG_CACHE_HOME": str(cache), "PYTHONPATH": str(ROOT)}
    begin = time.perf_counter()
    process = subprocess.Popen(
        [sys.executable, "-c", RUN, *arguments], env=environment, stdout=subprocess.DEVNULL
    )
    _, status, usage = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise RuntimeError(f"aliquot {' '.join(arguments)} ended with status {process.returncode}")
    return time.perf_counter() - begin, usage.ru_maxrss / 1024


def measure(studies: tuple[str, ...] = ("ester",)) -> list[Taken]:
    found = []
    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        wall, peak = min(_run(["--help"], place) for _ in range(3))
        found.append(Taken("--help", "0.4 s", wall, peak))
        for name in studies:
            study = place / name
            study.mkdir()
            (study / "study.toml").write_text((ROOT / "studies" / name / "study.toml").read_text())
            goals = {"check": ("", ""), "plan": ("30 s", "15 s") if name == "ester" else ("180 s", "180 s")}
            for command, (first, later) in goals.items():
                cache = place / f"cache-{name}-{command}"
                for state, goal in (("first time", first), ("again", later)):
                    wall, peak = _run([command, str(study)], cache)
                    found.append(Taken(f"{command} {name}, {state}", goal, wall, peak))
    return found


def lines(studies: tuple[str, ...] = ("ester",)) -> list[str]:
    rows = ["| command | goal | wall time | peak memory |", "|---|---|---|---|"]
    rows += [f"| {x.command} | {x.goal} | {x.wall:.3g} s | {x.peak:.0f} MiB |" for x in measure(studies)]
    return rows
