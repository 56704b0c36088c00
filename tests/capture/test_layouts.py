"""Every family of layouts and every trap in them, as small files of our own invention in the style of real exports."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from benchfit.capture import read

Write = Callable[..., Path]


def wave(k: int) -> float:
    """Some voltage that goes up and down between 1 V and 3 V in steps of 0.02 V."""
    return round((2 + math.sin(0.37 * k) + 0.0001 * k) / 0.02) * 0.02


def table(n: int, row: str, start: float = -1e-3, step: float = 1e-4) -> str:
    """``n`` rows; in ``row`` stand {t}, {v} (up and down), {w} (two levels), {k} (number from 0)."""
    return "".join(
        row.format(t=start + k * step, v=wave(k), w=5.0 * (k // 4 % 2), k=k) + "\n" for k in range(n)
    )


@dataclass(frozen=True)
class Case:
    """A file and what it must be read as."""

    name: str
    text: str
    samples: int
    interval: float
    start: float = -1e-3
    names: tuple[str, ...] = ("CH1",)
    units: tuple[str, ...] = ("V",)
    codes: frozenset[str] = frozenset()
    options: dict[str, Any] = field(default_factory=dict)


TV = "{t:.6e},{v:.4f}"
TVW = TV + ",{w:.4f}"
SETTINGS_LEFT = (
    "Record Length,4.000000e+01,,", "Sample Interval,1.000000e-04,,", "Trigger Point,1.25e+03,,", ",,,", ",,,", "Source,CH2,,",
    "Vertical Units,V,,", "Vertical Scale,2.0e-02,,", "Horizontal Units,s,,", "Pt Fmt,Y,,", "Yzero,0.0e+00,,", "Probe Atten,1.0e+00,,",
)  # fmt: skip

MARKED = (
    "Format,2.0B,\nMemory Length,300,\nTrigger Level,1.08E-01,\nSource,CH1,\nVertical Units,V,\nLabel,,\nVertical Scale,2.0E+00,\n"
    "Horizontal Units,S,\nHorizontal Scale,5.0e-04,\nSampling Period,5.000E-07,\nFirmware,V1.19,\nTime,04-Aug-23 14:07:43,\n"
)


def settings_left(n: int) -> str:
    rows = []
    for k in range(n):
        t = -1e-3 + k * 1e-4
        stamp = f"{t:016.12f}" if t > 0 else f"{t:17.12f}"
        rows.append(f"{SETTINGS_LEFT[k] if k < len(SETTINGS_LEFT) else ',,,'}{stamp}, {wave(k):9.5f},\n")
    return "".join(rows)


CASES = [
    # -- A
    Case("settings left of the data, doubled zero in positive times", settings_left(40), 40, 1e-4, names=("CH2",)),
    Case(
        "settings in quotes with their unit beside them",
        '"Record Length",40,"Points",-0.001,1.02\n"Sample Interval",0.0001,"s",-0.0009,1.04\n"Trigger Point",10,"Samples",-0.0008,1.06\n'
        '"Source","CH1",,-0.0007,1.04\n' + "".join(f",,,{-0.0006 + 1e-4 * k:.4f},{wave(k):.2f}\n" for k in range(36)),
        40, 1e-4, codes=frozenset({"layout-guessed"}),
    ),
    Case(
        "time and value first, settings in columns 6 and 7",
        "".join(f"{-1e-3 + 1e-4 * k:.6f},{wave(k):.3f}{extra}\n" for k, extra in enumerate(
            [",,,,Model,bench 4", ",,,,Sample Interval,1e-4", ",,,,Vertical Units,V", ",,,,Source,CH3"] + [""] * 36)),
        40, 1e-4, names=("CH3",), codes=frozenset({"layout-guessed"}),
    ),
    # -- B
    Case(
        "settings above with a date called Time, no header row, the name behind Source",
        "Record Length,40,\nTime,04-Aug-23 14:07:43,\nSample Interval,1E-4,\nVertical Units,V,\nHorizontal Units,s,\nSource,CH1,\n"
        + table(40, TV + ","), 40, 1e-4,
    ),
    Case(
        "settings above with a label line of empty cells",
        "Model,B4\nFirmware Version,1.52\n\nPoint Format,Y,,,\nHorizontal Units,S,,,\nSample Interval,1e-04,,,\nVertical Units,V,,V,\n"
        "Label,,,,\nTIME,CH1,CH1 Peak Detect,CH2,CH2 Peak Detect\n" + table(40, "{t:.5e},{v:.2f},{v:.2f},{w:.1f},{w:.1f}"),
        40, 1e-4, names=("CH1", "CH2"), units=("V", "V"), codes=frozenset({"derived-column"}),
    ),
    Case(
        "settings of several cells with the kind in front of the value",
        "Record Length,Analog:40\nSample Interval,Analog:0.0001000000\nVertical Units,CH1:V,CH2:V\nHorizontal Units,s\n"
        "Source,CH1,CH2\nSecond,Volt,Volt\n" + table(40, TVW), 40, 1e-4, names=("CH1", "CH2"), units=("V", "V"),
    ),
    Case(
        "raw codes only, the interval in the preamble",
        "Model,B4\nRecord Length,40\nSample Interval,2.5E-6\nVertical Scale,0.5\n" + "".join(f"{100 + 3 * (k % 17)}\n" for k in range(40)),
        40, 2.5e-6, start=0.0, units=("",), codes=frozenset({"layout-guessed"}),
    ),
    Case(
        "settings with a rate instead of an interval, values only",
        "Channel: CH1\nSampling rate: 500.0kSa/s\nSamples: 40\n\n" + table(40, "{v:.3f}"), 40, 2e-6, start=0.0,
        codes=frozenset({"layout-guessed"}),
    ),
    # -- C
    Case("names that are digits, units as words", "x-axis,1,2\nsecond,Volt,Volt\n" + table(40, TVW), 40, 1e-4,
         names=("1", "2"), units=("V", "V")),
    Case("user names", "x-axis,VC,VIN\nsecond,Volt,Ampere\n" + table(40, TVW), 40, 1e-4, names=("VC", "VIN"), units=("V", "A")),
    Case("name row cut off", "second,Volt\n" + table(40, TV), 40, 1e-4),
    Case("first name empty", ",CH1,CH2\nsecond,Volt,Volt\n" + table(40, TVW), 40, 1e-4, names=("CH1", "CH2"), units=("V", "V")),
    Case("first name empty, no units", ",CH1\n" + table(40, TV), 40, 1e-4, codes=frozenset({"layout-guessed"})),
    Case("Source row", "Source,CH1,CH2\nSecond,Volt,Volt\n" + table(40, TVW), 40, 1e-4, names=("CH1", "CH2"), units=("V", "V")),
    Case("a stored reference that never moves", "x-axis,1,REF1\nsecond,Volt,Volt\n" + table(40, TV + ",-5.12E+00"), 40, 1e-4,
         names=("1", "REF1"), units=("V", "V")),
    Case("four channels", "x-axis,1,2,3,4\nsecond,Volt,Volt,Volt,Volt\n" + table(40, TVW + ",{v:.2f},{w:.1f}"), 40, 1e-4,
         names=("1", "2", "3", "4"), units=("V",) * 4),
    # -- D
    Case("start and increment", "CH1,CH2,Start,Increment,\nVolt,Volt,-6.0e-02,1.0e-04\n" + table(40, "{v:.3e},{w:.3e},"), 40, 1e-4,
         start=-0.06, names=("CH1", "CH2"), units=("V", "V")),
    Case("start and increment behind a sequence number", "X,CH1,Start,Increment,\nSequence,Volt,-3.0e-03,2.0e-06,\n" + table(40, "{k},{v:.3e},"),
         40, 2e-6, start=-3e-3),
    Case("start and increment on the first row only", "X,CH1,Start,Increment\n0,2.02,-3.0e-03,2.0e-06\n"
         + "".join(f"{k},{wave(k):.2f}\n" for k in range(1, 40)), 40, 2e-6, start=-3e-3, codes=frozenset({"layout-guessed"})),
    Case("start and increment inside the header's cells", "CH1V,CH2V,t0 = -1.2e-03, tInc = 2e-08,\n" + table(40, "{v:.3e},{w:.3e},"), 40, 2e-8,
         start=-1.2e-3, names=("CH1", "CH2"), units=("V", "V")),
    # -- E
    Case("in s", "in s,C1 in V,C2 in mV\n" + table(40, TVW), 40, 1e-4, names=("C1", "C2"), units=("V", "V")),
    Case("nameless time in brackets", "[s],CH2[V]\n" + table(40, TV), 40, 1e-4, names=("CH2",)),
    Case("in parentheses", "Time (ms),Channel 1 (V),Channel 2 (mA)\n" + table(40, TVW, -1, 0.1), 40, 1e-4,
         names=("Channel 1", "Channel 2"), units=("V", "A")),
    Case("with a slash", "t / µs;U_C / V\n" + table(40, "{t:.3f};{v:.3f}", -1000, 100), 40, 1e-4, names=("U_C",)),
    Case("all in capitals", "TIME(MS),CH1(MV)\n" + table(40, TV, -1, 0.1), 40, 1e-4),
    # -- F
    Case("each stamp twice", "time in s,CH1 in V\n" + table(40, "{t:.7e},{v:.3f}\n{t:.7e},{v:.3f}9"), 40, 1e-4, codes=frozenset({"envelope"})),
    Case("each stamp twice, blanks, a comment for header", "# time[s] ch1[V]\n" + table(40, "{t:.7e} {v:.3f}\n{t:.7e} {v:.3f}9"), 40, 1e-4,
         names=("ch1",), codes=frozenset({"envelope"})),
    Case("each stamp twice, the first of a pair missing", "in s,C1 in V\n-1.1e-3,2.5\n" + table(40, "{t:.7e},{v:.3f}\n{t:.7e},{v:.3f}9"), 40, 1e-4,
         names=("C1",), codes=frozenset({"envelope"})),
    # -- G
    Case("comments, a blank line, a header", "#Recorder, unit 4\n#Date Time: 2025-11-07 16:43:23.169\n#Rate: 10000 Hz\n#Samples: 40\n#2,4kHz\n#\n\n"
         "Time (s),Channel 1 (V)\n" + table(40, TV), 40, 1e-4, names=("Channel 1",)),
    Case("the last comment is the header, tabs", "# Presa dati\n# Timestamp 2025-10-02 11:39:05\n# time\tch1\tch2\n" + table(40, "{t:.18e}\t{v:.18e}\t{w:.1f}"),
         40, 1e-4, names=("ch1", "ch2"), units=("V", "V"), codes=frozenset({"layout-guessed"})),
    Case("comments with percent signs", "% Bench recorder\n% Acquisition rate: 10 kHz\n% Time (s), Input A (V), Input B (V)\n" + table(40, "{t:.6e}, {v:.4f}, {w:.1f}"),
         40, 1e-4, names=("Input A", "Input B"), units=("V", "V")),
    # -- H
    Case("index before time", "Sample,Time(S),CH1(V)\n" + table(40, "{k},{t:.6f},{v:.3f}"), 40, 1e-4),
    Case("nameless index before time", table(40, "{k},{t:.6f},{v:.3f}"), 40, 1e-4, codes=frozenset({"layout-guessed", "derived-column"})),
    # -- I
    Case("no header, sixteen digits", table(40, "{t:.16e},{v:.16e}", -8.19e-5, 2e-8), 40, 2e-8, start=-8.19e-5, codes=frozenset({"layout-guessed"})),
    Case("no header, values only", table(40, "{v:.6f};{w:.6f}"), 40, 1e-3, start=0.0, names=("CH1", "CH2"), units=("V", "V"),
         codes=frozenset({"layout-guessed"}), options={"interval": 1e-3}),
    Case("one column of numbers and an interval", table(40, "{v:.6f}"), 40, 1e-3, start=0.0, codes=frozenset({"layout-guessed"}),
         options={"interval": 1e-3}),
    Case("columns told by the user", table(40, "{w:.1f};{v:.6f};{t:.6f}"), 40, 1e-4, names=("out", "cap"), units=("V", "V"),
         codes=frozenset({"layout-guessed"}), options={"columns": {"time": 2, "out": 0, "cap": 1}}),
    Case("columns told by title, with a unit", "Parameter,Value\n" + table(40, "{k}0,{v:.3f}"), 40, 1e-2, start=0.0, names=("C",),
         codes=frozenset({"layout-guessed"}), options={"columns": {"time[ms]": "Parameter", "C": "Value"}}),
    # -- J
    Case("blanks", "time[s] ch1[V] ch2[V]\n" + table(40, "{t:.6e} {v:.4f} {w:.1f}"), 40, 1e-4, names=("ch1", "ch2"), units=("V", "V")),
    Case("columns padded with blanks", "   time[s]    ch1[V]\n" + table(40, "{t:16.8e}{v:12.4f}"), 40, 1e-4, names=("ch1",)),
    Case("comma and tab between two cells", "Time (s),\tV1 (V)\n" + table(40, "{t:.6f},\t{v:.3f}"), 40, 1e-4, names=("V1",)),
    # -- K
    Case("semicolon, decimal comma, blank third row", "Zeit;Kanal A;Kanal B\n(ms);(V);(A)\n\n"
         + table(40, "{t:.8f};{v:.8f};{w:.8f}", -1, 0.1).replace(".", ","), 40, 1e-4, names=("Kanal A", "Kanal B"), units=("V", "A")),
    Case("tab, decimal comma, no header", table(40, "{t:.5f}\t{v:.3f}").replace(".", ","), 40, 1e-4, codes=frozenset({"layout-guessed"})),
    Case("decimal commas in quotes", '"Time (s)","CH1 (V)"\n' + table(40, '"{t:.5f}","{v:.3f}"').replace(".", ","), 40, 1e-4),
    Case("decimal comma with exponents", "s;V\n" + table(40, "{t:.6E};{v:.6E}").replace(".", ","), 40, 1e-4),
    # -- L
    Case("user names and seconds", "Time [s],probe,lamp\n" + table(40, TVW, 0, 0.05), 40, 0.05, start=0.0, names=("probe", "lamp"), units=("V", "V"),
         codes=frozenset({"layout-guessed"})),
    Case("raw code beside volts", "Time (ms),raw,Volts (V)\n" + "".join(
        f"{k},{200 + 7 * (k % 23)},{(200 + 7 * (k % 23)) * 5 / 1023:.4f}\n" for k in range(40)), 40, 1e-3, start=0.0, names=("Volts",),
        codes=frozenset({"derived-column"})),
    Case("increments by name", "dt (us),code\n" + table(40, "160,{k}7"), 40, 1.6e-4, start=1.6e-4, names=("code",), units=("",),
         codes=frozenset({"increments"})),
    Case("increments told by the user", "# t(microsec), uc(scale (0-5)V)\n" + table(40, "160,{k}7"), 40, 1.6e-4, start=1.6e-4, names=("uc",), units=("",),
         codes=frozenset({"increments", "layout-guessed"}), options={"columns": {"increment": 0, "uc": 1}}),
    Case("tuples in brackets", "(time_s, volts)\n" + table(40, "({t:.6f}, {v:.3f})"), 40, 1e-4),
    Case("a list of tuples on one line", "[" + ", ".join(f"({-1e-3 + 1e-4 * k:.6f}, {wave(k):.3f})" for k in range(40)) + "]\n", 40, 1e-4,
         codes=frozenset({"layout-guessed"})),
    Case("frames stacked, the first cut", "Time [ms],V\n" + table(23, TV, 0, 0.1) + table(40, TV, 0, 0.1) * 3, 23, 1e-4, start=0.0,
         codes=frozenset({"frames"})),
    Case("frames stacked, the second asked for", "Time [ms],V\n" + table(23, TV, 0, 0.1) + table(40, TV, 0, 0.1) * 3, 40, 1e-4, start=0.0,
         codes=frozenset({"frames"}), options={"frame": 2}),
    Case("whole milliseconds, said in the header", "millis,U[V]\n" + table(40, "{k}5,{v:.3f}"), 40, 1e-2, start=5e-3, names=("U",)),
    # -- N
    Case("column letters", "A,B\n" + table(40, TV), 40, 1e-4, names=("B",), codes=frozenset({"layout-guessed"})),
    Case("byte order mark before the first cell", "\ufeffTime (s),CH1 (V)\n" + table(40, TV), 40, 1e-4),
    Case("bare CR", ("Time (s),CH1 (V)\n" + table(40, TV)).replace("\n", "\r"), 40, 1e-4),
    Case("third header cell empty over a third column", "Time (s),CH1 (V),\n" + table(40, TVW), 40, 1e-4, names=("CH1", "CH2"), units=("V", "V"),
         codes=frozenset({"layout-guessed"})),
    Case("a logarithm computed beside", "t (s),U (V),ln U\n" + "".join(
        f"{1e-3 * k:.3f},{5 * math.exp(-0.05 * k):.5f},{math.log(5 * math.exp(-0.05 * k)):.6f}\n" for k in range(40)), 40, 1e-3, start=0.0,
        names=("U",), codes=frozenset({"derived-column"})),
    Case("words of another language, no units", "Czas,Napięcie\n" + table(40, TV), 40, 1e-4, names=("Napięcie",), codes=frozenset({"layout-guessed"})),
    Case("header with fewer cells than rows", "CH1,CH2\n" + table(40, TVW), 40, 1e-4, names=("CH1", "CH2"), units=("V", "V"), codes=frozenset({"layout-guessed"})),
    # -- other shapes of cells
    Case("comma and blank at the end of data rows only", "Time (s),CH1 (V)\n" + table(40, TV + ", "), 40, 1e-4),
    Case("four empty cells at the end", "Time (s),CH1 (V),,,,\n" + table(40, TV + ",,,,"), 40, 1e-4),
    Case("exponents of three digits, plus signs", "second,Volt\n" + "".join(f"{-1e-3 + 1e-4 * k:+.5e}".replace("e-0", "e-00").replace("e+0", "e+00")
         + f",{wave(k):+.5E}\n" for k in range(40)), 40, 1e-4),
    Case("exponents on some rows only", "time in s,CH1 in V\n" + "".join(
        f"{-1000 + 100 * k}.0E-6,{wave(k) * 1000:.1f}E-3\n" if k % 2 else f"{-1e-3 + 1e-4 * k:.7f},{wave(k):.3f}\n" for k in range(40)), 40, 1e-4),
    Case("twenty-five digits", "Time (s),CH1 (V)\n" + table(40, "{t:.25f},{v:.25f}"), 40, 1e-4),
    Case("a filler column of words", "Time (s),CH1 (V),CH2\n" + table(40, TV + ",N/a"), 40, 1e-4),
    Case("a counter near 1.5e9", "Time (s),CH1 (V),unix\n" + "".join(f"{1e-4 * k:.4f},{wave(k):.3f},{1_500_000_000 + k // 7}\n" for k in range(40)),
         40, 1e-4, start=0.0, codes=frozenset({"derived-column"})),
    Case("the time axis written twice", table(40, " {t:.6e} {v:.4e} {t:.6e} {w:.4e}"), 40, 1e-4, names=("CH1", "CH2"), units=("V", "V"),
         codes=frozenset({"layout-guessed", "derived-column"})),
    Case("nodes of a simulator", "time\tV(n001)\tI(R1)\n" + table(40, "{t:.15e}\t{v:.6e}\t{w:.6e}"), 40, 1e-4, names=("V(n001)", "I(R1)"), units=("V", "A"),
         codes=frozenset({"layout-guessed"})),
    Case("segments told of above", "MAKER,1234,Waveform\nSegments,1,SegmentSize,40\nSegment,TrigTime,TimeSinceSegment1\n#1,01-Jan-2023 00:00:00,0\nTime,Ampl\n"
         + table(40, TV), 40, 1e-4, names=("Ampl",), codes=frozenset({"layout-guessed"})),
    Case("header block ended by a line of stars", "Measurement\t\nSeparator\tTab\n***End_of_Header***\t\nChannels\t2\nSamples\t40\t40\nX0\t0.0\t0.0\nDelta_X\t1e-4\t1e-4\n"
         "***End_of_Header***\t\t\nX_Value\tVoltage_0\tVoltage_1\tComment\n" + table(40, "{t:.6f}\t{v:.3f}\t{w:.1f}\t", 0), 40, 1e-4, start=0.0,
         names=("Voltage_0", "Voltage_1"), units=("V", "V"), codes=frozenset({"layout-guessed"})),
    Case("trace names and units in settings, values behind an empty cell", '"TraceName","CH1","CH2"\n"BlockSize",40\n"VUnit","V","V"\n"SampleRate",1.0E+4\n"HUnit","s"\n\n'
         + table(40, ",{v:.3e},{w:.3e}"), 40, 1e-4, start=0.0, names=("CH1", "CH2"), units=("V", "V")),
    # -- more of the same families
    Case("converter codes below a marker line", MARKED + "Mode,Fast,\nWaveform Data,\n" + table(300, "{k}7,"), 300, 5e-7, start=0.0,
         units=("",), codes=frozenset({"layout-guessed"})),
    Case("time and value below a marker line", MARKED + "Mode,Detail,\nWaveform Data,\n" + table(300, TV + ",", -1e-4, 5e-7), 300, 5e-7, start=-1e-4),
    Case("units row right below settings", "Model,B4\nRecord Length,40\nSource,CH2\nHorizontal Scale,0.001\nSecond,Volt\n" + table(40, TV), 40, 1e-4,
         names=("CH2",)),
    Case("names in quotes", '"Time","CH1"\n' + table(40, '"{t:.6f}","{v:.3f}"'), 40, 1e-4, codes=frozenset({"layout-guessed"})),
    Case("minimum and maximum in columns of their own", "Time [s],CH1 min [V],CH1 max [V]\n" + table(40, "{t:.6f},{v:.3f},{v:.3f}9"), 40, 1e-4,
         names=("CH1 min", "CH1 max"), units=("V", "V")),
    Case("a title line, then the header", "Versuch 3: Kippstufe\n\nt in ms;U in V\n" + table(40, "{t:.3f};{v:.3f}", -1, 0.1).replace(".", ","), 40, 1e-4,
         names=("U",)),
    Case("a time column for each channel", "Time (s),CH1 (V),Time (s),CH2 (V)\n" + table(40, "{t:.6f},{v:.3f},{t:.6f},{w:.1f}"), 40, 1e-4,
         names=("CH1", "CH2"), units=("V", "V"), codes=frozenset({"derived-column"})),
    Case("a time in microseconds by the word micros", "micros,raw,U (V)\n" + "".join(
        f"{200 * k},{200 + 7 * (k % 23)},{(200 + 7 * (k % 23)) * 5 / 1023:.4f}\n" for k in range(40)), 40, 2e-4, start=0.0, names=("U",),
        codes=frozenset({"derived-column"})),
    Case("row numbers under an empty name", ",Time (s),U (V)\n" + table(40, "{k},{t:.5f},{v:.3f}"), 40, 1e-4, names=("U",), codes=frozenset({"derived-column"})),
    Case("the separator told in the first line", "sep=;\nTime (s);U (V)\n" + table(40, "{t:.5f};{v:.3f}"), 40, 1e-4, names=("U",)),
    Case("clock times beside elapsed seconds", "Timestamp,Elapsed (s),U (V)\n" + "".join(
        f"2023-08-04 14:07:{k:02d},{0.5 * k},{wave(k):.3f}\n" for k in range(40)), 40, 0.5, start=0.0, names=("U",)),
    Case("a rate in a comment, names in the next", "# sampling frequency: 10 kHz\n# V_C, V_out\n" + table(40, "{v:.4f}, {w:.2f}"), 40, 1e-4, start=0.0,
         names=("V_C", "V_out"), units=("V", "V"), codes=frozenset({"layout-guessed"})),
    # -- encodings
    Case("a degree sign in Latin-1", "# bench at 23 \xb0C\nTime (\xb5s),CH1 (V)\n" + table(40, TV, -1000, 100), 40, 1e-4),
]  # fmt: skip


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_read_as_meant(case: Case, write: Write) -> None:
    latin = case.name.endswith("Latin-1")
    capture = read(write(case.text.encode("latin-1") if latin else case.text), **case.options)
    assert capture.samples == case.samples
    assert capture.interval == pytest.approx(case.interval, rel=1e-6)
    assert capture.start == pytest.approx(case.start, abs=1e-3 * case.interval)
    assert tuple(channel.name for channel in capture.channels) == case.names
    assert tuple(channel.unit for channel in capture.channels) == case.units
    assert {remark.code for remark in capture.warnings} == case.codes
    for channel in capture.channels:
        assert channel.values.shape == (case.samples,)
        assert np.isfinite(channel.values).all()
