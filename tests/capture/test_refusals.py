"""Files that are no captures: each is refused in one sentence that says what it seems to be."""

from __future__ import annotations

import math
import struct
import zlib
from collections.abc import Callable
from pathlib import Path

import pytest

from benchfit.capture import read
from benchfit.errors import CaptureError

Write = Callable[..., Path]

SPECTRUM = "#Bench recorder, Spectrum Analyzer\n#Start: 0 Hz\n#Stop: 20000 Hz\n#BINs: 200\n#Rate: 40000 Hz\n#Samples: 400\n#Channel: C1\n\n"
LEVELS = "".join(f"{k * 4.8828125},{0.005 / (1 + k)},{k % 180}\n" for k in range(200))
DECADES = [10 * 10 ** (k / 20) for k in range(60)]

REFUSED = {
    "spectrum": (SPECTRUM + "Frequency (Hz),Trace 1 (V),Phase (deg)\n" + LEVELS, "spectrum"),
    "spectrum without header": (SPECTRUM + LEVELS, "spectrum"),
    "spectrum in dB": ("Frequency (Hz),C1 (dBV)\n" + LEVELS.replace(",0.", ",-0."), "spectrum"),
    "levels in dB": ("x,C1 (dB)\n" + LEVELS, "dB"),
    "response on a logarithmic grid": ("f,gain,phase\n" + "".join(f"{f:.4f},{-3 * k},{-k}\n" for k, f in enumerate(DECADES)), "frequency response"),
    "response in hertz": ("Frequency (Hz),Channel 1 Magnitude (dB),Channel 2 Magnitude (dB)\n"
                          + "".join(f"{f:.4f},{-3 * k},{-k}\n" for k, f in enumerate(DECADES)), "frequency"),
    "hand-made table of a response": ("f (Hz),Vpp (V),phase (deg)\n100,4.9,-3\n200,4.6,-8\n500,3.9,-20\n1000,2.7,-41\n2000,1.6,-60\n", "hand-made"),
    "hand-made table": ("R,T,note\n10,2.1,0\n22,4.7,0\n47,10.2,0\n100,21.8,1\n150,33,1\n220,47.5,1\n330,70,0\n470,99,0\n", "made by hand"),
    "settings page": ("Bench recorder settings\nTimebase: 500us\nTrigger: CH1 rising\nCH1 scale: 2V\nCH1 offset: 0V\nProbe: 10X\nMemory: 2500\n", "settings"),
    "settings with numbers": ("Record Length,2500\nSample Interval,1e-6\nTrigger Point,1250\nVertical Scale,0.5\nVertical Offset,0\nHorizontal Scale,5e-4\n"
                              "Probe Atten,10\nYzero,0\nRun,4\nCount,1\n", "settings"),
    "companion of key:value: lines": ("".join(f"{key}:{value}:\n" for key, value in (
        ("Resolution", "2e-8"), ("RecordLength", "5000"), ("XStart", "-5e-5"), ("XStop", "5e-5"), ("Source", "Ch1Wfm1"), ("VerticalScale", "0.5"),
        ("ByteOrder", "LSB"), ("NumberOfAcquisitions", "1"), ("SignalFormat", "FLOAT"))), "settings"),
    "labels in every cell": ("ed: 12 mV\nt: 10 ms U: 1.20 V\n" + "".join(f"t: {k * 10} ms U: {1 + 0.1 * k:.2f} V\n" for k in range(40)) + "t: 41", "label"),
    "labels with commas": ("".join(f"time={k * 10},volts={1 + 0.1 * k:.2f}\n" for k in range(40)), "label"),
    "units in every cell": ("".join(f"{k * 10}ms,{1 + 0.1 * k:.2f}V\n" for k in range(40)), "units in every cell"),
    "one column": ("".join(f"{math.sin(k):.4f}\n" for k in range(200)), "--interval"),
    "prose": ("The oscillator did not start.\nTried another capacitor.\nStill nothing.\n", "no table"),
    "web page": ("<!DOCTYPE html>\n<html><body>404 not found</body></html>\n", "web page"),
    "json": ('{"time": [0, 1, 2], "volts": [1, 2, 3]}\n', "JSON"),
    "xml": ('<?xml version="1.0"?>\n<wave><t>0</t></wave>\n', "XML"),
    "nothing": ("", "empty"),
    "blank lines": ("\n\n \n\n", "blank"),
    "header only": ("x-axis,1,2\nsecond,Volt,Volt\n", "no table"),
    "too few rows": ("x-axis,1\nsecond,Volt\n0,1\n1e-3,2\n2e-3,1\n", "3 rows"),
    "time that stands still": ("Time (s),CH1 (V)\n" + "".join(f"0.001,{k % 7}\n" for k in range(100)), "stands still"),
    "time that wanders": ("Time (s),CH1 (V)\n" + "".join(f"{math.sin(k):.4f},{k % 7}\n" for k in range(100)), "does not run forwards"),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSED)
def test_refused_with_one_sentence(name: str, write: Write) -> None:
    text, expected = REFUSED[name]
    path = write(text)
    with pytest.raises(CaptureError) as error:
        read(path)
    says = error.value.says
    assert expected in says
    assert says.startswith(str(path))
    assert "\n" not in says
    assert says.endswith(".")
    assert error.value.facts["path"] == str(path)


def png() -> bytes:
    def chunk(kind: bytes, data: bytes) -> bytes:
        return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))

    return (
        b"\x89PNG\r\n\x1a\n"
        + chunk(b"IHDR", struct.pack(">IIBBBBB", 1, 1, 8, 0, 0, 0, 0))
        + chunk(b"IEND", b"")
    )


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        (png(), "PNG"),
        (b"PK\x03\x04" + bytes(60), "workbook"),
        (b"%PDF-1.7\n", "PDF"),
        (bytes(range(256)) * 40, "binary"),
        (bytes(4000), "zero bytes"),
        (struct.pack("<500f", *(math.sin(k) for k in range(500))), "binary"),
    ],
)
def test_binaries_are_named(content: bytes, expected: str, write: Write) -> None:
    with pytest.raises(CaptureError, match=expected):
        read(write(content))


def test_a_folder(tmp_path: Path) -> None:
    with pytest.raises(CaptureError, match="folder"):
        read(tmp_path)


@pytest.mark.parametrize("name", ["absent.csv", "no/such/folder.csv", "with\0zero.csv", "x" * 5000])
def test_a_file_that_is_not_there(name: str, tmp_path: Path) -> None:
    with pytest.raises(CaptureError):
        read(f"{tmp_path}/{name}")


def test_columns_that_are_not_there(write: Write) -> None:
    path = write("Time (s),CH1 (V)\n" + "".join(f"{k},{k % 7}\n" for k in range(100)))
    with pytest.raises(CaptureError, match=r"0 \(Time \(s\)\), 1 \(CH1 \(V\)\)"):
        read(path, columns={"time": 0, "CH2": 2})
    with pytest.raises(CaptureError, match="no channel"):
        read(path, columns={"time": 0})
