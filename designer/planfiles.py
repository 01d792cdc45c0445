"""A plan on disk: its numbered folder, and the CSV of runs and samples, written and read.

The CSV has one row for each sample: run, sample, time with its unit, one column for each condition
with its unit. A run that is recorded continuously has a row whose sample is "end", at its length. The
same table describes any other plan that is to be compared; see ``read_schedule``.
"""

from __future__ import annotations

import csv
import errno
import io
import json
import math
import os
import shutil
import tempfile
from pathlib import Path

from designer import planrows, units
from designer.documents import plan_document
from designer.errors import Problem, StudyFileError
from designer.outcomes import Plan
from designer.records import Schedule, Study

FOLDER = "plans"
END = planrows.END
LARGEST = 1_000_000  # bytes of a plan CSV; a plan is a page


def ready(folder: Path) -> None:
    """Raise OSError where no plan could be written below ``folder``: said before the search, not after."""
    home = folder / FOLDER
    if home.exists() and not home.is_dir():
        raise NotADirectoryError(errno.ENOTDIR, os.strerror(errno.ENOTDIR), str(home))
    if not os.access(home if home.is_dir() else folder, os.W_OK):
        raise PermissionError(errno.EACCES, "no plan can be written into this folder", str(home))


def write(folder: Path, study: Study, plan: Plan, sheet: str, figure: bytes) -> Path:
    """Write a plan into the next free ``folder``/plans/NNN and return that folder.

    folder: the study's. sheet: the run sheet; figure: a PNG. The four files are written aside first,
    the number is claimed in one step, and nothing that exists is touched. The same plan gives the same
    bytes: no file carries a time.
    """
    document = json.dumps(plan_document(study, plan), indent=1, ensure_ascii=False, allow_nan=False) + "\n"
    files = {
        "plan.csv": csv_text(study, plan.rating.schedule).encode(),
        "run-sheet.txt": sheet.encode(),
        "plan.png": figure,
        "plan.json": document.encode(),
    }
    home = folder / FOLDER
    home.mkdir(parents=True, exist_ok=True)
    aside = Path(tempfile.mkdtemp(prefix=".being-written-", dir=home))
    try:
        for name, content in files.items():
            (aside / name).write_bytes(content)
        claimed = _claim(home)
        for name in files:
            (aside / name).replace(claimed / name)
    finally:
        shutil.rmtree(aside)
    return claimed


def _claim(home: Path) -> Path:
    """Make the folder with the number after the highest there is; another writer may take it first."""
    while True:
        taken = [int(path.name) for path in home.iterdir() if path.name.isdecimal()]
        claimed = home / f"{max(taken, default=0) + 1:03d}"
        try:
            claimed.mkdir()
        except FileExistsError:
            continue
        return claimed


def csv_text(study: Study, schedule: Schedule) -> str:
    """The CSV of a schedule, conditions in their own units and times in the study's, or in a smaller
    unit where that would leave endless decimals (100 s is 1.666... min)."""
    text = io.StringIO()
    unit = _time_unit(study, schedule)
    writer = csv.writer(text, lineterminator="\n")
    conditions = study.conditions
    heads = [_head(condition.name, condition.unit) for condition in conditions]
    writer.writerow(["run", "sample", _head("time", unit), *heads])
    for number, run in enumerate(schedule.runs, 1):
        values = dict(run.conditions)
        shown = [_shown(values[condition.name], condition.unit) for condition in conditions]
        for sample, time in enumerate(run.times, 1):
            writer.writerow([number, sample, _shown(time, unit), *shown])
        if run.length is not None:
            writer.writerow([number, END, _shown(run.length, unit), *shown])
    return text.getvalue()


def _time_unit(study: Study, schedule: Schedule) -> str:
    """The first of the study's unit, min and s in which six digits write every time exactly; else s."""
    times = [time for run in schedule.runs for time in (*run.times, run.length or 0.0)]
    for unit in (study.time_unit, "min", "s"):
        scale = units.scale(unit)[0]
        if all(math.isclose(float(f"{time / scale:.6g}") * scale, time, rel_tol=1e-12) for time in times):
            return unit
    return "s"


def _head(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit else name


def _shown(value: float, unit: str) -> str:
    """Twelve digits at most, so that what is read back is the same plan and 0.1 is written 0.1."""
    return f"{units.convert(value, unit):.12g}"


def read_schedule(path: str | Path, study: Study) -> Schedule:
    """The schedule in a plan CSV, named after its file.

    Columns may come in any order and in any unit of their kind; a fixed condition may be left out. A
    schedule that breaks a limit is read all the same: judging it is not the file's business. A comma,
    a semicolon or a tab parts the columns (after the latter two a decimal comma is understood).

    Raises StudyFileError with every problem of the file, each with its line and column.
    """
    file = Path(path)
    if not file.is_file():
        raise StudyFileError(
            [Problem("", "there is no such file", advice="Give the CSV of a plan")], str(path)
        )
    if file.stat().st_size > LARGEST:
        found, expected = f"{file.stat().st_size / 1e6:.1f} MB", f"at most {LARGEST / 1e6:.0f} MB"
        raise StudyFileError([Problem("", "too large for a plan", found, expected)], str(path))
    try:
        text = file.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as reason:
        line = file.read_bytes()[: reason.start].count(b"\n") + 1
        problem = Problem(f"line {line}", "not written in UTF-8", advice="Save the file as UTF-8")
        raise StudyFileError([problem], str(path)) from None
    runs, problems = planrows.runs(text, study)
    if problems:
        raise StudyFileError(problems, str(path))
    return Schedule(runs, file.stem)
