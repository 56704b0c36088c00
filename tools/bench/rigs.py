"""The circuits that the bench can build, by name."""

from __future__ import annotations

from tools.bench.crossed import GATE_PAIR, TWO_TRANSISTOR
from tools.bench.engine import Rig
from tools.bench.firing import CURRENT_RAMP, GAS_LAMP, PROGRAMMABLE, TRIGGER_DIODE, UNIJUNCTION
from tools.bench.levels import SCHMITT, TIMER_555
from tools.bench.opamp import OP_AMP
from tools.bench.triangle import TRIANGLE

RIGS: dict[str, Rig] = {
    rig.name: rig
    for rig in (
        OP_AMP,
        GAS_LAMP,
        UNIJUNCTION,
        SCHMITT,
        TIMER_555,
        PROGRAMMABLE,
        TRIGGER_DIODE,
        TWO_TRANSISTOR,
        GATE_PAIR,
        TRIANGLE,
        CURRENT_RAMP,
    )
}
