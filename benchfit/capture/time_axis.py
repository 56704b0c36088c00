"""The time axis of a capture: where the interval comes from, and what the stamps say of the rows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.arrange import Keep, Pairs, Step
from benchfit.capture.frames import Frame, split
from benchfit.capture.plan import Plan
from benchfit.capture.spacing import Spacing, even, mended, robust_step, settle
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
    """The time axis of a table; ``interval`` (s) and ``frame`` (from 1) are the user's. Raises CaptureError."""
    if interval is not None and not (np.isfinite(interval) and interval > 0):
        raise refusal(f"the interval must be a positive time, got {interval:g} s")
    if table.rows < FEWEST:
        raise refusal(f"has {table.rows} rows of numbers only, too few for a waveform")
    if plan.time is None:
        return _without_stamps(table, plan, interval, frame, refusal)
    stamps = table.columns[plan.time]
    if plan.time_scale != 1.0:
        stamps = stamps * plan.time_scale
    quantum = plan.time_scale * plan.precision.quantum(_largest(stamps) / plan.time_scale)
    if plan.is_increment:
        return _from_increments(table, plan, stamps, quantum, interval, refusal)
    spacing = even(stamps, quantum)
    if spacing is not None and not table.breaks and frame is None and _paired(stamps[:1024]) is None:
        return _chosen(
            Axis(float(stamps[0]), spacing.interval, "time column", (), spacing.remarks),
            plan,
            interval,
            quantum,
            table.rows,
        )
    return _from_stamps(table, plan, stamps, quantum, interval, frame, refusal)


def _largest(stamps: Floats) -> float:
    """About the largest size of the stamps; a garbled one does not count."""
    sizes = np.abs(stamps[:: max(1, stamps.size // 4096)])
    sizes = sizes[np.isfinite(sizes)]
    return float(np.quantile(sizes, 0.97)) if sizes.size else 0.0


def _without_stamps(
    table: Table, plan: Plan, interval: float | None, frame: int | None, refusal: Refusal
) -> Axis:
    step = interval if interval is not None else plan.interval
    if step is None:
        why = f" ({plan.why_no_time})" if plan.why_no_time else ""
        raise refusal(f"does not tell the time between samples{why}; {_HOW}")
    frames = split(None, table, 0.0, 0.0)
    kept, remarks = _one_frame(frames, frame, plan, refusal)
    if len(plan.channels) == 1 and plan.why_no_time.startswith("it has one column") and not plan.stated:
        remarks = (
            *remarks,
            Remark(
                "layout-guessed", "One column of numbers and no time axis: taken for samples of a waveform."
            ),
        )
    origin = "--interval" if interval is not None else plan.stated
    start = plan.start if plan.start is not None else 0.0
    return Axis(start, step, origin, (Keep(kept.start, kept.stop),), remarks)


def _from_increments(
    table: Table, plan: Plan, steps: Floats, quantum: float, interval: float | None, refusal: Refusal
) -> Axis:
    if np.any(steps < 0) or not np.any(steps > 0):
        raise refusal(
            f'the increments in "{plan.time_name}" are not all positive, so they give no time axis; {_HOW}'
        )
    stamps = np.cumsum(steps)
    spacing = settle(stamps, quantum, refusal)
    says = Remark(
        "increments", f"{plan.time_name} holds the time since the row before; its values were added up."
    )
    axis = Axis(float(stamps[0]), spacing.interval, f"sum of the increments in {plan.time_name}", spacing.steps,
                (says, *spacing.remarks))  # fmt: skip
    return _chosen(axis, plan, interval, quantum, table.rows)


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
    _refuse_no_stamps(stamps, quantum, plan, refusal)
    kept, remarks = _one_frame(split(stamps, table, step, quantum), frame, plan, refusal)
    remarks += damage
    stamps = stamps[kept.start : kept.stop]
    steps: tuple[Step, ...] = (Keep(kept.start, kept.stop),)
    if stamps.size < FEWEST:
        raise refusal(
            f"frame {kept.number} has {stamps.size} rows only, too few for a waveform; choose another with --frame"
        )
    origin = "time column"
    offset = _paired(stamps)
    values = [table.columns[c.index][kept.start : kept.stop] for c in plan.channels]
    if offset is not None and (_pair_step(stamps, offset) >= 4 * quantum or _is_zigzag(values, offset)):
        count = (stamps.size - offset) // 2 * 2
        steps += (Keep(offset, offset + count), Pairs())
        stamps = stamps[offset : offset + count : 2]
        remarks += (Remark("envelope", "Every time stamp stands on two rows, the minimum and the maximum of one interval: read as an "
                           f"envelope of {stamps.size} intervals, each with its mid-point as its value."),)  # fmt: skip
        origin = "distance between different stamps"
    spacing = settle(stamps, quantum, refusal, values if offset is None else ())
    axis = Axis(float(stamps[0]), spacing.interval, origin, steps + spacing.steps, remarks + spacing.remarks,
                is_envelope=Pairs() in steps)  # fmt: skip
    return _chosen(replace(axis, start=spacing.start), plan, interval, quantum, stamps.size)


def _refuse_no_stamps(stamps: Floats, quantum: float, plan: Plan, refusal: Refusal) -> None:
    """A column whose values go up and down, or stand still, holds no time stamps."""
    steps = np.diff(stamps)
    forward, back = int(np.count_nonzero(steps > quantum)), int(np.count_nonzero(steps < -quantum))
    up = int(np.count_nonzero(steps > 0))
    if up == 0 or (back > 0 and (up < 0.5 * steps.size or 8 * back > forward)):
        what = "stands still" if not back else "does not run forwards"
        hint = (
            f"if it holds the time since the row before, say so with --columns increment={plan.time},…; else "
            if np.all(stamps >= 0)
            else ""
        )
        raise refusal(f'the time column "{plan.time_name}" {what}; {hint}{_HOW}')


def _one_frame(
    frames: Sequence[Frame], frame: int | None, plan: Plan, refusal: Refusal
) -> tuple[Frame, tuple[Remark, ...]]:
    if frame is not None and not 1 <= frame <= len(frames):
        many = f"{len(frames)} frames" if len(frames) > 1 else "one frame only"
        raise refusal(f"has {many}, there is no frame {frame}")
    chosen = frames[(frame or 1) - 1]
    if len(frames) == 1:
        return chosen, ()
    lengths = ", ".join(str(f.stop - f.start) for f in frames[:6]) + (", …" if len(frames) > 6 else "")
    text = next((f.text for f in frames if f.text), "")
    if text and frame is None:
        raise refusal(f'holds {len(frames)} runs, one below the other ("{text[:40]}" stands between them); choose one with --frame 1 '
                      f"to --frame {len(frames)}")  # fmt: skip
    says = f"Time starts anew {len(frames) - 1} times: the file holds {len(frames)} frames of {lengths} rows, never joined; frame "
    return chosen, (Remark("frames", f"{says}{chosen.number} is read (--frame N chooses)."),)


def _paired(stamps: Floats) -> int | None:
    """0 or 1, the row at which pairs of equal stamps begin; None where stamps do not come in pairs."""
    steps = np.diff(stamps)
    for offset in (0, 1):
        inside, between = steps[offset::2], steps[offset + 1 :: 2]
        if inside.size > 2 and between.size and np.mean(inside == 0) > 0.98 and np.all(between > 0):
            return offset if np.all(inside == 0) else None
    return None


def _pair_step(stamps: Floats, offset: int) -> float:
    """Usual distance of the different stamps; one of many printed digits is no product of rounding."""
    return float(np.median(np.diff(stamps[offset::2])))


def _is_zigzag(columns: Sequence[Floats], offset: int) -> bool:
    """Whether values go up within pairs of equal stamps and down between them, in all columns.

    Stamps rounded to half the sample rate come in pairs too; their values have no such order.
    """
    for values in columns:
        count = (values.size - offset) // 2 * 2
        first, second = values[offset : offset + count : 2], values[offset + 1 : offset + count : 2]
        with np.errstate(invalid="ignore"):
            moving = (second[:-1] != first[:-1]) & np.isfinite(second[:-1] - first[:-1])
            zigzag = (second[:-1] > first[:-1]) & (first[1:] < second[:-1])
        if moving.any() and np.mean(zigzag[moving]) < 0.8:
            return False
    return True


def _chosen(axis: Axis, plan: Plan, interval: float | None, quantum: float, rows: int) -> Axis:
    """The axis with the interval that counts: the user's, else the stated one where the stamps agree, else theirs."""
    if interval is not None:
        off = abs(axis.interval / interval - 1)
        said = Remark(
            "interval-given",
            f"The interval is the {interval:g} s that was given; the {axis.origin} says {axis.interval:.6g} s.",
        )
        kept = tuple(step for step in axis.steps if isinstance(step, Keep | Pairs))
        return replace(
            axis,
            interval=interval,
            origin="--interval",
            steps=kept,
            remarks=axis.remarks + ((said,) if off > 1e-3 else ()),
        )
    if plan.interval is None:
        return axis
    off = abs(axis.interval / plan.interval - 1)
    if off <= 2 * quantum / (axis.interval * max(rows - 1, 1)) + 1e-5:
        return replace(
            axis, interval=plan.interval, origin=f"{plan.stated}, which the {axis.origin} confirms"
        )
    if off <= 1e-3:
        return replace(axis, origin=f"{axis.origin}, {plan.stated} agrees")
    says = f"The {axis.origin} gives {axis.interval:.6g} s between samples, {plan.stated} {plan.interval:.6g} s; the former is used."
    return replace(axis, remarks=(*axis.remarks, Remark("interval-differs", says)))


__all__ = ["FEWEST", "Axis", "Spacing", "make_axis"]
