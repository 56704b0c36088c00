"""Samples → the constants of one cycle with their covariance."""

from benchfit.cycle.constants import Assignment, CycleConstants, PhaseFit
from benchfit.cycle.measure import guess, measure

__all__ = ["Assignment", "CycleConstants", "PhaseFit", "guess", "measure"]
