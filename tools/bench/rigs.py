"""The circuits that the bench can build, by name."""

from __future__ import annotations

from tools.bench.engine import Rig
from tools.bench.opamp import OP_AMP

RIGS: dict[str, Rig] = {rig.name: rig for rig in (OP_AMP,)}
