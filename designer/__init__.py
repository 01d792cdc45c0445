"""Plan chemical-kinetics studies: which runs and sampling times tell candidate rate laws apart.

The door: it lists names and nothing else. Each is loaded when it is first used, so that importing the
package costs next to nothing.

    study = designer.load_study("my-study")
    found = designer.check(study)
    proposed = designer.plan(study, seed=1)
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from designer.checkup import checkup as check
    from designer.errors import (
        AliquotError,
        CallError,
        ConvergenceError,
        InfeasibleError,
        Problem,
        StudyFileError,
    )
    from designer.figures import check_figure
    from designer.findings import Checkup
    from designer.frames import ratings, samples
    from designer.loading import load_study
    from designer.outcomes import Plan
    from designer.planfigure import plan_figure
    from designer.planning import plan
    from designer.records import Run, Schedule, Study

__all__ = [
    "AliquotError",
    "CallError",
    "Checkup",
    "ConvergenceError",
    "InfeasibleError",
    "Plan",
    "Problem",
    "Run",
    "Schedule",
    "Study",
    "StudyFileError",
    "check",
    "check_figure",
    "load_study",
    "plan",
    "plan_figure",
    "ratings",
    "samples",
]

_ROOMS = {
    "AliquotError": "errors",
    "CallError": "errors",
    "Checkup": "findings",
    "ConvergenceError": "errors",
    "InfeasibleError": "errors",
    "Plan": "outcomes",
    "Problem": "errors",
    "Run": "records",
    "Schedule": "records",
    "Study": "records",
    "StudyFileError": "errors",
    "check": "checkup",
    "check_figure": "figures",
    "load_study": "loading",
    "plan": "planning",
    "plan_figure": "planfigure",
    "ratings": "frames",
    "samples": "frames",
}
_OTHER_NAMES = {"check": "checkup"}  # name here -> name in its module


def __getattr__(name: str) -> Any:
    if name not in _ROOMS:
        raise AttributeError(f"module '{__name__}' has no attribute '{name}'")
    found = getattr(import_module(f"{__name__}.{_ROOMS[name]}"), _OTHER_NAMES.get(name, name))
    globals()[name] = found
    return found


def __dir__() -> list[str]:
    return list(__all__)
