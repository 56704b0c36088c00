"""The time axis of a capture: where the interval comes from, and what the stamps say of the rows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.arrange import Keep, Pairs, Step
from benchfit.capture.envelope import is_envelope, pairs_begin
from benchfit.capture.frames import Frame, split
from benchfit.capture.plan import Plan
from benchfit.capture.spacing import even, mended, robust_step, settle
from benchfit.capture.table import Table
from benchfit.errors import CaptureError, Remark

Floats = NDArray[np.float64]
Refusal = Callable[[str], CaptureError]
# Fewer rows than this are no record of a waveform.
FEWEST = 8
_HOW = "give the time between samples with --interval, as in --interval 1us"


@dataclass(frozen=True)
class Axis:
    """An even time axis: sample i at ``start + i * interval`` (s).

    ``origin`` says in words where the interval came from, ``steps`` how the rows of the file become samples,
    ``frames`` how many frames the file holds.
    """

    start: float
    interval: float
    origin: str
    steps: tuple[Step, ...]
    remarks: tuple[Remark, ...] = ()
    is_envelope: bool = False

    def values(self, column: Floats) -> Floats:
        """A column of the table as samples."""
        for step in self.steps:
            column = step.values(column)
        return column

    @property
    def keeps_rows(self) -> bool:
        """Whether samples are rows as they were, so that no sample lacks a value that the rows have."""
        return all(isinstance(step, Keep) for step in self.steps)

    def frame(self, column: Floats) -> Floats:
        """A column of the table as the rows of its frame."""
        return self.steps[0].values(column) if self.steps else column

    def mask(self, column: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """A mask on a column of the table as one on samples."""
        for step in self.steps:
            column = step.mask(column)
        return column


def make_axis(table: Table, plan: Plan, interval: float | None, frame: int | None, refusal: Refusal) -> Axis:
    """The time axis of a table; ``interval`` (s) and ``frame`` (from 1) are the user's.

    Raises CaptureError where the file cannot tell its time, and says which option does.
    """
    if interval is not None and not (np.isfinite(interval) and interval > 0):
        raise refusal(f"the interval must be a positive time, got {interval:g} s")
    if table.rows < FEWEST:
        raise refusal(f"has {table.rows} rows of numbers only, too few for a waveform")
    if plan.time is None or (plan.is_increment and interval is not None):
        return _without_stamps(table, plan, interval, frame, refusal)
    stamps = table.columns[plan.time]
    if plan.time_scale != 1.0:
        stamps = stamps * plan.time_scale
    quantum = plan.time_scale * plan.precision.quantum(_largest(stamps) / plan.time_scale)
    if plan.is_increment:
        return _from_increments(table, plan, stamps, quantum, refusal)
    spacing = even(stamps, quantum)
    if spacing is None:
        quantum = max(quantum, _single_precision(stamps, quantum))
        spacing = even(stamps, quantum)
    if spacing is not None and not table.breaks and frame is None and pairs_begin(stamps[:1024]) is None:
        axis = Axis(spacing.start, spacing.interval, "time column", (), spacing.remarks)
        return _chosen(axis, plan, interval, quantum, table.rows)
    return _from_stamps(table, plan, stamps, quantum, interval, frame, refusal)


def _largest(stamps: Floats) -> float:
    """About the largest size of the stamps; a garbled one does not count."""
    sizes = np.abs(stamps[:: max(1, stamps.size // 4096)])
    sizes = sizes[np.isfinite(sizes)]
    return float(np.quantile(sizes, 0.97)) if sizes.size else 0.0


def _single_precision(stamps: Floats, quantum: float) -> float:
    """The step of single-precision numbers at the size of the stamps, where all stamps are such; else 0.

    Many instruments reckon their stamps in single precision and print more digits than that has.
    """
    single = stamps.astype(np.float32)
    if not np.all(np.abs(stamps - single) <= 0.51 * quantum + 1e-15 * np.abs(stamps)):
        return 0.0
    return float(np.spacing(np.float32(_largest(stamps))))


def _without_stamps(table: Table, plan: Plan, interval: float | None, frame: int | None, refusal: Refusal) -> Axis:
    step = interval if interval is not None else plan.interval
    if step is None:
        why = f" ({plan.why_no_time})" if plan.why_no_time else ""
        raise refusal(f"does not tell the time between samples{why}; {_HOW}")
    kept, remarks = _one_frame(split(None, table, 0.0, 0.0), frame, refusal)
    if len(plan.channels) == 1 and plan.why_no_time.startswith("it has one column") and not plan.stated:
        says = "One column of numbers and no time axis: taken for samples of a waveform."
        remarks = (*remarks, Remark("layout-guessed", says))
    origin = "--interval" if interval is not None else plan.stated
    start = plan.start if plan.start is not None else 0.0
    return Axis(start, step, origin, (Keep(kept.start, kept.stop),), remarks)


def _from_increments(table: Table, plan: Plan, steps: Floats, quantum: float, refusal: Refusal) -> Axis:
    name = plan.time_name
    if not (np.all(steps >= 0) and np.any(steps > 0)):
        raise refusal(f'the increments in "{name}" are not all positive, so they give no time axis; {_HOW}')
    spacing = settle(np.cumsum(steps), quantum, refusal)
    says = Remark("increments", f"{name} holds the time since the row before; its values were added up.")
    origin = f"sum of the increments in {name}"
    axis = Axis(spacing.start, spacing.interval, origin, spacing.steps, (says, *spacing.remarks))
    return _chosen(axis, plan, None, quantum, table.rows)


def _from_stamps(
    table: Table,
    plan: Plan,
    stamps: Floats,
    quantum: float,
    interval: float | None,
    frame: int | None,
    refusal: Refusal,
) -> Axis:
    step = robust_step(stamps)
    # A spoilt stamp must be put in line first: it would pass for the begin of a frame.
    stamps, damage = mended(stamps, step, quantum)
    if fault := _no_stamps(stamps, quantum):
        if interval is not None:
            axis = _without_stamps(table, plan, interval, frame, refusal)
            says = f'The time column "{plan.time_name}" {fault}; it was not used.'
            return replace(axis, remarks=(*axis.remarks, Remark("interval-given", says)))
        raise refusal(f'the time column "{plan.time_name}" {fault}; {_hint(stamps, plan)}{_HOW}')
    kept, remarks = _one_frame(split(stamps, table, step, quantum), frame, refusal)
    stamps = stamps[kept.start : kept.stop]
    remarks += damage
    steps: tuple[Step, ...] = (Keep(kept.start, kept.stop),)
    values = [table.columns[channel.index][kept.start : kept.stop] for channel in plan.channels]
    begin = pairs_begin(stamps)
    doubled = begin is not None and is_envelope(stamps, values, begin, quantum)
    if begin is not None and doubled:
        count = (stamps.size - begin) // 2 * 2
        steps += (Keep(begin, begin + count), Pairs())
        stamps = stamps[begin : begin + count : 2]
        remarks = (*remarks, Remark("envelope", _ENVELOPE.format(count=stamps.size)))
    origin = "distance between different stamps" if doubled else "time column"
    if interval is not None:
        known = int(np.argmax(np.isfinite(stamps)))
        start = float(stamps[known]) - known * interval if np.isfinite(stamps[known]) else 0.0
        axis = Axis(start, robust_step(stamps), origin, steps, remarks, doubled)
    else:
        spacing = settle(stamps, quantum, refusal, () if doubled else values)
        steps, remarks = steps + spacing.steps, remarks + spacing.remarks
        axis = Axis(spacing.start, spacing.interval, origin, steps, remarks, doubled)
    return _chosen(axis, plan, interval, quantum, stamps.size)


_ENVELOPE = (
    "Every time stamp stands on two rows, the minimum and the maximum of one interval: read as an envelope of "
    "{count} intervals, each with its mid-point as its value."
)


def _no_stamps(stamps: Floats, quantum: float) -> str:
    """Why a column holds no time stamps: it stands still, or goes up and down; "" where it may hold some."""
    steps = np.diff(stamps)
    forward, back = int(np.count_nonzero(steps > quantum)), int(np.count_nonzero(steps < -quantum))
    up = int(np.count_nonzero(steps > 0))
    if up and not (back and (up < 0.5 * steps.size or 8 * back > forward)):
        return ""
    return "does not run forwards" if back else "stands still"


def _hint(stamps: Floats, plan: Plan) -> str:
    if not np.all(stamps >= 0):
        return ""
    return f"if it holds the time since the row before, say so with --columns increment={plan.time},…; else "


def _one_frame(
    frames: Sequence[Frame], frame: int | None, refusal: Refusal
) -> tuple[Frame, tuple[Remark, ...]]:
    """The frame that was asked for, else the first, with a remark where there are several."""
    if frame is not None and not 1 <= frame <= len(frames):
        many = f"{len(frames)} frames" if len(frames) > 1 else "one frame only"
        raise refusal(f"has {many}, there is no frame {frame}")
    chosen = frames[(frame or 1) - 1]
    if len(frames) == 1:
        return chosen, ()
    text = next((f.text for f in frames if f.text), "")
    if text and frame is None:
        runs = f'holds {len(frames)} runs, one below the other ("{text[:40]}" stands between them)'
        raise refusal(f"{runs}; choose one with --frame 1 to --frame {len(frames)}")
    if chosen.stop - chosen.start < FEWEST:
        few = f"frame {chosen.number} has {chosen.stop - chosen.start} rows only, too few for a waveform"
        raise refusal(f"{few}; choose another with --frame")
    lengths = ", ".join(str(f.stop - f.start) for f in frames[:6]) + (", …" if len(frames) > 6 else "")
    says = f"Time starts anew in the file: it holds {len(frames)} frames, of {lengths} rows, which are not joined"
    return chosen, (Remark("frames", f"{says}; frame {chosen.number} is read (--frame N chooses)."),)


def _chosen(axis: Axis, plan: Plan, interval: float | None, quantum: float, rows: int) -> Axis:
    """The axis with the interval that counts: the user's, else the stated one if confirmed, else the stamps'."""
    if interval is not None:
        kept = tuple(step for step in axis.steps if isinstance(step, Keep | Pairs))
        remarks = axis.remarks
        if not abs(axis.interval / interval - 1) <= 1e-3:
            says = f"The interval is the {interval:g} s given; the {axis.origin} says {axis.interval:.6g} s."
            remarks = (*remarks, Remark("interval-given", says))
        return replace(axis, interval=interval, origin="--interval", steps=kept, remarks=remarks)
    if plan.interval is None:
        return axis
    off = abs(axis.interval / plan.interval - 1)
    if off <= 2 * quantum / (axis.interval * max(rows - 1, 1)) + 1e-5:
        origin = f"{plan.stated}, which the {axis.origin} confirms"
        return replace(axis, interval=plan.interval, origin=origin)
    if off <= 1e-3:
        return replace(axis, origin=f"{axis.origin}, {plan.stated} agrees")
    ours, theirs = f"The {axis.origin} gives {axis.interval:.6g} s", f"{plan.stated} {plan.interval:.6g} s"
    says = f"{ours} between samples, {theirs}; the former is used."
    return replace(axis, remarks=(*axis.remarks, Remark("interval-differs", says)))
