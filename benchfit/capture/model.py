"""One recorded waveform set: a time axis and one or more channels."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchfit.errors import CaptureError, Remark


@dataclass(frozen=True, eq=False)
class Channel:
    """One channel of a capture.

    Attributes
    ----------
    name : str
        The header's name without its unit; nameless channels are ``CH1``, ``CH2``, ….
    unit : str
        Base unit of ``values``: "V", "A", … ("" where the file gives none).
    values : ndarray, shape (samples,), float64
        NaN where a cell was empty or unusable.
    resolution : float
        The smallest step between different values in the record, in ``unit``; 0 where it has only one value.
    overloaded : ndarray of bool, shape (samples,), or None
        Where the instrument wrote an overload or clipping word instead of a number.
    recorded : (minimum, maximum) or None
        Extremes that the record shows, where ``values`` no longer do: those of an envelope of which
        ``values`` are the mid-points.
    """

    name: str
    unit: str
    values: NDArray[np.float64]
    resolution: float = 0.0
    overloaded: NDArray[np.bool_] | None = None
    recorded: tuple[float, float] | None = None

    def __post_init__(self) -> None:
        if self.values.ndim != 1:
            raise CaptureError(
                f"channel {self.name}: values must be one-dimensional, got shape {self.values.shape}"
            )

    @property
    def minimum(self) -> float:
        """Smallest recorded value, in ``unit``; NaN where there is none."""
        return self.recorded[0] if self.recorded else _extreme(np.fmin, self.values)

    @property
    def maximum(self) -> float:
        """Largest recorded value, in ``unit``; NaN where there is none."""
        return self.recorded[1] if self.recorded else _extreme(np.fmax, self.values)


def _extreme(of: np.ufunc, values: NDArray[np.float64]) -> float:
    return float(of.reduce(values)) if values.size else float("nan")


@dataclass(frozen=True, eq=False)
class Capture:
    """A recorded waveform set on an even time axis.

    Sample i was taken at ``start + i * interval`` (s).

    Attributes
    ----------
    path : str
        File name, resource name or "-" that the capture came from.
    interval : float
        Time between samples (s), > 0.
    start : float
        Time of the first sample (s).
    channels : tuple of Channel
        At least one, all of the same length.
    warnings : tuple of Remark
        What was assumed while reading.
    notes : dict
        How the file was understood, for ``-v``: encoding, delimiter, layout, where the interval came from, …
    """

    path: str
    interval: float
    start: float
    channels: tuple[Channel, ...]
    warnings: tuple[Remark, ...] = ()
    notes: dict[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if not self.channels:
            raise CaptureError(f"{self.path}: a capture needs at least one channel")
        lengths = {c.values.size for c in self.channels}
        if len(lengths) != 1:
            raise CaptureError(f"{self.path}: channels of different lengths {sorted(lengths)}")
        if not (self.interval > 0 and np.isfinite(self.interval)):
            raise CaptureError(f"{self.path}: the sample interval must be positive, got {self.interval}")

    @property
    def samples(self) -> int:
        """Number of samples in each channel."""
        return int(self.channels[0].values.size)

    @property
    def time(self) -> NDArray[np.float64]:
        """Time of every sample (s), shape (samples,); made anew at each call."""
        return self.start + self.interval * np.arange(self.samples, dtype=np.float64)

    def __getitem__(self, name: str) -> Channel:
        for channel in self.channels:
            if channel.name == name:
                return channel
        raise KeyError(name)
