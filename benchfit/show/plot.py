"""Pictures of an explanation, fit to be put into a report as they are."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from benchfit.errors import UsageError

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from benchfit.capture.model import Capture
    from benchfit.cycle.constants import CycleConstants
    from benchfit.explain.result import Explanation

Kind = Literal["capture", "cycle", "budget", "duty-budget", "suspects", "slopes", "periods"]

KINDS: tuple[Kind, ...] = ("capture", "cycle", "budget", "duty-budget", "suspects", "slopes", "periods")
FORMATS = (".png", ".svg", ".pdf")


def plot(
    explanation: Explanation,
    constants: CycleConstants | None,
    capture: Capture | None,
    path: str | os.PathLike[str] | None = None,
    axes: Any = None,
    kind: Kind = "capture",
    *,
    heading: bool = True,
) -> Figure:
    """Draw one picture, write it to ``path`` (PNG, SVG or PDF by its ending) if given, and return the figure.

    Parameters
    ----------
    explanation : Explanation
    constants, capture : of the first capture
        None where only what was concluded is drawn ("budget", "duty-budget", "suspects").
    path : path-like, optional
    axes : Axes or sequence of Axes, optional
        Where to draw in a figure of the caller's: "capture" takes one (the record), two (and the residuals
        below) or three (the other channels between them), "slopes" two, the others one.
    kind : str
        "capture": the record with its fitted phases, levels and residuals; "cycle": one folded cycle;
        "budget", "duty-budget": the miss as a staircase from target to built; "suspects"; "slopes": dv/dt
        against v; "periods": single periods against their number.
    heading : bool
        Whether a figure of its own gets a title line.

    Raises
    ------
    UsageError
        Where the ending is none of the three, or the kind is none of the above.
    """
    if kind not in KINDS:
        raise UsageError(f'no picture is called "{kind}"; there are {", ".join(KINDS)}', kind=kind)
    ending = _ending(path) if path is not None else ""
    import matplotlib as mpl

    from benchfit.show.palette import settings

    with mpl.rc_context(settings()):
        if axes is not None:
            given = _listed(axes)
            _draw(given, explanation, constants, capture, kind)
            figure: Figure = given[0].figure
        else:
            figure = _own(explanation, constants, capture, kind, heading)
        if path is not None:
            save(figure, path, ending)
    return figure


def save(figure: Figure, path: str | os.PathLike[str], ending: str = "") -> None:
    """Write a figure; the file appears whole or not at all."""
    target = Path(path)
    ending = ending or _ending(path)
    partial = target.with_name(f"{target.name}.part")
    metadata: dict[str, Any] = {"Date": None} if ending == ".svg" else {}
    if ending == ".pdf":
        metadata = {"CreationDate": None}
    try:
        figure.savefig(partial, format=ending[1:], metadata=metadata)
        partial.replace(target)
    except OSError as error:
        partial.unlink(missing_ok=True)
        raise UsageError(
            f"the picture {target} cannot be written: {error.strerror or error}", path=str(target)
        ) from error


def _ending(path: str | os.PathLike[str]) -> str:
    ending = Path(path).suffix.lower()
    if ending not in FORMATS:
        raise UsageError(
            f'the picture "{os.fspath(path)}" ends in "{ending}"; it can be written as .png, .svg or .pdf',
            path=str(path),
        )
    return ending


def _listed(axes: Any) -> Sequence[Any]:
    if hasattr(axes, "plot"):
        return [axes]
    flat = list(getattr(axes, "flat", axes))
    if not flat or not all(hasattr(ax, "plot") for ax in flat):
        raise UsageError("axes must be matplotlib Axes, or a sequence of them")
    return flat


def _draw(
    axes: Sequence[Any],
    explanation: Explanation,
    constants: CycleConstants | None,
    capture: Capture | None,
    kind: Kind,
) -> None:
    from benchfit.show import charts, waveforms

    if kind == "suspects":
        charts.draw_suspects(axes, explanation)
    elif kind in ("budget", "duty-budget"):
        charts.draw_budget(axes, explanation, "duty" if kind == "duty-budget" else "frequency")
    elif capture is None:
        raise UsageError(f'the picture "{kind}" needs the capture', kind=kind)
    else:
        s = waveforms.scene(explanation, constants, capture)
        draw = {
            "capture": waveforms.draw_capture,
            "cycle": waveforms.draw_cycle,
            "slopes": waveforms.draw_slopes,
            "periods": waveforms.draw_periods,
        }[kind]
        draw(axes, s)


def _own(
    explanation: Explanation,
    constants: CycleConstants | None,
    capture: Capture | None,
    kind: Kind,
    heading: bool,
) -> Figure:
    """A figure made for the picture, with a title line."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    from benchfit.show import waveforms

    figure = Figure(figsize=(8.0, _rows(explanation, kind)), layout="constrained")
    FigureCanvasAgg(figure)
    axes: Any
    says = TITLES[kind]
    if kind == "capture" and capture is not None:
        scene = waveforms.scene(explanation, constants, capture)
        heights = waveforms.panels(scene)
        says = says if scene.phases else "capture"
        axes = figure.subplots(len(heights), 1, sharex=True, height_ratios=heights)
    else:
        axes = figure.subplots(1, 2 if kind == "slopes" else 1)
    _draw(_listed(axes), explanation, constants, capture, kind)
    if heading:
        from benchfit.show.layout import shortened
        from benchfit.show.palette import LIGHT, plain

        title = shortened(explanation.title or Path(explanation.captures[0].path).name or "capture", 64)
        style = {"ha": "left", "fontsize": 11, "fontweight": "bold", "color": LIGHT["ink"]}
        figure.suptitle(plain(f"{title}: {says}"), x=0.012, **style)
    return figure


TITLES: dict[Kind, str] = {
    "capture": "capture, fitted phases and residuals",
    "cycle": "one cycle, as built and as on paper",
    "budget": "miss budget of the frequency",
    "duty-budget": "miss budget of the duty cycle",
    "suspects": "suspects",
    "slopes": "slope against voltage",
    "periods": "single periods",
}


def _rows(explanation: Explanation, kind: Kind) -> float:
    """Height of a picture (inches)."""
    from benchfit.show import words

    if kind == "capture":
        return 5.6
    if kind in ("budget", "duty-budget"):
        name = "duty" if kind == "duty-budget" else "frequency"
        return 1.5 + 0.3 * (len(words.budget_rows((explanation.miss or {}).get(name))) + 2)
    if kind == "suspects":
        return 1.3 + 0.62 * max(1, min(6, sum(s.probability >= 0.01 for s in explanation.suspects[:6])))
    return 3.8
