"""Concentrations over time: one interface, several paths, chosen from the structure of a candidate."""

from designer.trajectories.choice import choose
from designer.trajectories.path import Curve, Path

__all__ = ["Curve", "Path", "choose"]
