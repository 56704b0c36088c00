"""Samples → the constants of one cycle with their covariance."""

from benchfit.cycle.constants import Assignment, CycleConstants, PhaseFit
from benchfit.cycle.guess import guess
from benchfit.cycle.measure import measure

__all__ = ["Assignment", "CycleConstants", "PhaseFit", "guess", "measure"]
