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

SHEETS["mast_beacon"] = """\
title = "Mast beacon flasher"
circuit = "gas-lamp"

[target]
frequency = "13.1 Hz 10 %"

[parts]
supply = "125 V 2%"
R = "2M2 5%"
C = "56n 10%"
V_strike = "90 V 8%"
V_extinguish = "60 V 8%"

[channels]
capacitor = "CH1"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[record]
unit = "mast 2, spare"
caution = "125 V d.c.: one hand, discharge the capacitor first, a probe rated for it; qualified persons only"
"""

SHEETS["orchard_night_marker"] = """\
title = "Orchard night marker"
circuit = "gas-lamp"

[target]
frequency = "12 Hz 15 %"

[parts]
supply = "150 V 3%"
R = "1M 5%"
C = "220n 10%"
V_strike = "88 V 8%"
V_extinguish = "60 V 8%"

[channels]
capacitor = "CH1"

[probe.capacitor]
resistance = "100M"
capacitance = "3p"

[record]
unit = "row 12"
note = "ran all last season"
caution = "150 V d.c.: isolated supply, one hand, discharge first; local codes apply"
"""

SHEETS["seed_drill_pulser"] = """\
title = "Seed drill pulser"
circuit = "unijunction"

[target]
frequency = "211 Hz 20 %"

[parts]
supply = "12 V 2%"
R = "47k 5%"
C = "100n 10%"
eta = "0.63 10%"
V_valley = "1.6 V 30%"

[channels]
capacitor = "Ch A"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[record]
unit = "drill 4, port side"
"""

SHEETS["weir_level_alarm"] = """\
title = "Weir level alarm"
circuit = "unijunction"

[target]
frequency = "9.1 Hz 25 %"

[parts]
supply = "15 V 2%"
R = "470k 5%"
C = "220n 10%"
eta = "0.65 10%"
V_valley = "1.6 V 30%"
I_peak = "3 uA 50%"
I_valley = "5 mA 50%"

[channels]
capacitor = "CH2"

[probe.capacitor]
resistance = "100M"
capacitance = "3p"

[record]
unit = "upper weir"
note = "switched on 0.35 s after the record begins; no sound"
"""

SHEETS["letterpress_counter"] = """\
title = "Letterpress counter clock"
circuit = "schmitt-inverter"

[target]
frequency = "3.73 kHz 10 %"

[parts]
R = "33k 1%"
C = "10n 5%"
V_upper = "2.9 V 10%"
V_lower = "1.9 V 10%"
V_high = "5 V 2%"

[channels]
capacitor = "IN"
output = "OUT"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[record]
unit = "press 1"
note = "same board as press 2, chips from another tube"
"""

SHEETS["ferry_queue_buzzer"] = """\
title = "Ferry queue buzzer"
circuit = "schmitt-inverter"

[target]
frequency = "2.0 kHz 10 %"

[parts]
R = "100k 5%"
C = "4n7 10%"
V_upper = "3.2 V 10%"
V_lower = "1.9 V 10%"
V_high = "5 V 3%"

[channels]
output = "CH1"

[record]
unit = "slip B"
"""

SHEETS["rain_gauge_ticker"] = """\
title = "Rain gauge ticker"
circuit = "timer-555"

[target]
frequency = "74.5 Hz 8 %"
duty = "62.5 %"

[parts]
supply = "9 V 2%"
RA = "22k 1%"
RB = "33k 1%"
C = "220n 5%"

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
unit = "0031"
ambient = "12 °C"
"""

SHEETS["henhouse_door_timer"] = """\
title = "Henhouse door timer"
circuit = "timer-555"

[target]
frequency = "0.742 Hz 15 %"

[parts]
supply = "5 V 2%"
RA = "100k 5%"
RB = "47k 5%"
C = "10u 10%"

[channels]
capacitor = "CH1"
output = "CH2"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[record]
unit = "coop 3"
"""

SHEETS["dew_pond_pump"] = """\
title = "Dew pond pump"
circuit = "timer-555"

[target]
frequency = "0.102 Hz 10 %"
duty = "66.7 %"

[parts]
supply = "9 V 2%"
RA = "470k 1%"
RB = "470k 1%"
C = "10u 20%"

[channels]
capacitor = "CH1"
output = "CH2"

[probe.capacitor]
resistance = "100M"
capacitance = "3p"

[scope]
gain = "1.5%"
offset = "40 mV"

[record]
unit = "pond 2"
ambient = "24 °C"
note = "runs slower every summer"
"""

SHEETS["level_crossing_lamps"] = """\
title = "Level crossing lamps, model line"
circuit = "two-transistor"

[target]
frequency = "1.5 Hz 20 %"

[parts]
supply = "12 V 2%"
R1 = "47k 5%"
C1 = "10u 10%"
R2 = "47k 5%"
C2 = "10u 10%"
RC1 = "1k 5%"
RC2 = "1k 5%"

[channels]
base1 = "CH1"
collector1 = "CH2"

[probe.base1]
resistance = "10M"
capacitance = "12p"

[record]
unit = "mill lane"
"""

SHEETS["misting_bench_clock"] = """\
title = "Misting bench clock"
circuit = "gate-pair"

[target]
frequency = "207 Hz 10 %"

[parts]
supply = "9 V 2%"
R = "100k 1%"
C = "22n 5%"
R_series = "1M 5%"

[channels]
capacitor = "X"
output = "Y"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[record]
unit = "bench C"
"""

SHEETS["loom_shuttle_sweep"] = """\
title = "Loom shuttle sweep"
circuit = "triangle"

[target]
frequency = "4.3 kHz 8 %"

[parts]
R = "12k 1%"
C = "10n 5%"
R_in = "33k 1%"
R_feedback = "68k 1%"
V_high = "9.5 V 3%"
V_low = "-9.5 V 3%"

[channels]
capacitor = "CH1"
output = "CH2"

[record]
unit = "loom 6"
"""

SHEETS["sap_flow_ramp"] = """\
title = "Sap flow ramp"
circuit = "current-ramp"

[target]
frequency = "2.36 Hz 8 %"

[parts]
I_charge = "5 uA 2%"
C = "470n 5%"
V_upper = "5 V 3%"
V_lower = "0.5 V 10%"

[channels]
capacitor = "CH1"

[probe.capacitor]
resistance = "100M"
capacitance = "3p"

[record]
unit = "tree 11"
ambient = "wet"
"""

SHEETS["barn_owl_camera"] = """\
title = "Barn owl camera trigger"
circuit = "programmable-unijunction"

[target]
frequency = "1.97 Hz 10 %"

[parts]
supply = "9 V 2%"
R = "470k 5%"
C = "1u 10%"
RG1 = "27k 1%"
RG2 = "16k 1%"
V_valley = "0.9 V 30%"

[channels]
capacitor = "CH1"

[probe.capacitor]
resistance = "100M"
capacitance = "3p"

[record]
unit = "barn, north"
"""

SHEETS["kiln_damper_pulser"] = """\
title = "Kiln damper pulser"
circuit = "trigger-diode"

[target]
frequency = "330 Hz 20 %"

[parts]
supply = "60 V 3%"
R = "100k 5%"
C = "100n 10%"
V_breakover = "32 V 12.5%"
V_breakback = "10 V 40%"

[channels]
capacitor = "CH1"

[probe.capacitor]
resistance = "10M"
capacitance = "12p"

[record]
unit = "kiln 2"
caution = "60 V d.c.: discharge the capacitor first, one hand, a probe rated for it"
"""
