"""Generated files: every family in every delimiter, decimal mark, line end and encoding, read back as written."""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchfit.capture import read
from tools.csv_families import FAMILIES, NUMBER_FORMS, Style, Wave, is_possible, make, relaxation, styles


def _check(family: str, wave: Wave, style: Style, folder: Path) -> None:
    made = make(family, wave, style)
    path = folder / "made.csv"
    path.write_bytes(made.data)
    capture = read(path, interval=made.interval if made.ask else None)
    assert tuple(channel.name for channel in capture.channels) == made.names
    assert tuple(channel.unit for channel in capture.channels) == made.units
    assert capture.samples == wave.samples
    assert capture.interval == pytest.approx(made.interval, rel=1e-4)
    assert capture.start == pytest.approx(made.start, abs=1e-2 * made.interval)
    for channel, values in zip(capture.channels, made.values, strict=True):
        np.testing.assert_array_equal(channel.values, values)


@st.composite
def waves(draw: st.DrawFn) -> Wave:
    """A waveform of any length, place in time and scale."""
    wave = relaxation(draw(st.integers(20, 90)), draw(st.integers(1, 3)), draw(st.integers(0, 10_000)))
    # Ten digits behind the point are the fewest that a style prints, and a long record's stamps need them all.
    interval = draw(st.sampled_from([2e-9, 1e-6, 1.6e-6, 5.12e-6, 1e-4, 0.04, 1.0]))
    start = interval * draw(st.sampled_from([0, -10, -1000, 3.5, 500]))
    return Wave(start, interval, wave.channels)


@pytest.mark.parametrize("family", FAMILIES)
@settings(max_examples=12)
@given(data=st.data())
def test_read_back_what_was_written(family: str, data: st.DataObject) -> None:
    style = data.draw(st.sampled_from([style for style in styles() if is_possible(family, style)]))
    wave = data.draw(waves())
    # Fixed decimals cannot hold nanoseconds.
    form = data.draw(
        st.sampled_from([form for form in NUMBER_FORMS if form != "fixed" or wave.interval >= 1e-6])
    )
    last = data.draw(st.booleans())
    style = Style(style.delimiter, style.decimal, style.line_end, style.encoding, form, last)
    with tempfile.TemporaryDirectory() as folder:
        _check(family, wave, style, Path(folder))


@pytest.mark.long
@pytest.mark.parametrize("family", FAMILIES)
def test_every_combination(family: str, tmp_path: Path) -> None:
    for k, style in enumerate(styles()):
        if is_possible(family, style):
            for form in NUMBER_FORMS:
                wave = relaxation(60 + k % 2, 1 + k % 3, k)
                _check(
                    family,
                    wave,
                    Style(style.delimiter, style.decimal, style.line_end, style.encoding, form),
                    tmp_path,
                )


def test_combinations_that_cannot_exist_are_few() -> None:
    """Comma for both marks; blanks where cells are empty or hold blanks themselves."""
    possible = [(family, style) for family in FAMILIES for style in styles() if is_possible(family, style)]
    assert len(possible) == 1500
