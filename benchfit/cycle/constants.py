"""What the cycle stage hands on: the constants of one cycle with their full covariance."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from benchfit.errors import Remark

Shape = Literal["timing", "jumping", "holding", "square"]


@dataclass(frozen=True)
class Assignment:
    """What a channel was clipped to, and what kind of waveform to expect there.

    Attributes
    ----------
    channel : str
        Name of the channel in the capture.
    node : str
        Node of the circuit: "capacitor", "output", "base1", ….
    shape : Shape
        "timing": the node turns without a step at its thresholds; "jumping": each phase begins with a step
        (series resistance, a gate pair's junction); "holding": one phase, then the node is held until it is
        kicked again (a base of a two-transistor circuit); "square": an output of two state levels.
    scale : float
        Factor from the recorded value to the voltage at the tip (1 where the export is already scaled).
    coupling : "dc" or "ac"
        "ac": the mean is gone; levels are known only as differences.
    """

    channel: str
    node: str
    shape: Shape = "timing"
    scale: float = 1.0
    coupling: Literal["dc", "ac"] = "dc"


@dataclass(frozen=True, eq=False)
class PhaseFit:
    """One fitted phase, for drawing and for the plot of residuals: v(t) = A − (A − S)·e^(−κ·t), t from its start.

    ``start``, ``end`` (V), ``curvature`` κ (1/s), ``duration`` (s), ``rising``; ``residual`` is the rms of what
    the fit leaves over what the noise explains (1 = nothing left).
    """

    node: str
    rising: bool
    start: float
    end: float
    curvature: float
    duration: float
    residual: float = 1.0


@dataclass(frozen=True, eq=False)
class CycleConstants:
    """The constants of one cycle as the record gives them, with the record's own (type A) covariance.

    ``names`` are taken from this vocabulary; what the record does not show is left out.

    ======================  ======  ==================================================================
    period                  s       long-run mean
    charge_share            1       share of the period in which the timing node rises
    high_share              1       share of the period in which the output is high (50 % crossings)
    upper                   V       where the rising phase ends (meets the falling one)
    lower                   V       where the falling phase ends (meets the rising one)
    charge_start            V       where the rising phase starts, only where that is not ``lower``
    discharge_start         V       where the falling phase starts, only where that is not ``upper``
    charge_curvature        1/s     κ of the rising phase: v = S + s·(1 − e^(−κt))/κ
    discharge_curvature     1/s     κ of the falling phase
    charge_bow              V       what one exponential leaves: third Legendre coefficient over the phase
    discharge_bow           V       likewise of the falling phase
    high, low               V       state levels of the output
    rise_time, fall_time    s       10 % to 90 % transition durations of the output, where resolved
    rest                    V       where a timing node that does not oscillate parks
    ramp_start              V       start of its only rise or fall
    ramp_asymptote          V       asymptote of that ramp
    ramp_curvature          1/s     κ of that ramp
    output_rest             V       where an output that does not oscillate parks
    ======================  ======  ==================================================================

    Corners are those of the fitted phases: where rounding (a slewing output, ringing) made guard bands
    necessary, ``upper`` and ``lower`` are where the phases' continuations meet; ``highest`` and ``lowest``
    are the extremes of the waveform itself without its noise (value, u in V).

    Attributes
    ----------
    values : ndarray, shape (n,)
    covariance : ndarray, shape (n, n)
    cycles : float
        Whole cycles in the record.
    jitter : (value, u) in s, or None
        Rms of single periods about their mean.
    noise : dict of float
        Noise of each node's channel (V rms).
    spans : dict of (minimum, maximum)
        Extremes of each node's channel, after ``scale`` (V).
    resolutions : dict of float
        Quantisation step of each node's channel, after ``scale`` (V).
    turns : ndarray
        Turning instants (starts of the cycles) on the capture's time axis (s).
    phases : tuple of PhaseFit
    remarks : tuple of Remark
        Conditions met on the way (``clipped``, ``few-cycles``, ``startup``, …).
    """

    oscillates: bool
    names: tuple[str, ...]
    values: NDArray[np.float64]
    covariance: NDArray[np.float64]
    cycles: float = 0.0
    jitter: tuple[float, float] | None = None
    highest: tuple[float, float] | None = None
    lowest: tuple[float, float] | None = None
    noise: dict[str, float] = field(default_factory=dict)
    spans: dict[str, tuple[float, float]] = field(default_factory=dict)
    resolutions: dict[str, float] = field(default_factory=dict)
    coupling: dict[str, str] = field(default_factory=dict)
    turns: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    phases: tuple[PhaseFit, ...] = ()
    remarks: tuple[Remark, ...] = ()
    samples: int = 0
    interval: float = 0.0

    def __contains__(self, name: str) -> bool:
        return name in self.names

    def value(self, name: str) -> float:
        """Value of one constant, in the unit of the vocabulary."""
        return float(self.values[self.names.index(name)])

    def u(self, name: str) -> float:
        """Standard uncertainty (type A) of one constant."""
        i = self.names.index(name)
        return float(np.sqrt(self.covariance[i, i]))
