"""The way through the house: a capture and a sheet in, what was found out. Commands and the burn-in use this face."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from benchfit.capture.model import Capture
from benchfit.cycle.constants import Assignment, CycleConstants
from benchfit.explain.result import CaptureFacts, Explanation, Quantity
from benchfit.sheet.model import Sheet

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.figure import Figure

    from benchfit.explain.expected import Expected
    from benchfit.explain.trim import Trimming as Trimming


@dataclass(frozen=True, eq=False)
class Found:
    """What was found: the explanation, and the capture and cycle constants that it rests on.

    ``print(found)`` is what the command line prints; :meth:`record` the result record; ``parts`` and ``suspects``
    tables for a notebook.
    """

    explanation: Explanation
    captures: tuple[Capture, ...]
    constants: tuple[CycleConstants, ...]

    def record(self, **more: Any) -> dict[str, Any]:
        """The result record (schema 1): plain types in base SI units."""
        from benchfit.show.record import record

        return record(self.explanation, **more)

    def text(self, width: int = 80, colour: bool = False) -> str:
        """The report for people."""
        from benchfit.show.text import render

        return render(self.explanation, width=width, colour=colour)

    def __str__(self) -> str:
        return self.text()

    @property
    def parts(self) -> pd.DataFrame:
        """One row a part, indexed by name: value, u, unit, nominal, low, high, deviation, within, known_from."""
        import pandas as pd

        rows = [
            {
                "name": p.name,
                "value": p.value,
                "u": p.u,
                "unit": p.unit,
                "nominal": p.nominal,
                "low": p.limits[0] if p.limits else None,
                "high": p.limits[1] if p.limits else None,
                "deviation": p.deviation,
                "within": p.within,
                "known_from": p.known_from,
            }
            for p in self.explanation.parts
        ]
        columns = [
            "name",
            "value",
            "u",
            "unit",
            "nominal",
            "low",
            "high",
            "deviation",
            "within",
            "known_from",
        ]
        return pd.DataFrame(rows, columns=columns).set_index("name")

    @property
    def suspects(self) -> pd.DataFrame:
        """One row a suspect, best first: causes (tuple), probability, change (dict), says."""
        import pandas as pd

        rows = [
            {"causes": s.causes, "probability": s.probability, "change": dict(s.change), "says": s.says}
            for s in self.explanation.suspects
        ]
        return pd.DataFrame(rows, columns=["causes", "probability", "change", "says"])

    def plot(self, path: str | None = None, axes: Any = None, kind: str = "capture") -> Figure:
        """Draw the capture with its fit (or another ``kind``); into a file by its ending, or into given axes."""
        from benchfit.show.plot import plot

        return plot(self.explanation, self.constants[0], self.captures[0], path=path, axes=axes, kind=kind)  # type: ignore[arg-type]


def assign(capture: Capture, sheet: Sheet | None, number: int = 1) -> tuple[Assignment, ...]:
    """What each channel was clipped to: from the sheet's [channels], else from names and waveforms.

    Raises
    ------
    CaptureError
        A channel that the sheet names is not in the capture.
    """
    from benchfit.assignment import assignments

    return assignments(capture, sheet, number)


def measure(capture: Capture, sheet: Sheet | None = None) -> Mapping[str, Quantity | None]:
    """The measured quantities alone (fast): the record's ``measured`` section by name."""
    from benchfit import cycle
    from benchfit.explain.measured import measured
    from benchfit.sheet.model import Scope

    constants = cycle.measure(capture, assign(capture, sheet))
    return measured(constants, sheet.scope if sheet is not None else Scope(), True)


def look(capture: Capture, sheet: Sheet | None = None) -> Explanation:
    """What one capture shows, measured and not yet explained (fast): for a live view, between explanations.

    Raises
    ------
    CaptureError
        A channel is missing or empty.
    """
    from benchfit import cycle
    from benchfit.explain.measured import measured
    from benchfit.sheet.model import Scope

    assigned = assign(capture, sheet)
    constants = cycle.measure(capture, assigned)
    return Explanation(
        captures=(facts_of(capture, assigned, constants),),
        oscillates=constants.oscillates,
        measured=measured(constants, sheet.scope if sheet is not None else Scope(), True),
        circuit=sheet.circuit.name if sheet is not None and sheet.circuit is not None else None,
        title=sheet.title if sheet is not None else "",
        warnings=(*capture.warnings, *constants.remarks),
    )


def warm_up() -> None:
    """Import what explaining needs, so that the first capture need not wait for it."""
    import lmfit  # noqa: F401

    import benchfit.cycle
    import benchfit.explain.explain  # noqa: F401


def trimming(sheet: Sheet, part: str, low: float, high: float) -> Trimming:
    """Help with turning a trimmer, ``part`` between ``low`` and ``high``, onto the sheet's target.

    Raises
    ------
    SheetError
        No circuit, no such part, no target, or the part moves nothing that has one.
    """
    from benchfit.explain.trim import trimming as trimming_of

    return trimming_of(sheet, part, low, high)


def explain(
    capture: Capture | None = None,
    sheet: Sheet | None = None,
    *,
    captures: Sequence[Capture] = (),
    as_found: Mapping[str, Any] | Found | None = None,
) -> Found:
    """Read the cycle out of one capture (or several of one build, jointly) and explain it.

    Parameters
    ----------
    capture, sheet
    captures : sequence of Capture
        In place of one capture: several of one build, explained jointly.
    as_found : Found or mapping
        What was found, or its record, before the build was changed: says what the change did.

    Raises
    ------
    CaptureError
        A channel is missing or empty.
    SheetError
        The sheet cannot be used.
    UsageError
        ``as_found`` is of another circuit.
    """
    from benchfit import cycle
    from benchfit.explain.explain import explain as explain_constants

    every = tuple(captures) if captures else (() if capture is None else (capture,))
    if not every:
        raise ValueError("explain needs a capture, or captures=[…]")
    assigned = [assign(c, sheet, number) for number, c in enumerate(every, 1)]
    constants = tuple(cycle.measure(c, a) for c, a in zip(every, assigned, strict=True))
    facts = [facts_of(c, a, k) for c, a, k in zip(every, assigned, constants, strict=True)]
    explanation = explain_constants(constants, sheet, facts)
    read = tuple(w for c in every for w in c.warnings)
    explanation = replace(explanation, warnings=(*read, *explanation.warnings))
    if as_found is not None:
        from benchfit.explain.as_found import compare

        before = as_found.record() if isinstance(as_found, Found) else as_found
        explanation = replace(explanation, as_found=compare(before, explanation, sheet))
    return Found(explanation, every, constants)


def predict(sheet: Sheet) -> dict[str, Any]:
    """What the build should do before power is applied: the prediction record (contract, section 5)."""
    from benchfit.explain.predict import predict as predict_build

    return predict_build(sheet)


def expected(sheet: Sheet, nodes: Sequence[str]) -> Expected:
    """What would be measured of a build with given parts, where ``nodes`` are probed.

    Raises
    ------
    SheetError
        Where the sheet names no circuit or misses a part.
    """
    from benchfit.explain.expected import expected as expected_of

    return expected_of(sheet, nodes)


def facts_of(capture: Capture, assigned: Sequence[Assignment], constants: CycleConstants) -> CaptureFacts:
    """What the record says of a capture."""
    import numpy as np

    nodes = {a.channel: a for a in assigned}
    channels = []
    for c in capture.channels:
        finite = c.values[np.isfinite(c.values)]
        scale = nodes[c.name].scale if c.name in nodes else 1.0
        channels.append(
            {
                "name": c.name,
                "node": nodes[c.name].node if c.name in nodes else None,
                "minimum": float(finite.min()) * scale if finite.size else None,
                "maximum": float(finite.max()) * scale if finite.size else None,
                "resolution": c.resolution * scale,
            }
        )
    return CaptureFacts(capture.path, capture.samples, capture.interval, tuple(channels), constants.cycles)
