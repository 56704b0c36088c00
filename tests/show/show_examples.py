"""Invented builds, one for every kind of report, as the explain stage would hand them on.

The numbers are made up, consistently enough to be drawn; nothing here checks physics.
"""

from __future__ import annotations

import dataclasses
import math

import numpy as np

from benchfit.capture.model import Capture, Channel
from benchfit.cycle.constants import CycleConstants, PhaseFit
from benchfit.errors import Remark
from benchfit.explain.result import (
    AsFound,
    Candidate,
    CaptureFacts,
    Changed,
    Explanation,
    Miss,
    NextReading,
    PartFound,
    Quantity,
    Remedy,
    RuledOut,
    Share,
    Suspect,
)

CAUTIONS = (
    "up to 128 V on the timing node: discharge the capacitor before touching, work with one hand, "
    "use a probe rated for the voltage; never clip an earthed probe to a mains-derived circuit without "
    "isolation. Follow the local codes, and leave mains-connected work to a qualified person."
)


def q(value: float, relative: float, unit: str) -> Quantity:
    """A value with a relative u, a third of it from the record's noise."""
    return Quantity(value, abs(value) * relative, unit, abs(value) * relative / 3)


def part(
    name: str,
    unit: str,
    nominal: float | None,
    value: float,
    u: float,
    known_from: str = "capture",
    tol: float = 0.05,
) -> PartFound:
    """A part with symmetric limits, its deviation and whether it is inside them."""
    limits = None if nominal is None else (nominal * (1 - tol), nominal * (1 + tol))
    deviation = value / nominal - 1 if nominal else None
    within = None if limits is None else limits[0] <= value <= limits[1]
    return PartFound(name, value, u, unit, nominal, limits, deviation, within, known_from)


def miss(
    target: float,
    built: float,
    on_paper: float,
    shares: list[tuple[str, float, float]],
    limit: float | None = None,
) -> Miss:
    """A budget whose unexplained part makes it add up."""
    total = built / target - 1
    rest = total - on_paper - math.fsum(s for _, s, _ in shares)
    limits = None if limit is None else (-limit, limit)
    return Miss(target, built, total, on_paper, tuple(Share(*s) for s in shares), rest, limits)


def facts(
    path: str, samples: int = 5000, interval: float = 1e-4, cycles: float | None = 11.4, **channels: str
) -> CaptureFacts:
    """Facts of a capture; keywords are channel = node."""
    listed = tuple(
        {"name": name, "node": node, "minimum": 0.4, "maximum": 9.1, "resolution": 0.04}
        for name, node in (channels or {"CH1": "capacitor"}).items()
    )
    return CaptureFacts(path, samples, interval, listed, cycles)


def rc_measured(
    frequency: float,
    duty: float,
    upper: float,
    lower: float,
    asymptotes: tuple[float, float],
    taus: tuple[float, float],
) -> dict[str, Quantity | None]:
    """A full set of measured quantities for a two-phase circuit."""
    period = 1 / frequency
    return {
        "frequency": q(frequency, 3e-4, "Hz"),
        "period": q(period, 3e-4, "s"),
        "duty": Quantity(duty, 0.0012, "", 0.0004),
        "jitter": q(period * 4e-4, 0.2, "s"),
        "charge_time": q(period * duty, 8e-4, "s"),
        "discharge_time": q(period * (1 - duty), 2e-3, "s"),
        "upper": q(upper, 0.012, "V"),
        "lower": q(lower, 0.012, "V"),
        "charge_asymptote": q(asymptotes[0], 0.02, "V"),
        "charge_time_constant": q(taus[0], 0.011, "s"),
        "discharge_asymptote": q(asymptotes[1], 0.02, "V"),
        "discharge_time_constant": q(taus[1], 0.013, "s"),
        "high": None,
        "low": None,
        "rise_time": None,
        "fall_time": None,
    }


def healthy() -> Explanation:
    """A Schmitt inverter that does what it should."""
    return Explanation(
        captures=(facts("seed-tray-mister-04.csv", CH1="capacitor", CH2="output"),),
        oscillates=True,
        measured={
            **rc_measured(47.62, 0.4873, 2.904, 1.877, (4.93, 0.06), (0.02146, 0.02139)),
            "high": q(4.94, 0.01, "V"),
            "low": Quantity(0.061, 0.03, "V", 0.002),
        },
        circuit="schmitt-inverter",
        title="Seed tray mister",
        parts=(
            part("R", "Ω", 100e3, 100.9e3, 1.1e3, "build sheet", 0.02),
            part("C", "F", 220e-9, 214e-9, 3.1e-9, "capture"),
            part("V_upper", "V", 2.9, 2.904, 0.032, "capture", 0.1),
            part("V_lower", "V", 1.9, 1.877, 0.021, "capture", 0.1),
            part("V_high", "V", 4.95, 4.94, 0.05, "capture", 0.02),
        ),
        unseparated=(("R", "C"),),
        miss={
            "frequency": miss(
                48.0,
                47.62,
                -0.004,
                [
                    ("R", -0.009, 0.011),
                    ("C", 0.027, 0.014),
                    ("V_upper", -0.0031, 0.004),
                    ("V_lower", -0.0190, 0.005),
                    ("V_high", 0.0002, 0.003),
                ],
                0.05,
            ),
            "duty": miss(
                0.49, 0.4873, 0.0012, [("V_upper", -0.003, 0.002), ("V_lower", -0.0036, 0.002)], 0.05
            ),
        },
        suspects=(
            Suspect((), {}, 0.93, "every part lies inside its tolerance"),
            Suspect(("V_lower",), {"V_lower": -0.014}, 0.04, "the lower threshold is 1.4 % low"),
            Suspect(("C",), {"C": -0.028}, 0.03, "C is 2.8 % low, or R"),
        ),
        settled=True,
        ruled_out=(
            RuledOut("R_leak", "the charge heads for 4.93 V, as high as the output's top, 4.94 V"),
            RuledOut("delay", "the output switches within 2 µs of the crossing"),
        ),
        verdict="pass",
    )


def fault_settled() -> Explanation:
    """A timer whose two resistors were exchanged."""
    return Explanation(
        captures=(facts("greenhouse fan 0017.csv", CH1="capacitor", CH2="output"),),
        oscillates=True,
        measured={
            **rc_measured(17.92, 0.7118, 3.352, 1.661, (5.01, 0.052), (0.0573, 0.0222)),
            "high": q(3.71, 0.01, "V"),
            "low": Quantity(0.12, 0.03, "V", 0.002),
            "rise_time": None,
            "fall_time": None,
        },
        circuit="timer-555",
        title="Greenhouse fan chopper",
        parts=(
            part("supply", "V", 5.0, 5.01, 0.05, "build sheet", 0.02),
            part("RA", "Ω", 22e3, 32.8e3, 260.0),
            part("RB", "Ω", 33e3, 22.3e3, 180.0),
            part("C", "F", 1e-6, 1.004e-6, 8e-9, "capture", 0.1),
            part("k_upper", "", 2 / 3, 0.669, 0.004),
            part("k_lower", "", 1 / 3, 0.3315, 0.003, "capture", 0.08),
        ),
        miss={
            "frequency": miss(
                16.0,
                17.92,
                0.0247,
                [
                    ("RA", -0.191, 0.003),
                    ("RB", 0.294, 0.004),
                    ("C", -0.004, 0.006),
                    ("k_upper", -0.0071, 0.004),
                    ("k_lower", -0.0029, 0.003),
                    ("supply", 0.0, 1e-5),
                ],
                0.05,
            ),
            "duty": miss(
                0.63,
                0.7118,
                -0.0079,
                [("RA", 0.051, 0.001), ("RB", 0.082, 0.001), ("k_upper", 0.0021, 0.001)],
                None,
            ),
        },
        suspects=(
            Suspect(
                ("RA", "RB"),
                {"RA": 0.491, "RB": -0.324},
                0.982,
                "RA and RB are exchanged: each has the other's value within 1.4 %",
            ),
            Suspect(
                ("RB",),
                {"RB": -0.324},
                0.011,
                "RB alone is a third low; then RA + RB would not fit the charging time",
            ),
            Suspect(
                ("C",), {"C": -0.11}, 0.004, "C is 11 % low; then the charging time would have shrunk as well"
            ),
            Suspect((), {}, 0.003, "every part lies inside its tolerance"),
        ),
        settled=True,
        ruled_out=(
            RuledOut("C", "the charging time has not moved"),
            RuledOut("R_leak", "the charge heads for the supply within 0.2 %"),
        ),
        next_readings=(NextReading("resistance out of circuit", "RB", 0.017),),
        remedies=(
            Remedy(
                "RA",
                32.8e3,
                22e3,
                "E24",
                {"frequency": q(16.41, 0.012, "Hz"), "duty": Quantity(0.6259, 0.002, "")},
            ),
            Remedy(
                "RB",
                22.3e3,
                33e3,
                "E24",
                {"frequency": q(16.41, 0.012, "Hz"), "duty": Quantity(0.6259, 0.002, "")},
            ),
        ),
        verdict="fail",
        record_notes={"unit": "0017", "ambient": "23 °C"},
    )


def unsettled() -> Explanation:
    """An op-amp astable of which only R·C is known."""
    return Explanation(
        captures=(facts("tide-beeper.csv", samples=20000, interval=2e-6, cycles=18.2),),
        oscillates=True,
        measured=rc_measured(450.05, 0.4871, 6.71, -6.42, (12.7, -12.2), (1.012e-3, 1.009e-3)),
        circuit="op-amp",
        title="Tide gauge beeper",
        parts=(
            part("R", "Ω", 10e3, 10.4e3, 520.0, "build sheet"),
            part("C", "F", 85e-9, 97.3e-9, 4.9e-9, "capture", 0.1),
            part("R_top", "Ω", 10e3, 9.98e3, 60.0, "build sheet", 0.01),
            part("R_bottom", "Ω", 10e3, 10.02e3, 60.0, "build sheet", 0.01),
            part("V_high", "V", 13.0, 12.9, 0.21, "capture", 0.1),
            part("V_low", "V", -13.0, -12.4, 0.2, "capture", 0.1),
            PartFound("slew", 0.51e6, 0.03e6, "V/s", None, None, None, None, "capture"),
        ),
        unseparated=(("R", "C"),),
        miss={
            "frequency": miss(
                535.0,
                450.05,
                0.0007,
                [
                    ("R", -0.031, 0.04),
                    ("C", -0.121, 0.041),
                    ("V_high", -0.0012, 0.001),
                    ("slew", -0.0064, 0.0008),
                    ("R_top", 0.0009, 0.004),
                ],
                0.02,
            ),
            "duty": None,
        },
        suspects=(
            Suspect(("C",), {"C": 0.163}, 0.58, "C is 16 % above its nominal"),
            Suspect(("R",), {"R": 0.166}, 0.40, "R is 17 % above its nominal"),
            Suspect(
                ("C_stray",), {"C_stray": 1.38e-8}, 0.015, "13.8 nF stand across C: more than strays can be"
            ),
            Suspect(("R_leak",), {"R_leak": 1.1e6}, 0.005, "1.1 MΩ load the capacitor"),
        ),
        settled=False,
        ruled_out=(RuledOut("R_leak", "the asymptotes reach the output's levels within 1 %"),),
        next_readings=(
            NextReading("resistance, one end lifted", "R", 0.41),
            NextReading("capture with a known 10 nF across C", "capacitor", 0.33),
        ),
        remedies=(
            Remedy(
                "R",
                10.4e3,
                8.2e3,
                "E24",
                {"frequency": q(541.0, 0.02, "Hz"), "duty": Quantity(0.4871, 0.001, "")},
            ),
            Remedy(
                "C",
                97.3e-9,
                82e-9,
                "E12",
                {"frequency": q(533.8, 0.02, "Hz"), "duty": Quantity(0.4871, 0.001, "")},
            ),
        ),
        verdict="fail",
    )


def no_oscillation() -> Explanation:
    """A lamp flasher that parks below the strike voltage."""
    return Explanation(
        captures=(facts("beacon dead.csv", cycles=0.0),),
        oscillates=False,
        measured={"charge_asymptote": q(83.4, 0.03, "V"), "charge_time_constant": q(0.0931, 0.004, "s")},
        circuit="gas-lamp",
        title="Mast beacon flasher",
        parts=(
            part("supply", "V", 125.0, 124.7, 1.4, "build sheet", 0.02),
            part("R", "Ω", 1.1e6, 1.104e6, 31e3, "build sheet"),
            part("C", "F", 120e-9, 126e-9, 7e-9, "capture", 0.1),
            part("V_strike", "V", 90.0, 91.3, 3.8, "build sheet", 0.08),
            PartFound("R_leak", 2.24e6, 0.15e6, "Ω", None, None, None, None, "capture"),
        ),
        miss={"frequency": Miss(12.0, None, None, 0.021), "duty": None},
        suspects=(
            Suspect(
                ("R_leak",),
                {"R_leak": 2.24e6},
                0.94,
                "2.2 MΩ load the capacitor: the charge ends at 83 V, its time constant short in proportion",
            ),
            Suspect(("supply",), {"supply": -0.33}, 0.04, "the supply is a third low"),
            Suspect(("R",), {"R": 0.8}, 0.02, "R is far too large"),
        ),
        settled=True,
        ruled_out=(
            RuledOut(
                "V_strike", "the node does not come within 4 V of the lowest strike voltage in tolerance"
            ),
        ),
        next_readings=(NextReading("voltage of the supply at its pin", "supply", 0.03),),
        verdict="fail",
        finding="The node parks at 83.4 V and never reaches the strike voltage (84 V to 98 V); "
        "with R below 740 kΩ it would run.",
        warnings=(
            Remark("no-oscillation", "the capture holds one charge and no cycle"),
            Remark("hazard", CAUTIONS),
        ),
    )


def no_sheet() -> Explanation:
    """A capture alone."""
    return Explanation(
        captures=(facts("unknown.csv"),),
        oscillates=True,
        measured=rc_measured(1203.4, 0.9312, 27.9, 4.1, (35.0, 2.2), (6.1e-4, 3.1e-5)),
        circuit=None,
        candidates=(
            Candidate("trigger-diode", 0.61),
            Candidate("unijunction", 0.24),
            Candidate("gas-lamp", 0.15),
        ),
        warnings=(Remark("layout-guessed", "the first column was taken for time in seconds"),),
    )


def no_target() -> Explanation:
    """A sheet with parts but no target."""
    base = unsettled()
    return Explanation(
        captures=base.captures,
        oscillates=True,
        measured=base.measured,
        circuit=base.circuit,
        title=base.title,
        parts=base.parts,
        unseparated=base.unseparated,
        suspects=base.suspects,
        settled=False,
        ruled_out=base.ruled_out,
        next_readings=base.next_readings,
    )


def joint() -> Explanation:
    """Two captures, the second with a known capacitor across C."""
    base = unsettled()
    return Explanation(
        captures=(
            facts("tide-beeper.csv", samples=20000, interval=2e-6, cycles=18.2),
            facts("tide-beeper +10n.csv", samples=20000, interval=2e-6, cycles=16.4),
        ),
        oscillates=True,
        measured=base.measured,
        circuit="op-amp",
        title="Tide gauge beeper",
        parts=(
            part("R", "Ω", 10e3, 9.97e3, 90.0, "capture"),
            part("C", "F", 85e-9, 101.4e-9, 0.9e-9, "capture", 0.1),
            *base.parts[2:],
        ),
        miss={
            "frequency": miss(
                535.0,
                450.05,
                0.0007,
                [
                    ("R", 0.003, 0.009),
                    ("C", -0.152, 0.009),
                    ("V_high", -0.0012, 0.001),
                    ("slew", -0.0064, 0.0008),
                    ("R_top", 0.0009, 0.004),
                ],
                0.02,
            ),
            "duty": None,
        },
        suspects=(
            Suspect(("C",), {"C": 0.193}, 0.988, "C is 19 % above its nominal"),
            Suspect(("R",), {"R": 0.17}, 0.012, "R is 17 % above its nominal"),
        ),
        settled=True,
        ruled_out=(RuledOut("R", "the added capacitor lengthens the period as 9.97 kΩ would"),),
        remedies=(base.remedies[1],),
        verdict="fail",
    )


def failed_fit() -> Explanation:
    """A clipped, noisy, short record of which next to nothing can be said."""
    return Explanation(
        captures=(facts("bad probe.csv", samples=212, interval=1e-3, cycles=1.6),),
        oscillates=True,
        measured={
            "frequency": Quantity(7.4, None, "Hz"),
            "period": Quantity(0.1351, None, "s"),
            "duty": None,
            "upper": None,
        },
        circuit="gas-lamp",
        title="Mast beacon flasher",
        parts=(PartFound("supply", 125.0, None, "V", 125.0, (122.5, 127.5), 0.0, True, "build sheet"),),
        miss={"frequency": Miss(12.0, 7.4, 7.4 / 12 - 1, None), "duty": None},
        suspects=(),
        settled=False,
        next_readings=(NextReading("a capture of at least three cycles, not clipped", "capacitor", 0.5),),
        warnings=(
            Remark(
                "clipped",
                "31 % of the samples stand at the channel's top: where the charge ends is not recorded",
            ),
            Remark("few-cycles", "1.6 cycles: the period's uncertainty cannot be told"),
            Remark("poor-fit", "no exponential fits the charge (what is left over is 14 times the noise)"),
            Remark("hazard", CAUTIONS),
        ),
    )


def cancelling() -> Explanation:
    """On target in frequency, by two faults that undo each other."""
    return Explanation(
        captures=(facts("metronome 3.csv", CH1="capacitor", CH2="output"),),
        oscillates=True,
        measured=rc_measured(2.004, 0.9991, 7.92, 1.61, (8.98, 0.9), (0.2406, 2.6e-5)),
        circuit="unijunction",
        title="Rowing coach metronome",
        parts=(
            part("supply", "V", 9.0, 9.03, 0.03, "reading", 0.02),
            part("R", "Ω", 470e3, 473e3, 2.4e3, "reading"),
            part("C", "F", 1e-6, 0.508e-6, 4e-9, "capture", 0.1),
            part("eta", "", 0.63, 0.811, 0.006, "capture", 0.06),
            part("V_valley", "V", 1.6, 1.61, 0.02, "capture", 0.25),
        ),
        miss={
            "frequency": miss(
                2.0,
                2.004,
                0.011,
                [
                    ("R", -0.006, 0.005),
                    ("C", 0.982, 0.01),
                    ("eta", -0.984, 0.012),
                    ("V_valley", -0.0007, 0.004),
                ],
                0.02,
            ),
            "duty": None,
        },
        suspects=(
            Suspect(
                ("C", "eta"),
                {"C": -0.492, "eta": 0.287},
                0.971,
                "C has half its value, and eta is 29 % high; in the frequency the two undo each other",
            ),
            Suspect(("C",), {"C": -0.49}, 0.029, "C has half its value"),
        ),
        settled=True,
        verdict="pass",
        warnings=(
            Remark(
                "cancelling",
                "C (+98 %) and eta (-98 %) nearly undo each other in the frequency: it is right by accident",
            ),
        ),
    )


def probe_loads() -> Explanation:
    """A lamp flasher slowed by the probe on its capacitor."""
    return Explanation(
        captures=(facts("mast beacon 0021.csv", samples=250000, interval=4e-6, cycles=10.3),),
        oscillates=True,
        measured=rc_measured(10.31, 0.9987, 91.2, 60.4, (112.4, 56.0), (0.1169, 6e-4)),
        circuit="gas-lamp",
        title="Mast beacon flasher",
        parts=(
            part("supply", "V", 125.0, 124.9, 0.7, "build sheet", 0.02),
            part("R", "Ω", 1.1e6, 1.118e6, 3.2e3, "reading"),
            part("C", "F", 120e-9, 116.1e-9, 1.9e-9, "capture", 0.1),
            part("V_strike", "V", 90.0, 91.2, 1.1, "capture", 0.08),
            part("V_extinguish", "V", 60.0, 60.4, 0.8, "capture", 0.08),
        ),
        miss={
            "frequency": miss(
                12.0,
                10.31,
                0.0141,
                [
                    ("probe", -0.148, 0.003),
                    ("R", -0.017, 0.003),
                    ("C", 0.034, 0.017),
                    ("V_strike", -0.047, 0.04),
                    ("V_extinguish", 0.0181, 0.03),
                    ("supply", -0.0009, 0.012),
                ],
                0.05,
            ),
            "duty": miss(0.97, 0.9987, 0.0297, [("probe", 0.0002, 1e-5)], None),
        },
        suspects=(
            Suspect((), {}, 0.91, "every part lies inside its tolerance; the probe slows the build"),
            Suspect(("V_strike",), {"V_strike": 0.031}, 0.09, "the strike voltage is 3 % high"),
        ),
        settled=True,
        without_probe={"frequency": q(12.04, 0.004, "Hz"), "duty": Quantity(0.9985, 0.0003, "")},
        verdict="pass",
        warnings=(
            Remark("probe-loads", "the probe's 10 MΩ lowers the frequency by 14 %"),
            Remark("hazard", CAUTIONS),
        ),
    )


def hostile() -> Explanation:
    """File, channel and note texts that would like to be markup or terminal codes."""
    base = healthy()
    evil = "<script>alert('x')</script>&\"\x1b[31m\x07\udcff"
    return Explanation(
        captures=(facts(evil + ".csv", **{"<img src=x onerror=alert(1)>": "capacitor"}),),
        oscillates=True,
        measured=base.measured,
        circuit=base.circuit,
        title="</title><script>document.title='owned'</script>",
        parts=base.parts,
        suspects=(Suspect((), {}, 1.0, "<b>nothing</b> is off {{ 7*7 }}"),),
        settled=True,
        verdict="conditional",
        miss=base.miss,
        record_notes={"unit": evil, "<u>key</u>": "javascript:alert(1)"},
        warnings=(Remark("<x>", evil),),
    )


def extreme() -> Explanation:
    """Very long names, very large and very small numbers."""
    long = "a capture whose name goes on " * 6 + "and on.csv"
    names = [f"R_{'x' * 14}{i}" for i in range(12)]
    return Explanation(
        captures=(facts(long, samples=10_000_000, interval=1e-12, cycles=1e6),),
        oscillates=True,
        measured=rc_measured(1.234567e9, 0.5, 1e-6, -1e-6, (1e4, -1e4), (1e-12, 1e3)),
        circuit="op-amp",
        parts=tuple(
            part(n, "Ω", 10.0 ** (i - 3), 10.0 ** (i - 3) * 1.1, 10.0 ** (i - 5)) for i, n in enumerate(names)
        ),
        miss={"frequency": miss(1e-3, 1.234567e9, 0.0, [(n, 1e11, 1e3) for n in names], 0.1), "duty": None},
        suspects=tuple(Suspect((n,), {n: 0.1}, 1 / 12, f"{n} is 10 % high") for n in names),
        settled=False,
        verdict="fail",
    )


def as_left() -> Explanation:
    """The tray mister after another capacitor was fitted."""
    return dataclasses.replace(
        healthy(),
        as_found=AsFound(
            path="seed-tray-mister-04 as found.csv",
            verdict="fail",
            before={"frequency": q(39.17, 3e-4, "Hz"), "duty": Quantity(0.4869, 0.0012, "1")},
            predicted={"frequency": q(47.9, 8e-3, "Hz"), "duty": Quantity(0.487, 0.0014, "1")},
            obtained={"frequency": q(47.62, 3e-4, "Hz"), "duty": Quantity(0.4873, 0.0012, "1")},
            is_lifted=True,
            changed=(Changed("C", 270e-9, 220e-9, "F"), Changed("R_series", None, 1e3, "Ω")),
            effect="as predicted",
        ),
    )


def not_by_this_change() -> Explanation:
    """The same, where the change named by the remedy did nothing."""
    before = as_left().as_found
    assert before is not None
    taken = (Changed("C", 266.4e-9, 220e-9, "F", is_taken=True),)
    obtained = {"frequency": q(39.18, 3e-4, "Hz")}
    left = dataclasses.replace(
        before, obtained=obtained, changed=taken, effect="not by this change", is_lifted=False
    )
    return dataclasses.replace(unsettled(), as_found=left)


ALL = {
    f.__name__: f
    for f in (
        healthy,
        fault_settled,
        unsettled,
        no_oscillation,
        no_sheet,
        no_target,
        joint,
        failed_fit,
        cancelling,
        probe_loads,
        hostile,
        extreme,
        as_left,
        not_by_this_change,
    )
}


def lot(
    n: int = 24, *, low_c: float = 0.06, failures: int = 1, seed: int = 11
) -> list[Explanation | dict[str, object]]:
    """Units of one build whose capacitors are all a little high, one of them with a wrong part."""
    rng = np.random.default_rng(seed)
    found: list[Explanation | dict[str, object]] = []
    for i in range(n):
        c, r = 85e-9 * (1 + low_c + 0.02 * rng.standard_normal()), 10e3 * (1 + 0.004 * rng.standard_normal())
        if i == 5:
            r = 12e3
        f = 535.0 * 85e-9 * 10e3 / (c * r)
        bad = i == 5
        u_c = 85e-9 * 0.006
        off = abs(f / 535 - 1)
        verdict = "pass" if off < 0.045 else "conditional" if off < 0.055 else "fail"
        suspects = (
            (Suspect(("R",), {"R": 0.2}, 0.97, "R is 20 % above its nominal"),)
            if bad
            else (
                (Suspect((), {}, 0.94, "nothing is off beyond its tolerance"),)
                if off < 0.06
                else (
                    Suspect(("C",), {"C": c / 85e-9 - 1}, 0.62, "C is high"),
                    Suspect((), {}, 0.38, "nothing is off"),
                )
            )
        )
        found.append(
            Explanation(
                captures=(facts(f"lot 7/beeper {i + 1:03d}.csv"),),
                oscillates=True,
                measured={
                    "frequency": q(f, 3e-4, "Hz"),
                    "duty": Quantity(0.487 + 0.001 * rng.standard_normal(), 6e-4, ""),
                },
                circuit="op-amp",
                title="Tide gauge beeper",
                parts=(
                    part("R", "Ω", 10e3, r, 20.0, "reading", 0.01),
                    part("C", "F", 85e-9, c, u_c, "capture", 0.1),
                    part("V_high", "V", 13.0, 12.93 + 0.05 * rng.standard_normal(), 0.2, "capture", 0.1),
                ),
                miss={"frequency": miss(535.0, f, 0.0, [("C", f / 535 - 1, 0.004)], 0.05), "duty": None},
                suspects=suspects,
                settled=bad or off < 0.06,
                remedies=()
                if verdict == "pass"
                else (
                    Remedy(
                        "R",
                        r,
                        8.2e3 if bad else 9.1e3,
                        "E24",
                        {"frequency": q(535 * (1 + 0.01 * rng.standard_normal()), 0.004, "Hz")},
                    ),
                ),
                verdict=verdict,
            )
        )
    for i in range(failures):
        found.append(
            {
                "schema": 1,
                "capture": {"path": f"lot 7/beeper {n + i + 1:03d}.csv"},
                "error": {"status": 3, "says": "beeper has no row of numbers; export it again"},
            }
        )
    return found


def waveform(
    *,
    lower: float,
    upper: float,
    asymptotes: tuple[float, float],
    taus: tuple[float, float],
    cycles: float = 6.3,
    samples: int = 5000,
    noise: float = 0.004,
    output: tuple[float, float] | None = None,
    path: str = "example.csv",
    jitter: float = 0.0,
    seed: int = 7,
) -> tuple[Capture, CycleConstants]:
    """A two-phase waveform with noise, and the constants that describe it."""
    rng = np.random.default_rng(seed)
    (a, b), (ta, tb) = asymptotes, taus
    times = (ta * math.log((a - lower) / (a - upper)), tb * math.log((b - upper) / (b - lower)))
    period = sum(times)
    n_cycles = int(cycles) + 2
    edges = np.concatenate([[0.0], np.cumsum(period * (1 + jitter * rng.standard_normal(n_cycles)))])
    begin, interval = 0.62 * period, cycles * period / samples
    t = begin + interval * np.arange(samples)
    k = np.clip(np.searchsorted(edges, t, side="right") - 1, 0, n_cycles - 1)
    charge = np.diff(edges)[k] - times[1]
    s = t - edges[k]
    rising = s < charge
    v = np.where(rising, a - (a - lower) * np.exp(-s / ta), b - (b - upper) * np.exp(-(s - charge) / tb))
    sd = noise * (upper - lower)
    step = (upper - lower) / 200
    v = np.round((v + sd * rng.standard_normal(samples)) / step) * step
    channels = [Channel("CH1", "V", v, step)]
    if output is not None:
        o = np.where(rising, output[1], output[0]) + sd * rng.standard_normal(samples)
        channels.append(Channel("CH2", "V", np.round(o / step) * step, step))
    kappa = (1 / ta, 1 / tb)
    names = ("period", "charge_share", "upper", "lower", "charge_curvature", "discharge_curvature")
    values = np.array([period, times[0] / period, upper, lower, *kappa])
    start = -0.1 * period
    turns = edges[(edges >= t[0]) & (edges <= t[-1])] - begin + start
    return (
        Capture(path, interval, start, tuple(channels)),
        CycleConstants(
            True,
            names,
            values,
            np.diag((values * 1e-3) ** 2),
            cycles=cycles,
            noise={"capacitor": sd},
            spans={"capacitor": (float(v.min()), float(v.max()))},
            resolutions={"capacitor": step},
            turns=turns,
            samples=samples,
            interval=interval,
            phases=(
                PhaseFit("capacitor", True, lower, upper, kappa[0], times[0], 1.04),
                PhaseFit("capacitor", False, upper, lower, kappa[1], times[1], 0.98),
            ),
        ),
    )


PREDICTION = {
    "schema": 1,
    "title": "Tide gauge beeper",
    "circuit": "op-amp",
    "oscillates": True,
    "predicted": {
        "frequency": {"value": 535.4, "u": None, "unit": "Hz"},
        "duty": {"value": 0.5, "u": None, "unit": ""},
        "period": {"value": 1 / 535.4, "u": None, "unit": "s"},
        "charge_time": {"value": 0.5 / 535.4, "u": None, "unit": "s"},
        "upper": {"value": 6.5, "u": None, "unit": "V"},
        "lower": {"value": -6.5, "u": None, "unit": "V"},
    },
    "band": {"frequency": [455.2, 640.1], "duty": [0.48, 0.52]},
    "miss": {
        "frequency": {
            "target": 535.0,
            "on_paper": 0.0007,
            "shares": [
                {"cause": "C", "share": 0.71},
                {"cause": "R", "share": 0.2},
                {"cause": "R_top", "share": 0.09},
            ],
        }
    },
    "root_sum_square": {"frequency": [484.0, 597.0], "duty": [0.485, 0.515]},
    "monte_carlo": {"frequency": [489.1, 588.0], "duty": [0.487, 0.513], "oscillates": 0.974},
    "contributions": [
        {"part": "C", "at_low": 0.111, "at_high": -0.0909},
        {"part": "R", "at_low": 0.0526, "at_high": -0.0476},
    ],
    "margins": [{"part": "R", "above": None, "below": 3.9e6, "unit": "Ω"}],
    "warnings": [{"code": "probe-loads", "says": "the ×1 probe would slow it by 4 %"}],
    "capture_advice": ["capture the capacitor node, d.c. coupled", "set 500 µs per division: some 3 cycles"],
}
"""A prediction record."""
