"""Concentrations over time: one interface, several paths, chosen from the structure of a candidate.

    candidate                                             path
    one reaction, rate at most quadratic in its extent    ``quadratic``   closed form
    one reaction, a power of one species                  ``power``       closed form
    one reaction, any other smooth rate                   ``extent``      quadrature, Newton
    several, all of first order                           ``linear``      matrix exponential
    several, any other smooth rates                       ``implicit``    extrapolated implicit Euler
    what stops abruptly between them                      ``integrator``  adaptive, also the fallback

Steps that are multiples of one another (forward and back) are one reaction. A factor of time alone is
folded into the clock (``clock``) of a single reaction.
"""

from designer.trajectories.choice import choose
from designer.trajectories.path import Curve, Path

__all__ = ["Curve", "Path", "choose"]
