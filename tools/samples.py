"""The build sheets of the sample captures, as their owners would have written them."""

from __future__ import annotations

SHEETS: dict[str, str] = {}

SHEETS["tide_gate_pacer"] = """\
title = "Tide gate pacer"
circuit = "op-amp"

[target]
frequency = "97 Hz 8 %"

[parts]
R = "47k 1%"
C = "100n 5%"
R_top = "22k 1%"
R_bottom = "22k 1%"
V_high = "10.6 V 3%"
V_low = "-9.9 V 3%"

[channels]
capacitor = "CH1"
output = "CH2"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[scope]
gain = "2%"
offset = "0.1 V"
timebase = "25ppm"

[record]
unit = "TG-04"
ambient = "19 °C"
note = "first of the new boards, sluice house"
"""

SHEETS["hive_scale_clock"] = """\
title = "Hive scale excitation clock"
circuit = "op-amp"

[target]
frequency = "1.64 kHz 5 %"

[parts]
R = "10k 1%"
C = "22n 10%"
R_top = "10k 1%"
R_bottom = "15k 1%"
V_high = "4.0 V 4%"
V_low = "-4.0 V 4%"

[channels]
capacitor = "Channel 1"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[record]
unit = "apiary 3, lid board"
note = "weighs in steps since the capacitors came from the new reel"
"""

SHEETS["glasshouse_vent_pulser"] = """\
title = "Glasshouse vent pulser"
circuit = "op-amp"

[target]
frequency = "1.18 Hz 10 %"
duty = "50 %"

[parts]
R = "220k 1%"
C = "2u2 20%"
R_top = "47k 1%"
R_bottom = "33k 1%"
V_high = "7.8 V 4%"
V_low = "-7.8 V 4%"

[channels]
capacitor = "A"
output = "B"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[scope]
gain = "2%"
offset = "50 mV"

[record]
unit = "row 7"
ambient = "31 °C, damp"
"""
