"""Why a relaxation oscillator misses its target, from a scope capture.

The library's face: what the command line does, a notebook can do with these names. Each is imported when it
is first asked for, so that ``import benchfit`` costs next to nothing.
"""

from __future__ import annotations

import importlib
import sys
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from benchfit import circuits
    from benchfit.capture import Capture, Channel, read
    from benchfit.errors import (
        BenchfitError,
        CaptureError,
        InstrumentError,
        LogError,
        QuantityError,
        SheetError,
        UsageError,
    )
    from benchfit.lot import explain_lot
    from benchfit.pipeline import explain, predict
    from benchfit.sheet import Sheet
    from benchfit.show.lot import lot_of

    __version__: str

__all__ = [
    "BenchfitError",
    "Capture",
    "CaptureError",
    "Channel",
    "InstrumentError",
    "LogError",
    "QuantityError",
    "Sheet",
    "SheetError",
    "UsageError",
    "__version__",
    "circuits",
    "explain",
    "explain_lot",
    "lot_of",
    "predict",
    "read",
]

_HOME = {
    "Capture": "benchfit.capture",
    "Channel": "benchfit.capture",
    "read": "benchfit.capture",
    "Sheet": "benchfit.sheet",
    "explain_lot": "benchfit.lot",
    "lot_of": "benchfit.show.lot",
    "predict": "benchfit.pipeline",
    **{name: "benchfit.errors" for name in __all__ if name.endswith("Error")},
}


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        return version("benchfit")
    if name in ("circuits", "explain"):
        return importlib.import_module(f"benchfit.{name}")
    if name in _HOME:
        return getattr(importlib.import_module(_HOME[name]), name)
    raise AttributeError(f"module 'benchfit' has no attribute {name!r}")


def __dir__() -> list[str]:
    return __all__


class _Explain(ModuleType):
    """The room ``benchfit.explain``, which is called as the function of that name."""

    def __call__(self, *args: Any, **options: Any) -> Any:
        """See :func:`benchfit.pipeline.explain`."""
        from benchfit.pipeline import explain

        return explain(*args, **options)


class _Face(ModuleType):
    """Importing a room binds it here by its name; ``benchfit.explain`` must remain what one calls."""

    def __setattr__(self, name: str, value: Any) -> None:
        if name == "explain" and type(value) is ModuleType:
            value.__class__ = _Explain
        super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Face
