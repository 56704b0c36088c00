"""A bench that builds the circuits, measures them and breaks them: the tests' own source of truth.

Everything is integrated from differential equations (``engine``); nothing is taken from the package under
test.
"""

from tools.bench.simulate import Waves, simulate

__all__ = ["Waves", "simulate"]
