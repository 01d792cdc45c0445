"""From a folder to a study: the paper's reading and the wiring's checking, joined."""

from __future__ import annotations

from pathlib import Path

from designer import checking, studyfile
from designer.records import Study


def load_study(path: str | Path) -> Study:
    """The study in the folder ``path`` (or in the file ``path``).

    Raises StudyFileError, holding every problem found.
    """
    return checking.build(studyfile.read(path))
