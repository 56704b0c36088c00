"""The time axis: rounded, doubled, missing, damaged, irregular and stacked stamps; never an invented one."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit.capture import Capture, read
from benchfit.capture.spacing import even, settle
from benchfit.errors import CaptureError

Write = Callable[..., Path]


def refusal(says: str) -> CaptureError:
    return CaptureError(says)


def ramp(k: np.ndarray | int) -> np.ndarray:
    """A value by which every row can be told from its neighbours."""
    return np.round(1.0 + 0.01 * np.mod(7 * np.asarray(k), 97), 4)


def rows(
    stamps: Sequence[str | float], values: Sequence[float] | None = None, header: str = "Time (s),CH1 (V)\n"
) -> str:
    given = ramp(np.arange(len(stamps))) if values is None else values
    return header + "".join(f"{t},{v}\n" for t, v in zip(stamps, given, strict=True))


def codes(capture: Capture) -> set[str]:
    return {remark.code for remark in capture.warnings}


# -- rounded stamps ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("true", "form", "count"),
    [
        (1.6e-6, "{:.6f}", 3000),  # steps of 1 and 2 us for a true 1.6 us: the median is 25 % off
        (5.12e-6, "{:.6f}", 3000),  # steps of 5 and 6 us for a true 5.12 us
        (1e-7, "{:.6f}", 5000),  # ten rows share one stamp: the median is 0
        (3.2e-7, "{:.5e}", 5000),  # significant digits: coarser to the end
        (1e-4, "{:.4f}", 500),  # not rounded at all
    ],
)
def test_rounded_stamps_give_the_true_interval(true: float, form: str, count: int, write: Write) -> None:
    stamps = [form.format(-0.5e-3 + k * true) for k in range(count)]
    capture = read(write(rows(stamps)))
    assert capture.samples == count
    assert capture.interval == pytest.approx(true, rel=2e-3)
    np.testing.assert_array_equal(capture.channels[0].values, ramp(np.arange(count)))
    steps = np.diff(np.array(stamps, dtype=float))
    assert ("rounded-time" in codes(capture)) == (abs(np.median(steps) / true - 1) > 0.02)


@pytest.mark.parametrize("offset", [0.0, 5.0, 34.0])
def test_stamps_reckoned_in_single_precision(offset: float, write: Write) -> None:
    """At 34 s single precision has steps of 3.8 us: a tenth of a step of time and more."""
    stamps = (offset + 1e-5 * np.arange(2000)).astype(np.float32)
    capture = read(write(rows([f"{t:.9f}" for t in stamps])))
    assert capture.samples == 2000
    assert capture.interval == pytest.approx(1e-5, rel=1e-3)
    np.testing.assert_array_equal(capture.channels[0].values, ramp(np.arange(2000)))


def test_one_missing_row_is_seen_at_any_distance_from_the_trigger(write: Write) -> None:
    keep = [k for k in range(1000) if k != 500]
    capture = read(write(rows([f"{20 + k * 1e-6:.9f}" for k in keep], list(ramp(np.array(keep))))))
    assert capture.samples == 1000
    assert np.flatnonzero(np.isnan(capture.channels[0].values)).tolist() == [500]


@pytest.mark.parametrize("line", ["Frequency: 450 Hz", "Period: 2.22ms", "Resolution: 8 bits", "Time Base: 500us", "Step,4"])
def test_settings_of_the_signal_are_no_interval(line: str, write: Write) -> None:
    with pytest.raises(CaptureError, match="--interval"):
        read(write(f"Model: B4\n{line}\nSource: CH1\n" + "".join(f"{ramp(k)}\n" for k in range(200))))


def test_a_ramp_beside_a_stated_interval_is_a_channel(write: Write) -> None:
    text = "Model: B4\nSampling rate: 10 kHz\n\n" + "".join(f"{0.5 + 0.01 * k:.4f},{ramp(k)}\n" for k in range(200))
    capture = read(write(text))
    assert capture.interval == pytest.approx(1e-4)
    assert len(capture.channels) == 2


def test_two_rows_on_one_rounded_stamp_are_two_samples(write: Write) -> None:
    """Pairs by rounding alone are no envelope: their values have no order."""
    capture = read(write(rows([f"{k * 0.5e-6 + 1e-9:.6f}" for k in range(1000)])))
    assert capture.samples == 1000
    assert capture.interval == pytest.approx(0.5e-6, rel=2e-3)
    assert "envelope" not in codes(capture)


def test_the_stated_interval_wins_where_the_stamps_agree(write: Write) -> None:
    head = "Record Length,3000\nSample Interval,1.6e-06\nHorizontal Units,s\nTIME,CH1\n"
    capture = read(write(rows([f"{k * 1.6e-6:.6f}" for k in range(3000)], header=head)))
    assert capture.interval == 1.6e-6
    assert "Sample Interval" in capture.notes["interval"]
    assert "interval-differs" not in codes(capture)


def test_the_stamps_win_where_the_stated_interval_differs_and_it_is_said(write: Write) -> None:
    head = "Record Length,300\nSample Interval,5e-07\nHorizontal Units,s\nTIME,CH1\n"
    capture = read(write(rows([f"{k * 1e-6:.7f}" for k in range(300)], header=head)))
    assert capture.interval == pytest.approx(1e-6)
    assert "interval-differs" in codes(capture)


def test_the_users_interval_wins_over_everything(write: Write) -> None:
    path = write(rows([f"{k * 1e-6:.7f}" for k in range(300)]))
    capture = read(path, interval=2.5e-6)
    assert capture.interval == 2.5e-6
    assert "interval-given" in codes(capture)
    assert capture.notes["interval"].endswith("--interval")


@pytest.mark.parametrize("bad", [0.0, -1e-6, float("nan"), float("inf")])
def test_no_interval_that_is_no_time(bad: float, write: Write) -> None:
    with pytest.raises(CaptureError, match="positive"):
        read(write(rows([f"{k * 1e-6:.7f}" for k in range(300)])), interval=bad)


# -- envelopes -----------------------------------------------------------------------------------------------


def test_an_envelope_gives_mid_points_extremes_and_the_converters_step(write: Write) -> None:
    rng = np.random.default_rng(4)
    low = np.round(2 + np.sin(np.arange(300) / 20), 1)
    high = low + 0.2 * rng.integers(1, 4, 300)
    stamps = [f"{-1e-3 + (k // 2) * 1e-6:.6e}" for k in range(600)]
    capture = read(write(rows(stamps, np.round(np.column_stack([low, high]).ravel(), 1))))
    assert capture.samples == 300
    assert capture.interval == pytest.approx(1e-6)
    channel = capture.channels[0]
    np.testing.assert_allclose(channel.values, (low + high) / 2)
    assert (channel.minimum, channel.maximum) == pytest.approx((low.min(), high.max()))
    assert channel.resolution == pytest.approx(0.1)
    assert "envelope" in codes(capture)


@pytest.mark.parametrize("dropped", ["first", "last"])
def test_half_a_pair_at_an_end_is_left_out(dropped: str, write: Write) -> None:
    stamps = [f"{(k // 2) * 1e-6:.6e}" for k in range(200)]
    values = [1.0 + (k % 2) for k in range(200)]
    part = slice(1, None) if dropped == "first" else slice(None, -1)
    capture = read(write(rows(stamps[part], values[part])))
    assert capture.samples == 99
    np.testing.assert_array_equal(capture.channels[0].values, 1.5)


# -- frames --------------------------------------------------------------------------------------------------


def frames(lengths: Sequence[int], between: str = "") -> str:
    parts = []
    for number, length in enumerate(lengths):
        parts.append("".join(f"{k * 1e-3:.6f},{number + ramp(k):.4f}\n" for k in range(length)))
    return "Time (s),CH1 (V)\n" + between.join(parts)


@pytest.mark.parametrize("frame", [1, 2, 5])
def test_frames_are_read_one_by_one(frame: int, write: Write) -> None:
    lengths = [63, 130, 130, 130, 130]
    capture = read(write(frames(lengths)), frame=frame)
    count = lengths[frame - 1]
    np.testing.assert_allclose(capture.channels[0].values, frame - 1 + ramp(np.arange(count)))
    assert capture.interval == pytest.approx(1e-3)
    assert "frames" in codes(capture)


def test_the_first_frame_is_the_default(write: Write) -> None:
    path = write(frames([63, 130, 130]))
    np.testing.assert_array_equal(read(path).channels[0].values, read(path, frame=1).channels[0].values)


def test_a_frame_that_is_not_there(write: Write) -> None:
    with pytest.raises(CaptureError, match="3 frames, there is no frame 4"):
        read(write(frames([63, 130, 130])), frame=4)
    with pytest.raises(CaptureError, match="no frame 2"):
        read(write(rows([f"{k * 1e-6:.7f}" for k in range(300)])), frame=2)


@pytest.mark.parametrize(
    "between", ["Step Information: R=10k (Run: 2/3)\n", "Time (s),CH1 (V)\n", "\n\nrun\n"]
)
def test_runs_parted_by_text_are_refused_and_offered_one_by_one(between: str, write: Write) -> None:
    path = write(frames([100, 100, 100], between))
    with pytest.raises(CaptureError, match=r"3 runs.*--frame 1"):
        read(path)
    np.testing.assert_allclose(read(path, frame=2).channels[0].values, 1 + ramp(np.arange(100)))


def test_segments_far_apart_are_frames(write: Write) -> None:
    stamps = [f"{segment * 100.0 + k * 1e-3:.6f}" for segment in range(3) for k in range(200)]
    capture = read(write(rows(stamps)), frame=2)
    assert capture.samples == 200
    assert capture.start == pytest.approx(100.0)
    assert "frames" in codes(capture)


# -- gaps and damage -----------------------------------------------------------------------------------------


def test_missing_rows_leave_samples_without_a_value(write: Write) -> None:
    keep = [k for k in range(500) if not 100 <= k < 120 and k != 300]
    capture = read(write(rows([f"{k * 1e-5:.6f}" for k in keep], list(ramp(np.array(keep))))))
    assert capture.samples == 500
    assert capture.interval == pytest.approx(1e-5)
    values = capture.channels[0].values
    assert np.isnan(values).sum() == 21
    np.testing.assert_array_equal(values[keep], ramp(np.array(keep)))
    assert {"gaps", "empty-cells"} <= codes(capture)


@given(
    st.lists(st.integers(2, 197), min_size=1, max_size=3, unique=True), st.sampled_from([1e6, -50.0, 0.77])
)
def test_a_few_spoilt_stamps_are_put_in_line(places: list[int], wrong: float) -> None:
    stamps = np.arange(200) * 1e-3
    if np.any(np.diff(sorted(places)) < 3):
        return
    stamps[places] = wrong
    spacing = settle(stamps, 1e-9, refusal)
    assert spacing.interval == pytest.approx(1e-3)
    assert spacing.start == 0.0
    assert spacing.steps == ()
    assert [remark.code for remark in spacing.remarks] == ["damaged"]


@pytest.mark.parametrize("wrong", ["-9.00000", "900.00000", "0.00777"])
def test_a_spoilt_stamp_begins_no_frame(wrong: str, write: Write) -> None:
    stamps = [f"{k * 1e-3:.5f}" for k in range(300)]
    stamps[150] = wrong
    capture = read(write(rows(stamps)))
    assert capture.samples == 300
    assert capture.interval == pytest.approx(1e-3)
    np.testing.assert_array_equal(capture.channels[0].values, ramp(np.arange(300)))
    assert codes(capture) == {"damaged"}


@given(
    st.integers(20, 400), st.floats(-1e3, 1e3), st.integers(-9, 0), st.integers(0, 6),
)  # fmt: skip
def test_even_stamps_rounded_to_any_digit_give_their_interval(
    count: int, start: float, power: int, digits: int
) -> None:
    """(last - first)/(n - 1) is off by at most one printed digit over n - 1."""
    interval = 1.7 * 10.0**power
    quantum = interval * 10.0 ** (1 - digits)
    stamps = np.round((start * interval + interval * np.arange(count)) / quantum) * quantum
    spacing = even(stamps, quantum)
    if spacing is None:
        assert stamps[-1] <= stamps[0]
        return
    assert spacing.interval == pytest.approx(interval, abs=1.01 * quantum / (count - 1), rel=1e-6)


def test_jitter_of_a_logger_is_straightened(write: Write) -> None:
    rng = np.random.default_rng(8)
    true = np.arange(800) * 1e-3
    stamps = true + 0.3e-3 * rng.uniform(-1, 1, 800)
    stamps[[0, -1]] = true[[0, -1]]
    path = write(rows([f"{t:.9f}" for t in stamps], list(np.sin(2 * np.pi * stamps / 0.1))))
    capture = read(path)
    assert "uneven-time" in codes(capture)
    assert capture.samples == 800
    np.testing.assert_allclose(capture.channels[0].values, np.sin(2 * np.pi * capture.time / 0.1), atol=1e-3)


def test_steps_that_a_simulator_chose_are_brought_onto_an_even_axis(write: Write) -> None:
    stamps = np.cumsum(
        np.concatenate([np.full(200, 1e-6), np.full(100, 2e-5), np.full(200, 1e-6), np.full(100, 3e-5)])
    )
    capture = read(
        write(
            rows([f"{t:.12e}" for t in stamps], list(1 - np.exp(-stamps / 1e-3)), "time\tV(c)\n").replace(
                ",", "\t"
            )
        )
    )
    np.testing.assert_allclose(capture.channels[0].values, 1 - np.exp(-capture.time / 1e-3), atol=2e-4)
    assert "uneven-time" in codes(capture)


def test_a_log_of_changes_is_held_between_its_rows(write: Write) -> None:
    high, low = 3.1e-3, 1.7e-3
    stamps, state = [34.0], [0]
    for _ in range(60):
        stamps.append(stamps[-1] + (high if state[-1] else low))
        state.append(1 - state[-1])
    text = "Time [s],Channel 0,Channel 1\n" + "".join(
        f"{t:.9f},{s},0\n" for t, s in zip(stamps, state, strict=True)
    )
    capture = read(write(text))
    assert "changes" in codes(capture)
    assert capture.start == pytest.approx(34.0)
    values = capture["Channel 0"].values
    assert set(np.unique(values)) == {0.0, 1.0}
    assert values.mean() == pytest.approx(high / (high + low), abs=0.01)
    rises = np.flatnonzero(np.diff(values) > 0)
    assert np.diff(rises) * capture.interval == pytest.approx(high + low, abs=1.01 * capture.interval)


def test_increments_that_are_not_named_so_are_not_guessed(write: Write) -> None:
    steps = [244, 160, 152, 164, 156] * 40
    path = write("# t(microsec), uc\n" + "".join(f"{s},{1000 - k}\n" for k, s in enumerate(steps)))
    with pytest.raises(CaptureError, match="--columns increment=0"):
        read(path)
    capture = read(path, columns={"increment": 0, "uc": 1})
    assert capture.time[-1] == pytest.approx(sum(steps) * 1e-6, rel=1e-2)
    # Told the interval, the reader needs neither.
    capture = read(path, interval=175.2e-6)
    assert capture.samples == len(steps)
    assert [channel.name for channel in capture.channels] == ["uc"]
    assert "interval-given" in codes(capture)


# -- no time at all ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "text",
    [
        "".join(
            f"{4.47 + 0.001 * (k % 5):.4f};{2 + 0.001 * k + 0.0003 * (k % 3):.4f}\n" for k in range(200)
        ),  # a slow ramp
        "Parameter,Value\n"
        + "".join(f"{20 * k},{ramp(k)}\n" for k in range(200)),  # whole numbers without a unit
        "Time,Value\n" + "".join(f"{k},{ramp(k)}\n" for k in range(200)),  # a row number called time
        "".join(f"{k},{ramp(k)}\n" for k in range(1, 200)),  # a row number
        "Sample,CH1(V)\n" + "".join(f"{k},{ramp(k)}\n" for k in range(200)),
        "".join(f"{ramp(k)}\n" for k in range(200)),
        "CH1 (V)\n" + "".join(f"{ramp(k)}\n" for k in range(200)),
        "clock,CH1 (V)\n" + "".join(f"14:07:{k % 60:02d},{ramp(k)}\n" for k in range(200)),
    ],
    ids=[
        "ramp",
        "whole numbers",
        "row number called time",
        "row number",
        "samples",
        "one column",
        "one named column",
        "clock",
    ],
)
def test_time_is_asked_for_and_never_invented(text: str, write: Write) -> None:
    path = write(text)
    with pytest.raises(CaptureError, match="--interval"):
        read(path)
    capture = read(path, interval=1e-3)
    assert capture.interval == 1e-3
    assert capture.samples in (199, 200)
    np.testing.assert_allclose(capture.channels[-1].values.size, capture.samples)
