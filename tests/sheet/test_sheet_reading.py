"""The build sheet: what is read, what is refused and in which words."""

from __future__ import annotations

import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit import circuits
from benchfit.errors import SheetError
from benchfit.sheet import Probe, Scope, Sheet
from benchfit.sheet.toml import dump

LAMP = """\
title = "Mast beacon flasher"
circuit = "gas-lamp"

[target]
frequency = "12 Hz"
duty = "97 %"

[parts]
supply = "125 V 2%"
R = "1M1 5%"
C = "120n 10%"
V_strike = "90 V 8%"
V_extinguish = "60 V 8%"

[readings]
R = "1.118M 0.5%"
frequency = "12.31 Hz 10ppm"

[channels]
capacitor = { name = "CH2", coupling = "ac" }

[probe.capacitor]
resistance = "10M"
capacitance = "12p"
scaled = false
ratio = 10

[scope]
gain = "2%"
offset = "0.1 V"
timebase = "25ppm"

[record]
unit = "0017"
ambient = "23 °C"

[capture.2]
added_C = "4.7n 1%"
added_R = "1M 1%"
supply = "119 V 0.2%"
probe.capacitor = "none"
channels = { capacitor = "CH1" }
"""
AMPLIFIER = """\
circuit = "op-amp"
[parts]
C = "1n"
R_top = "1k"
R_bottom = "1k"
V_high = "5 V"
V_low = "-5 V"
"""


def refusal(text: str, *overrides: str) -> str:
    with pytest.raises(SheetError) as error:
        Sheet.parse(text, overrides, "lamp.toml")
    says = str(error.value)
    assert "\n" not in says
    assert error.value.status == 2
    return says


def test_every_section_is_read():
    """The whole sheet as the interface shows it."""
    sheet = Sheet.parse(LAMP)
    assert sheet.title == "Mast beacon flasher"
    assert sheet.circuit is circuits.get("gas-lamp")
    assert sheet.target_frequency is not None
    assert (sheet.target_frequency.nominal, sheet.target_frequency.stated) == (12, False)
    assert sheet.target_duty is not None
    assert sheet.target_duty.nominal == pytest.approx(0.97)
    assert list(sheet.parts) == ["supply", "R", "C", "V_strike", "V_extinguish"]
    assert sheet.parts["R"].low == pytest.approx(1.045e6)
    assert sheet.readings["R"].nominal == pytest.approx(1.118e6)
    assert sheet.readings["frequency"].high == pytest.approx(12.31 * (1 + 1e-5))
    assert (sheet.channels["capacitor"].name, sheet.channels["capacitor"].coupling) == ("CH2", "ac")
    probe = sheet.probes["capacitor"]
    assert probe.resistance is not None
    assert probe.capacitance is not None
    assert (probe.resistance.nominal, probe.scale) == (1e7, 10)
    assert probe.capacitance.nominal == pytest.approx(12e-12)
    assert sheet.scope == Scope(0.02, 0.1, pytest.approx(25e-6), True)
    assert sheet.record == {"unit": "0017", "ambient": "23 °C"}
    change = sheet.captures[2]
    assert change.added_C is not None
    assert change.added_R is not None
    assert (change.added_C.nominal, change.added_R.nominal) == (pytest.approx(4.7e-9), 1e6)
    assert change.parts["supply"].nominal == 119
    assert change.probes == {"capacitor": None}
    assert change.channels["capacitor"].name == "CH1"


def test_what_is_left_out_takes_its_default():
    """Without the section the scope's usual limits; no probe is an ideal one; a part's own default
    tolerance."""
    sheet = Sheet.parse(
        'circuit = "gas-lamp"\n[parts]\nsupply=125\nR="1M"\nC="100n"\nV_strike=90\nV_extinguish=60'
    )
    assert sheet.scope == Scope(gain=0.03, offset=None, timebase=50e-6, given=False)
    assert sheet.probes == {}
    assert Probe().scale == 1
    part = circuits.get("gas-lamp").part("C")
    assert part.tolerance == "10 %"
    assert not sheet.parts["C"].stated
    assert (sheet.parts["C"].low, sheet.parts["C"].high) == pytest.approx((90e-9, 110e-9))


def test_a_sheet_without_a_circuit():
    """Target, channels, scope and record need none; a reading of the frequency does not either."""
    text = '[target]\nfrequency="1 kHz 2%"\n[channels]\noutput="CH1"\n[readings]\nfrequency="1.01 kHz"'
    sheet = Sheet.parse(text)
    assert sheet.circuit is None
    assert sheet.target_frequency is not None
    assert sheet.target_frequency.stated
    assert sheet.channels["output"].coupling == "dc"
    assert sheet.readings["frequency"].nominal == pytest.approx(1010)


def test_a_target_period_is_a_frequency():
    """Its acceptance limits change places."""
    sheet = Sheet.parse('[target]\nperiod = "83 ms 2%"')
    assert sheet.target_frequency is not None
    assert sheet.target_frequency.high == pytest.approx(1 / (0.083 * 0.98))
    assert sheet.target_frequency.unit == "Hz"


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        (
            "[target]",
            "[targets]",
            'lamp.toml, line 4, targets: unknown section or key "targets"; the nearest known one is "target"',
        ),
        (
            'title = "',
            'titel = "',
            'line 1, titel: unknown section or key "titel"; the nearest known one is "title"',
        ),
        (
            'frequency = "12 Hz"',
            "freq = 12",
            'line 5, target.freq: unknown key "freq"; the nearest known one is "frequency"',
        ),
        (
            "V_strike",
            "V_stroke",
            'line 12, parts.V_stroke: unknown key "V_stroke"; the nearest known one is "V_strike"',
        ),
        ('R = "1.118M', 'r = "1.118M', 'line 16, readings.r: unknown key "r"; the nearest known one is "R"'),
        (
            "capacitor = {",
            "kapacitor = {",
            'channels.kapacitor: unknown key "kapacitor"; the nearest known one is "capacitor"',
        ),
        ("coupling =", "cupling =", 'unknown key "cupling"; the nearest known one is "coupling"'),
        ("[probe.capacitor]", "[probe.output]", 'unknown key "output"; the nearest known one is "capacitor"'),
        (
            "ratio = 10",
            "ration = 10",
            'line 26, probe.capacitor.ration: unknown key "ration"; the nearest known one is "ratio"',
        ),
        ("gain =", "gian =", 'line 29, scope.gian: unknown key "gian"; the nearest known one is "gain"'),
        (
            "added_C",
            "add_C",
            'line 38, capture.2.add_C: unknown key "add_C"; the nearest known one is "added_C"',
        ),
        (
            "gas-lamp",
            "gaslamp",
            'line 2, circuit: unknown circuit "gaslamp"; the nearest known one is "gas-lamp"',
        ),
    ],
)
def test_unknown_words_name_the_nearest_known_one(old, new, expected):
    """File, line, key, and what was probably meant."""
    assert expected in refusal(LAMP.replace(old, new, 1))


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ('"1M1 5%"', '"1x1"', 'line 10, parts.R: "1x1" is not a value in Ω; write a number in Ω'),
        ('"1M1 5%"', "[1]", "parts.R: found a list where a value was expected"),
        ('"1M1 5%"', "true", "parts.R: True is not a value in Ω"),
        ('"1M1 5%"', "nan", "parts.R: nan is not a value in Ω (the value must be finite)"),
        ('"1M1 5%"', '"-1M1 5%"', 'parts.R: "-1M1 5%" must lie above 0'),
        ('"120n 10%"', '"120n 100%"', 'parts.C: "120n 100%" must lie above 0, its lower limit included'),
        ('"125 V 2%"', '"none"', 'parts.supply: "none" is for optional parts, and supply (supply) is needed'),
        ('"12 Hz"', '"0 Hz"', 'target.frequency: "0 Hz" must lie above 0'),
        (
            'frequency = "12 Hz"',
            'frequency = "12 Hz"\nperiod = "83 ms"',
            "target.period: give either the frequency or the period",
        ),
        ('"97 %"', "97", "target.duty: 97 is no duty cycle; write a fraction between 0 and 1"),
        ('"97 %"', '"100 %"', 'target.duty: "100 %" is no duty cycle'),
        (
            'coupling = "ac"',
            'coupling = "gnd"',
            'channels.capacitor.coupling: found "gnd" where "dc" or "ac" was expected',
        ),
        ('name = "CH2", ', "", "channels.capacitor: name the channel"),
        (
            "scaled = false",
            'scaled = "no"',
            'probe.capacitor.scaled: found "no" where true or false was expected',
        ),
        ("ratio = 10", "", "probe.capacitor: scaled = false needs the ratio"),
        ('"2%"', '"-2%"', 'scope.gain: "-2%" must be one limit that is not negative'),
        ('title = "Mast beacon flasher"', "title = true", "title: found true where a text was expected"),
        ('title = "Mast beacon flasher"', "title = [3]", "title: found a list where a text was expected"),
        ("[capture.2]", "[capture.0]", 'capture.0: "0" is no number of a capture'),
        ("[capture.2]", "[capture.two]", 'capture.two: "two" is no number of a capture'),
        ('supply = "119 V 0.2%"', 'supply = "none"', 'capture.2.supply: "none" is for optional parts'),
        (
            'V_strike = "90 V 8%"\n',
            "",
            "lamp.toml, line 8, parts: circuit gas-lamp also needs V_strike; add it to [parts]",
        ),
    ],
)
def test_values_that_cannot_be_are_refused(old, new, expected):
    """One clear sentence with file and key for each."""
    assert old in LAMP
    assert expected in refusal(LAMP.replace(old, new, 1))


def test_missing_parts_are_named_together():
    """A sheet with just a circuit says everything that it lacks at once."""
    says = refusal('circuit = "gas-lamp"')
    assert says == (
        "lamp.toml, parts: circuit gas-lamp also needs supply, R, C, V_strike and V_extinguish; "
        "add them to [parts]"
    )


def test_alternatives():
    """One of the sets is needed, not two of them, and none in part."""
    assert "also needs R (or R_charge and R_discharge)" in refusal(AMPLIFIER)
    assert "also needs R_discharge;" in refusal(AMPLIFIER + 'R_charge = "1k"')
    says = refusal(AMPLIFIER + 'R = "1k"\nR_charge = "1k"')
    assert "parts.R_charge: give R or R_charge, R_discharge and V_diode, not both" in says
    one = Sheet.parse(AMPLIFIER + 'R = "1k"').build()
    assert {"R_charge", "R_discharge", "V_diode"} <= one.absent
    two = Sheet.parse(AMPLIFIER + 'R_charge = "1k"\nR_discharge = "2k"').build()
    assert "R" in two.absent
    assert two.parts["V_diode"].nominal == 0.6


def test_parts_without_a_circuit_say_why():
    """Only where there are any."""
    assert "parts.R: parts are parts of a circuit; say which with circuit" in refusal('[parts]\nR = "1k"')
    assert "readings.R: a reading of a part needs the circuit" in refusal('[readings]\nR = "1k"')
    assert Sheet.parse("[parts]").parts == {}


def test_a_reading_of_what_is_not_there():
    """A sheet that contradicts itself is refused."""
    assert 'R_pull was read, yet parts.R_pull = "none"' in refusal(
        AMPLIFIER + 'R = "1k"\nR_pull = "none"\n[readings]\nR_pull = "1k"'
    )


def test_one_channel_for_two_nodes_is_refused():
    """A channel has one node."""
    text = AMPLIFIER + 'R = "1k"\n[channels]\ncapacitor = "CH1"\noutput = "CH1"'
    assert "channels.output: CH1 is the channel of capacitor already" in refusal(text)


def test_other_names_of_nodes():
    """``output`` and ``capacitor`` stand for nodes that a circuit calls otherwise, once each."""
    example = circuits.get("two-transistor").example
    head = 'circuit = "two-transistor"\n[parts]\n' + "".join(f'{k} = "{v}"\n' for k, v in example.items())
    sheet = Sheet.parse(head + '[channels]\noutput = "CH2"\ncapacitor = "CH1"')
    names = {node: choice.name for node, choice in sheet.channels.items()}
    assert names == {"collector1": "CH2", "base1": "CH1"}
    assert "is another name of collector1" in refusal(head + '[channels]\ncollector1 = "CH2"\noutput = "CH1"')


def test_overrides():
    """One dotted key each; they win over the file, and an error names them."""
    sheet = Sheet.parse(
        LAMP,
        [
            "parts.R=1M",
            "target.duty=0.9",
            "record.unit=0018",
            "capture.2.supply=120 V",
            "scope.gain=1%",
        ],
    )
    assert sheet.parts["R"].nominal == 1e6
    assert sheet.target_duty is not None
    assert sheet.target_duty.nominal == 0.9
    assert sheet.record["unit"] == "0018"
    assert sheet.captures[2].parts["supply"].nominal == 120
    assert sheet.scope.gain == 0.01
    assert refusal(LAMP, "parts.Rx=1M").startswith('--set parts.Rx: unknown key "Rx"')
    assert refusal(LAMP, "parts.R=1 V").startswith('--set parts.R: "1 V" is not a value in Ω')
    assert "write it as dotted.key=value" in refusal(LAMP, "parts.R")
    assert "title holds a value" in refusal(LAMP, "title.R=1")


def test_overrides_alone_are_a_sheet():
    """Values with the meaning that TOML gives them: numbers, truth values, tables, quoted texts."""
    sheet = Sheet.load(
        None,
        [
            "circuit=gas-lamp",
            "parts.supply=125",
            'parts.R="1M 5%"',
            "parts.C=100n",
            "parts.V_strike=90 V",
            "parts.V_extinguish=60",
            "probe.capacitor.scaled=false",
            "probe.capacitor.ratio=10",
            'channels.capacitor={name="CH2",coupling="ac"}',
            "title=1999",
            "record.date=2026-12-01",
        ],
    )
    assert sheet.parts["R"].nominal == 1e6
    assert sheet.probes["capacitor"].scale == 10
    assert sheet.channels["capacitor"].coupling == "ac"
    assert sheet.title == "1999"
    assert sheet.record["date"] == "2026-12-01"
    with pytest.raises(SheetError, match="also needs supply, R, C"):
        Sheet.load(None, ["circuit=gas-lamp"])


def test_a_bare_number_is_a_text_where_one_is_expected():
    """A channel may be called 1, with or without quotes, in the file and on the command line."""
    channels = "[channels]\ncapacitor = 1\noutput = { name = 2 }\n"
    sheet = Sheet.parse(f"title = 1999\n{AMPLIFIER}R = 1e3\n{channels}[record]\nunit = 17\n")
    assert (sheet.title, sheet.record["unit"]) == ("1999", "17")
    assert [sheet.channels[node].name for node in ("capacitor", "output")] == ["1", "2"]
    assert Sheet.parse(sheet.dump()).channels == sheet.channels
    for text in ("1", "'1'", '"1"'):
        assert Sheet.parse(LAMP, [f"channels.capacitor={text}"]).channels["capacitor"].name == "1"
    assert Sheet.parse(LAMP, ["channels.capacitor=01"]).channels["capacitor"].name == "01"
    assert Sheet.parse(LAMP, ["channels.capacitor.name=1"]).channels["capacitor"].name == "1"
    assert Sheet.parse(LAMP, ["capture.2.channels.capacitor=2"]).captures[2].channels["capacitor"].name == "2"
    assert "channels.capacitor: found true where a text" in refusal(
        LAMP.replace('capacitor = "CH1"', "capacitor = true")
    )


def test_files(tmp_path):
    """A byte-order mark is no matter; what is not there, not text or not TOML says so with its file."""
    path = tmp_path / "lamp.toml"
    path.write_bytes(b"\xef\xbb\xbf" + LAMP.encode())
    assert Sheet.load(path).path == str(path)
    with pytest.raises(SheetError, match=r"nowhere\.toml: the build sheet cannot be read: No such file"):
        Sheet.load(tmp_path / "nowhere.toml")
    path.write_bytes(b"title = '\xff'")
    with pytest.raises(SheetError, match=r"lamp\.toml: the build sheet is not UTF-8 text \(byte 9\)"):
        Sheet.load(path)
    path.write_text("title = \n")
    with pytest.raises(SheetError, match=r"lamp\.toml: this is not TOML: invalid value \(at line 1"):
        Sheet.load(path)


def test_the_build_fills_in_the_defaults():
    """Defaults with their tolerances, those that follow other parts evaluated at the nominals."""
    build = Sheet.parse(LAMP).build()
    assert build.given == {"supply", "R", "C", "V_strike", "V_extinguish"}
    maintain = build.parts["V_maintain"]
    assert (maintain.low, maintain.nominal, maintain.high) == (52, 55, 58)
    assert build.spreads["V_maintain"].down == 3
    lamp = build.parts["r_lamp"]
    assert (lamp.low, lamp.nominal, lamp.high) == pytest.approx((2e3, 5e3, 8e3))
    assert not lamp.stated
    assert "R_leak" in build.parasitics
    assert "R_leak" not in build.parts
    with_leak = Sheet.parse(LAMP, ["parts.R_leak=10M", "parts.C_stray=none"]).build()
    assert with_leak.parts["R_leak"].nominal == 1e7
    assert "R_leak" not in with_leak.parasitics
    assert "C_stray" in with_leak.absent
    assert "C_stray" not in with_leak.parasitics
    with pytest.raises(SheetError, match="the circuit is missing"):
        Sheet.parse("").build()


@pytest.mark.parametrize("name", circuits.names())
def test_every_circuit_has_a_build_that_stands(name):
    """The example parts alone make a sheet; every part of the circuit is there, absent, or a parasitic."""
    circuit = circuits.get(name)
    parts = [f"parts.{key}={text}" for key, text in circuit.example.items()]
    build = Sheet.load(None, [f"circuit={name}", *parts]).build()
    assert set(build.parts) | build.absent | set(build.parasitics) == {part.name for part in circuit.parts}
    assert not set(build.parts) & build.absent
    for part in build.parts.values():
        assert part.low <= part.nominal <= part.high


def test_a_dumped_sheet_says_the_same():
    """Text → sheet → text → sheet; overrides are in the text; pickling keeps it all."""
    sheet = Sheet.parse(LAMP, ['record.note=a "quoted" \\ and\ttabbed line'])
    again = Sheet.parse(sheet.dump())
    assert again.source == sheet.source
    assert again.parts == sheet.parts
    assert again.captures == sheet.captures
    assert again.digest == sheet.digest
    assert pickle.loads(pickle.dumps(sheet)).digest == sheet.digest


def test_the_digest_goes_by_what_is_said():
    """Comments, layout and order do not count; any value does."""
    plain = Sheet.parse("title = 'a'\n[record]\nx = '1'\ny = '2'")
    assert Sheet.parse("# hello\ntitle='a'\n\n[record]\ny='2'\nx='1'").digest == plain.digest
    assert Sheet.parse("title = 'a'\n[record]\nx = '1'\ny = '3'").digest != plain.digest


@given(st.dictionaries(st.text(min_size=1, max_size=6), st.text(max_size=20), max_size=4))
def test_any_text_survives_the_dump(record):
    """Free text of any kind, under any key, comes back as it was."""
    import tomllib

    assert tomllib.loads(dump({"record": record}))["record"] == record


@given(
    st.integers(0, len(LAMP) - 1),
    st.integers(0, 9),
    st.text(st.sampled_from("\"'[]{}=.,\n #aR1-%µ"), max_size=4),
)
def test_a_damaged_sheet_is_read_or_refused(at, length, instead):
    """Whatever a slip of the pen does to a sheet, it is a sheet still or a SheetError, never another
    error."""
    try:
        sheet = Sheet.parse(LAMP[:at] + instead + LAMP[at + length :])
        if sheet.circuit is not None:
            sheet.build()
    except SheetError:
        return
    assert Sheet.parse(sheet.dump()).digest == sheet.digest


@given(
    st.lists(
        st.sampled_from(["parts", "R", "target", "capture", "2", "probe", "capacitor", "scope", "title"]),
        max_size=4,
    ),
    st.text(st.sampled_from("0123456789kM%V \"'{}=[]none."), max_size=8),
)
def test_any_override_is_taken_or_refused(words, value):
    """No override breaks more than itself."""
    says = ""
    try:
        Sheet.parse(LAMP, [f"{'.'.join(words)}={value}"])
    except SheetError as error:
        says = error.says
    assert not says or says.startswith("--set")
