"""Pictures: right where they can be checked by numbers; how they look was looked at."""

from __future__ import annotations

import dataclasses
import io
import math
import subprocess
import sys
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from show_examples import ALL, fault_settled, healthy, hostile, no_oscillation, probe_loads, waveform

from benchfit.capture.model import Capture, Channel
from benchfit.cycle.constants import CycleConstants, PhaseFit
from benchfit.errors import UsageError
from benchfit.show import curves
from benchfit.show.palette import DARK, LIGHT, scale, symbol
from benchfit.show.plot import KINDS, plot

TIMER = {"lower": 1.661, "upper": 3.352, "asymptotes": (5.01, 0.052), "taus": (0.0573, 0.0222)}
LAMP = {"lower": 60.4, "upper": 91.2, "asymptotes": (112.4, 56.0), "taus": (0.1169, 6e-4)}


@pytest.mark.parametrize("ending", ["png", "svg", "pdf", "PNG"])
def test_the_ending_decides_the_format(ending: str, tmp_path: Path) -> None:
    """Signatures of PNG (W3C PNG, 5.2), PDF (ISO 32000-1, 7.5.2), SVG by its root element."""
    capture, constants = waveform(**TIMER, samples=600)
    path = tmp_path / f"a picture.{ending}"
    plot(fault_settled(), constants, capture, path)
    head = path.read_bytes()[:600]
    assert {"png": b"\x89PNG\r\n\x1a\n", "pdf": b"%PDF-1.", "svg": b"<svg "}[ending.lower()] in head
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


@pytest.mark.parametrize("kind", ["capture", "cycle", "slopes"])
def test_a_million_samples_make_a_small_file(kind: str, tmp_path: Path) -> None:
    capture, constants = waveform(**LAMP, samples=1_000_000, output=(0.0, 5.0), jitter=0.01)
    for ending in ("png", "svg", "pdf") if kind in ("capture", "cycle") else ("svg",):
        path = tmp_path / f"{kind}.{ending}"
        plot(probe_loads(), constants, capture, path, kind=kind)  # type: ignore[arg-type]
        assert path.stat().st_size < 500_000


@pytest.mark.parametrize("name", ["no_oscillation", "no_sheet", "failed_fit", "hostile", "extreme"])
@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_answer_can_be_drawn(kind: str, name: str) -> None:
    """Also where the record holds no cycle, no target or no suspect: the picture then says so."""
    capture, constants = waveform(**TIMER, samples=400, cycles=3.2)
    figure = plot(ALL[name](), constants, capture, kind=kind)  # type: ignore[arg-type]
    assert figure.axes
    if name in ("hostile", "extreme"):
        figure.savefig(io.BytesIO(), format="svg")


def test_without_fit_the_samples_alone_are_drawn() -> None:
    capture, _ = waveform(**TIMER, samples=400)
    figure = plot(healthy(), None, capture)
    assert len(figure.axes) == 1
    assert len(figure.axes[0].lines) >= 1
    two = plot(healthy(), None, capture, axes=figure.subplots(2, 1))
    assert "no phase could be fitted" in [t.get_text() for t in two.axes[-1].texts]


def test_one_ramp_is_drawn_where_nothing_oscillates() -> None:
    t = 1e-3 * np.arange(500)
    values = 83.4 - 83.4 * np.exp(-t / 0.0931)
    capture = Capture("beacon dead.csv", 1e-3, 0.0, (Channel("CH1", "V", values, 0.0),))
    ramp = PhaseFit("capacitor", True, 0.0, float(values[-1]), 1 / 0.0931, 0.499)
    constants = CycleConstants(
        False, ("ramp_asymptote",), np.array([83.4]), np.eye(1), turns=np.array([0.0]), phases=(ramp,)
    )
    s_placed = curves.place(constants, curves.Trace("CH1", "capacitor", t, values))
    assert np.nanmax(np.abs(curves.fitted(s_placed, t) - values)) < 1e-9
    figure = plot(no_oscillation(), constants, capture)
    assert "charge, fitted" in [line.get_label() for line in figure.axes[0].lines]


@pytest.mark.parametrize("rotation", [0, 1])
@pytest.mark.parametrize("shape", [TIMER, LAMP], ids=["timer", "lamp"])
def test_the_drawn_phases_lie_on_the_samples(shape: dict[str, object], rotation: int) -> None:
    """The line over the capture is off by the noise alone, whichever phase is listed first, late or not."""
    capture, constants = waveform(**shape, samples=20000, noise=0.004, jitter=0.01)  # type: ignore[arg-type]
    fits = constants.phases
    constants = dataclasses.replace(constants, phases=fits[rotation:] + fits[:rotation])
    trace = curves.Trace("CH1", "capacitor", capture.time, capture.channels[0].values)
    rest = trace.volts - curves.fitted(curves.place(constants, trace), trace.time)
    inner = (capture.time > constants.turns[0]) & (capture.time < constants.turns[-1])
    assert np.isfinite(rest[inner]).all()
    assert np.median(np.abs(rest[inner])) < constants.noise["capacitor"]


def test_without_kept_phases_they_are_made_of_the_constants() -> None:
    capture, constants = waveform(**TIMER, samples=4000)
    trace = curves.Trace("CH1", "capacitor", capture.time, capture.channels[0].values)
    bare = dataclasses.replace(constants, phases=())
    rest = trace.volts - curves.fitted(curves.place(bare, trace), trace.time)
    assert np.nanmedian(np.abs(rest)) < constants.noise["capacitor"]


@pytest.mark.parametrize("shift", [0.0, 0.3, 0.77])
def test_a_folded_cycle_is_laid_on_the_circuits_curve(shift: float) -> None:
    """From whichever turn the record's cycles are counted, the samples come to lie on the curve."""
    x = np.linspace(0.0, 2.0, 400)
    y = np.where(x < 1.9, 1 - np.exp(-x), (1 - math.exp(-1.9)) * (2.0 - x) / 0.1)
    t = np.linspace(0.0, 1.999, 700)
    v = np.interp((t + 2.0 * shift) % 2.0, x, y)
    at = curves.aligned(t, v, 2.0, x, y)
    assert np.median(np.abs(np.interp(at, x, y) - v)) < 0.005


def test_slopes_are_the_differential_equations() -> None:
    """dv/dt = (A − v)/τ within its own error bars (95 % of points within U, here at least 80 % of 32)."""
    capture, constants = waveform(**TIMER, samples=40000)
    trace = curves.Trace("CH1", "capacitor", capture.time, capture.channels[0].values)
    placed = curves.place(constants, trace)
    inside = 0
    for rising, a, tau in ((True, 5.01, 0.0573), (False, 0.052, 0.0222)):
        v, slope, u = curves.slopes(placed, trace, rising)
        assert v.size == 16
        inside += int(np.sum(np.abs(slope - (a - v) / tau) < 2 * u))
    assert inside >= 26


def test_an_envelope_loses_no_extreme() -> None:
    rng = np.random.default_rng(3)
    t, v = np.arange(100_000.0), rng.standard_normal(100_000)
    v[77_777], v[100] = 40.0, -50.0
    v[5000:5003] = np.nan
    band = curves.envelope(t, v, 1000)
    assert band is not None
    middle, low, high = band
    assert (low.min(), high.max()) == (-50.0, 40.0)
    assert np.isfinite(low).all()
    assert abs(middle[np.argmax(high)] - 77_777) <= 50
    assert curves.envelope(t[:300], v[:300], 1000) is None


def test_axes_of_ones_own_are_drawn_into() -> None:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    capture, constants = waveform(**TIMER, samples=400, output=(0.1, 3.7))
    mine = Figure()
    FigureCanvasAgg(mine)
    grid = mine.subplots(2, 2)
    assert plot(fault_settled(), constants, capture, axes=grid[:, 0]) is mine
    assert plot(fault_settled(), constants, capture, axes=grid[0, 1], kind="budget") is mine
    assert plot(fault_settled(), None, None, axes=[grid[1, 1]], kind="suspects") is mine
    assert all(ax.has_data() for ax in grid.flat)


@pytest.mark.parametrize(
    ("wanted", "says"),
    [
        ({"path": "a.gif"}, r'ends in ".gif"; it can be written as .png, .svg or .pdf'),
        ({"path": "a"}, "it can be written as .png"),
        ({"path": "/no/such/folder/a.png"}, "cannot be written"),
        ({"kind": "pie"}, "there are capture, cycle, budget"),
        ({"axes": [1, 2]}, "axes must be matplotlib Axes"),
    ],
)
def test_what_cannot_be_drawn_is_said_in_one_sentence(wanted: dict[str, object], says: str) -> None:
    capture, constants = waveform(**TIMER, samples=200)
    with pytest.raises(UsageError) as caught:
        plot(fault_settled(), constants, capture, **wanted)  # type: ignore[arg-type]
    assert says in caught.value.says


def test_names_from_files_are_set_as_they_stand() -> None:
    """A dollar sign or a backslash in a name is text, not mathematics; control codes are not drawn."""
    capture, constants = waveform(**TIMER, samples=200)
    base = hostile()
    bad = dataclasses.replace(base, title="cost $5 \\frac{ $x^$ \x1b[0m")
    figure = plot(bad, constants, capture)
    figure.savefig(io.BytesIO(), format="svg")


def test_the_global_plotting_state_is_never_touched() -> None:
    """pyplot stays unloaded: figures are made and freed without the global registry."""
    code = (
        "import sys; sys.path[:0] = [sys.argv[1], sys.argv[2]]\n"
        "from show_examples import *\nfrom benchfit.show.plot import plot\n"
        "c, k = waveform(lower=1.6, upper=3.3, asymptotes=(5, 0), taus=(.05, .02), samples=200)\n"
        "plot(fault_settled(), k, c)\nassert 'matplotlib.pyplot' not in sys.modules\n"
    )
    here = Path(__file__).parent
    subprocess.run([sys.executable, "-c", code, str(here), str(here.parents[1])], check=True)


def luminance(colour: str) -> float:
    """Relative luminance of an sRGB colour (WCAG 2.2, definition of relative luminance)."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(a: str, b: str) -> float:
    """Contrast ratio of two colours (WCAG 2.2, definition of contrast ratio)."""
    high, low = sorted((luminance(a), luminance(b)), reverse=True)
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("colours", [LIGHT, DARK], ids=["light", "dark"])
def test_colours_survive_grey_and_text_can_be_read(colours: dict[str, str]) -> None:
    """What overlaps differs in lightness alone by 1.6 and more; text has the 4.5 of WCAG 2.2, 1.4.3."""
    for a, b in combinations(("data", "charge", "discharge"), 2):
        assert contrast(colours[a], colours[b]) >= 1.6, (a, b)
    assert contrast(colours["target"], colours["discharge"]) >= 1.3
    for role in ("ink", "soft", "charge", "discharge", "target"):
        assert contrast(colours[role], colours["paper"]) >= 4.5, role
    assert contrast(colours["data"], colours["paper"]) >= 1.9


@pytest.mark.parametrize(
    ("largest", "unit", "says"),
    [
        (0.0123, "s", "ms"),
        (999.9, "V", "V"),
        (1000.0, "Hz", "kHz"),
        (2e-9, "s", "ns"),
        (0.0, "V", "V"),
        (math.inf, "V", "V"),
    ],
)
def test_axes_have_a_prefix_that_fits(largest: float, unit: str, says: str) -> None:
    factor, name = scale(largest, unit)
    assert name == says
    if 0 < largest < math.inf:
        assert 1 <= largest * factor * (1 + 1e-9) < 1000 * (1 + 1e-9)


@pytest.mark.parametrize(
    ("name", "says"),
    [("R", "$R$"), ("RA", r"$R_\mathrm{A}$"), ("C1", r"$C_\mathrm{1}$"), ("V_strike", r"$V_\mathrm{strike}$"),
     ("R_leak_supply", r"$R_\mathrm{leak\,supply}$"), ("eta", r"$\eta$"), ("supply", "supply"),
     ("V_$x", r"V_\$x")],
)  # fmt: skip
def test_symbols_are_the_trades(name: str, says: str) -> None:
    assert symbol(name) == says
