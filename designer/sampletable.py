"""The table of samples on the run sheet: when each is due, what to read, what it is for.

One row for each sample and reading, one column for each candidate by its letter; the time at which
the sample was really drawn is left blank.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import groupby
from string import ascii_uppercase

from designer import wording
from designer.outcomes import PlannedRun, Predicted, Sample
from designer.records import Reading, Study
from designer.wording import clock, columns, wrapped

BLANK = "_______"


def letters(study: Study) -> dict[str, str]:
    """A letter for each candidate, in the order of the file."""
    names = [candidate.name for candidate in study.candidates]
    return {
        name: ascii_uppercase[i] if i < 26 else f"{ascii_uppercase[i // 26 - 1]}{ascii_uppercase[i % 26]}"
        for i, name in enumerate(names)
    }


def sample_table(study: Study, run: PlannedRun) -> list[str]:
    """One row for each sample and reading; its purpose below it."""
    if not run.samples:
        return []
    names = {reading.name: reading for reading in study.readings}
    codes = letters(study)
    taken = len(run.samples) if run.length is None else sum(1 for s in run.samples if _is_drawn(study, s))
    several = len({p.reading for sample in run.samples for p in sample.predicted}) > 1
    candidates = [
        name for name in codes if any(p.candidate == name for s in run.samples for p in s.predicted)
    ]
    head = ["sample", "time", *(["actual"] if taken else []), *(["reading"] if several else [])]
    kept = len(head)
    head += [codes[name] for name in candidates]
    rows, purposes, number = [], [], 0
    for sample in run.samples:
        drawn = run.length is None or _is_drawn(study, sample)
        number += drawn
        label = f"{run.number}-{number}" if drawn else "read"
        first = [label, clock(sample.time, study.time_unit), *([BLANK if drawn else ""] if taken else [])]
        for reading, row in _by_reading(sample, names, candidates):
            rows.append([*first, *([reading] if several else []), *row])
            first = [""] * len(first)
        purposes.append((len(rows), sample.purpose))
    return [_units(study, run), *_interleaved(columns(head, rows, kept), rows, purposes)]


def _is_drawn(study: Study, sample: Sample) -> bool:
    """Whether this is a sample drawn by hand, not a moment of a recorded signal."""
    recorded = {reading.name for reading in study.readings if reading.every}
    return any(predicted.reading not in recorded for predicted in sample.predicted)


def _by_reading(
    sample: Sample, names: dict[str, Reading], candidates: Sequence[str]
) -> list[tuple[str, list[str]]]:
    """(reading, one cell for each candidate)."""
    found = []
    ordered = sorted(sample.predicted, key=lambda p: list(names).index(p.reading))
    for name, group in groupby(ordered, key=lambda p: p.reading):
        cells = {predicted.candidate: cell(predicted, names[name]) for predicted in group}
        found.append((name, [cells.get(candidate, "") for candidate in candidates]))
    return found


def cell(predicted: Predicted, reading: Reading) -> str:
    """``16.1 (81 %)``, ``<0.1``, ``>1.5``: a predicted reading without its unit."""
    if predicted.censored == "below" and reading.lowest is not None:
        return f"<{wording.amount(reading.lowest, reading.unit).split(' ')[0]}"
    if predicted.censored == "above" and reading.highest is not None:
        return f">{wording.amount(reading.highest, reading.unit).split(' ')[0]}"
    shown = wording.reading(predicted.mean, predicted.error, reading.unit)
    return shown if predicted.left is None else f"{shown} ({_left(predicted)} %)"


def _left(predicted: Predicted) -> str:
    """Per cent left, to the digits of the instrument's error and no finer than 1 %."""
    assert predicted.left is not None
    error = predicted.error * predicted.left / predicted.mean if predicted.mean else 0.0
    shown = wording.to_error(100 * predicted.left, max(100 * error, 1.0))
    return "<1" if shown == "0" else shown


def _units(study: Study, run: PlannedRun) -> str:
    """What the columns of letters hold, in the order of the file."""
    read = {p.reading for sample in run.samples for p in sample.predicted}
    left = {p.reading for sample in run.samples for p in sample.predicted if p.left is not None}
    told = [
        f"{reading.name} in {reading.unit or 'its own number'}"
        + (" (and % left)" if reading.name in left else "")
        for reading in study.readings
        if reading.name in read
    ]
    return f"  predicted by each candidate: {wording.listed(told)}"


def _interleaved(
    table: list[str], rows: Sequence[Sequence[str]], purposes: Sequence[tuple[int, str]]
) -> list[str]:
    """The table with the purpose of each sample below its last row (in the first block of columns)."""
    first, rest = table[: len(rows) + 1], table[len(rows) + 1 :]
    lines, place = [first[0]], 1
    for end, purpose in purposes:
        lines += first[place : end + 1]
        lines += wrapped(purpose, " " * 10, " " * 12) if purpose else []
        place = end + 1
    return [*lines, *([""] if rest else []), *rest]
