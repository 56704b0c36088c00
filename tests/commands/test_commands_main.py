"""The command line: which words do what, where output goes, with which status it ends."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from benchfit.commands.main import COMMANDS, main
from benchfit.commands.options import Parser

SHEET = 'title = "x"\n[target]\nfrequency = "1 kHz 5%"\n'


def said(capsys: pytest.CaptureFixture[str]) -> tuple[str, str]:
    out, err = capsys.readouterr()
    return out, err


def one_sentence(err: str) -> str:
    """Standard error holds one line, and no traceback."""
    assert err.startswith("benchfit: ")
    assert err.count("\n") == 1, err
    assert "Traceback" not in err
    return err.removeprefix("benchfit: ").rstrip("\n")


def test_help_lists_every_command(capsys):
    """One line each, and the main job's options."""
    assert main(["--help"]) == 0
    out, err = said(capsys)
    assert err == ""
    for name, (_, says) in COMMANDS.items():
        assert f"benchfit {name}" in out
        assert says in out
    for option in (
        "--build",
        "--with",
        "--joint",
        "--json",
        "--csv",
        "--plot",
        "--report",
        "--columns",
        "--interval",
        "--frame",
        "--jobs",
        "--cluster",
        "--check",
        "--set",
        "--version",
        "-v",
        "-q",
    ):
        assert option in out


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        ([], "name a capture file, or a command"),
        (["x.csv", "--biuld", "s"], "unknown option --biuld, the nearest known one is --build"),
        (["x.csv", "--plto=x.png"], "unknown option --plto=x.png, the nearest known one is --plot"),
        (["x.csv", "--build"], "argument --build: expected one argument"),
        (["predct", "s.toml"], 'predct: neither a file nor a command; the nearest command is "predict"'),
        (["help"], "help: benchfit --help lists what can be given"),
        (["a.csv", "s.toml"], "s.toml: this is no capture by its name; a build sheet goes behind --build"),
        (["--with", "b.csv"], "--with adds a file to the capture named before it, and there is none"),
        (["a.csv", "--with"], "--with needs the name of a file after it"),
        (["a.csv", "--columns", "time"], '--columns time: "time" is not NAME=N'),
        (["a.csv", "--columns", "time=0,time=1"], "time is given twice"),
        (["a.csv", "--interval", "1 kHz"], '--interval: "1 kHz" is not a value in s'),
        (["a.csv", "--interval=-1us"], "the time between samples must be above 0"),
        (["a.csv", "--frame", "0"], "--frame 0: frames are counted from 1"),
        (["a.csv", "--jobs", "0"], "--jobs 0: at least one process is needed"),
        (["a.csv", "--jobs", "two"], "argument --jobs: invalid int value: 'two'"),
        (["a.csv", "--plot", "x.bmp"], "--plot x.bmp: the name must end in one of .png, .svg, .pdf"),
        (["a.csv", "--plot", "nowhere/x.png"], "nowhere/x.png: there is no folder nowhere to write into"),
        (["a.csv", "--json", "-", "--csv", "-"], "--json - and --csv - both want standard output"),
        (["a.csv", "--report", "-"], "--report -: give the name of a file"),
        (["a.csv", "--build", "nowhere.toml"], "nowhere.toml: the build sheet cannot be read"),
        (["a.csv", "--set", "circuit=nothing"], '--set circuit: unknown circuit "nothing"'),
        (["-", "-"], "standard input (-) can be read once only"),
        (["lot/*.csv"], "lot/*.csv: no file has a name like this"),
        (["circuits", "nothing"], 'unknown circuit "nothing"'),
        (["circuits", "x", "y"], "there is no place for y"),
        (["predict"], "name the build sheet"),
        (["predict", "nowhere.toml"], "nowhere.toml: the build sheet cannot be read"),
        (["sheet"], "the following arguments are required: CIRCUIT"),
        (["sheet", "opamp"], 'the nearest known one is "op-amp"'),
    ],
)  # fmt: skip
def test_a_command_line_that_cannot_be_used(asked, capsys, words, expected):
    """Status 2 and one sentence that says what was found and what to do."""
    assert main(words) == 2
    out, err = said(capsys)
    assert out == ""
    assert expected in one_sentence(err)
    assert asked.captures == []


def test_options_may_stand_anywhere(asked, capsys):
    """Captures and options mix; -- ends the options."""
    Path("s.toml").write_text(SHEET)
    assert main(["--build", "s.toml", "a.csv", "-q", "b.csv", "--interval=1us", "--", "-c.csv"]) == 0
    assert asked.captures == [["a.csv"], ["b.csv"], ["-c.csv"]]
    assert asked.layouts == [{"interval": 1e-6}] * 3
    assert all(sheet.title == "x" for sheet in asked.sheets)


def test_with_belongs_to_the_capture_before_it(asked, capsys):
    """Each capture has the files that were named after it."""
    assert main(["a1.csv", "--with", "a2.csv", "--with=a3.csv", "b1.csv", "-q", "--with", "b2.csv"]) == 0
    assert asked.files == [["a1.csv", "a2.csv", "a3.csv"], ["b1.csv", "b2.csv"]]


def test_layout_options(asked, capsys):
    """What a file does not tell reaches the reader in its own terms."""
    assert main(["a.csv", "--columns", "time=0, CH1=Volt", "--frame", "2"]) == 0
    assert asked.layouts == [{"columns": {"time": 0, "CH1": "Volt"}, "frame": 2}]


def test_patterns_are_expanded(asked, capsys):
    """Where the shell has left them alone, in order; a file of that very name comes first."""
    for name in ("b.csv", "a.csv", "[x].csv"):
        Path(name).write_text("")
    assert main(["?.csv", "[x].csv"]) == 0
    assert asked.captures == [["a.csv"], ["b.csv"], ["[x].csv"]]


def test_joint(asked, capsys):
    """Several captures become one explanation, and [capture.N] counts only then."""
    Path("s.toml").write_text(SHEET + '[capture.2]\nadded_C = "1n 1%"\n')
    assert main(["a.csv", "b.csv", "--joint", "--build", "s.toml", "--json", "-"]) == 0
    assert asked.captures == [["a.csv", "b.csv"]]
    record = json.loads(said(capsys)[0])
    assert [capture["path"] for capture in record["capture"]] == ["a.csv", "b.csv"]
    assert main(["a.csv", "b.csv", "--build", "s.toml"]) == 2
    assert "[capture.2] counts only with --joint" in one_sentence(said(capsys)[1])
    assert main(["a.csv", "--joint", "--build", "s.toml"]) == 2
    assert "has [capture.2], yet 1 are given" in one_sentence(said(capsys)[1])
    assert main(["a.csv", "--build", "s.toml"]) == 0


def test_text_goes_to_standard_output(asked, capsys):
    """The report, plain where it is no terminal."""
    assert main(["a.csv"]) == 0
    out, err = said(capsys)
    assert err == ""
    assert "\x1b" not in out
    assert "1.2345 ± 0.0010 kHz" in out


def test_json_alone_on_standard_output(asked, capsys):
    """One object per line, in order, failures in their place; nothing else is printed there."""
    assert main(["a.csv", "missing.csv", "b.csv", "--json", "-"]) == 3
    out, err = said(capsys)
    records = [json.loads(line) for line in out.splitlines()]
    assert [record["capture"]["path"] for record in records] == ["a.csv", "missing.csv", "b.csv"]
    assert records[1] == {
        "schema": 1,
        "capture": {"path": "missing.csv"},
        "error": {"status": 3, "says": "missing.csv: there is no such file"},
    }
    assert records[0]["schema"] == 1
    assert records[0]["measured"]["frequency"] == {"value": 1234.5, "u": 0.5, "unit": "Hz", "u_noise": 0.1}
    assert one_sentence(err) == "missing.csv: there is no such file"


def test_the_rest_are_still_done(asked, capsys):
    """The status is that of the first failure."""
    assert main(["missing1.csv", "a.csv", "missing2.csv"]) == 3
    out, err = said(capsys)
    assert "a.csv" in out
    assert [line.split(":")[1].strip() for line in err.splitlines()] == ["missing1.csv", "missing2.csv"]


def test_files_are_written_in_one_step(asked, capsys):
    """JSON, CSV and plot; what was there before is replaced, and nothing is left beside them."""
    for name in ("r.json", "t.csv", "p.svg"):
        Path(name).write_text("before")
    assert main(["a.csv", "--json", "r.json", "--csv", "t.csv", "--plot", "p.svg"]) == 0
    assert json.loads(Path("r.json").read_text())["schema"] == 1
    assert Path("p.svg").read_text() == "a drawing"
    header, row = Path("t.csv").read_text().splitlines()
    cells = dict(zip(header.split(","), row.split(","), strict=True))
    assert (cells["capture"], cells["status"], cells["frequency"], cells["frequency_u"]) == (
        "a.csv",
        "0",
        "1234.5",
        "0.5",
    )
    assert (cells["suspect"], cells["suspect_probability"], cells["verdict"]) == ("R", "0.95", "pass")
    assert sorted(path.name for path in Path().iterdir()) == ["p.svg", "r.json", "t.csv"]
    assert "a.csv" in said(capsys)[0]


def test_a_table_of_good_and_bad(asked, capsys):
    """One row per capture, the failed ones with status and sentence."""
    assert main(["a.csv", "missing.csv", "--csv", "-"]) == 3
    header, good, bad = said(capsys)[0].splitlines()
    assert header.startswith("capture,")
    assert good.startswith("a.csv,")
    assert bad.startswith("missing.csv,")
    assert bad.endswith("missing.csv: there is no such file")


@pytest.mark.parametrize(("verdict", "status"), [("pass", 0), (None, 0), ("conditional", 1), ("fail", 1)])
def test_check(asked, capsys, verdict, status):
    """1 with --check alone; without it a verdict is a result. A failure's status comes first."""
    asked.verdict = verdict
    assert main(["a.csv", "--check"]) == status
    assert main(["a.csv"]) == 0
    assert main(["a.csv", "missing.csv", "--check"]) == 3


def test_a_fault_of_ours_is_one_sentence(asked, capsys):
    """It asks to be reported; -v shows where it was."""
    asked.fault = ZeroDivisionError("float division by zero")
    assert main(["a.csv"]) == 3
    says = one_sentence(said(capsys)[1])
    assert says.startswith("a.csv: a fault in benchfit itself (ZeroDivisionError: float division by zero)")
    assert "please report it" in says
    assert main(["a.csv", "-v"]) == 3
    assert "Traceback" in said(capsys)[1]


def test_a_fault_elsewhere_is_one_sentence(monkeypatch, capsys):
    """Whatever a command does, no traceback reaches the user."""
    monkeypatch.setattr("benchfit.circuits.names", lambda: 1 / 0)
    assert main(["circuits"]) == 2
    assert "a fault in benchfit itself" in one_sentence(said(capsys)[1])


def test_ctrl_c(monkeypatch, capsys):
    """Interrupted is said, without a traceback."""

    def names() -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("benchfit.circuits.names", names)
    assert main(["circuits"]) == 130
    assert one_sentence(said(capsys)[1]) == "interrupted"


def test_verbose_says_how_a_file_was_understood(asked, capsys):
    """On standard error."""
    assert main(["a.csv", "-v"]) == 0
    assert "benchfit: a.csv: delimiter: comma\n" in said(capsys)[1]
    assert main(["-v", "a.csv", "-q"]) == 0
    assert said(capsys)[1] == ""


def test_overrides_need_no_sheet(asked, capsys):
    """--set alone stands in for one."""
    assert main(["a.csv", "--set", "target.frequency=12 Hz", "--set", "title=y"]) == 0
    sheet = asked.sheets[0]
    assert sheet.title == "y"
    assert sheet.target_frequency.nominal == 12
    assert main(["a.csv"]) == 0
    assert asked.sheets[1] is None


def test_what_cannot_be_written_is_said_before_the_work(asked, capsys):
    """A folder is no file."""
    Path("out.json").mkdir()
    assert main(["a.csv", "--json", "out.json"]) == 2
    assert "out.json: this is a folder" in one_sentence(said(capsys)[1])
    assert asked.captures == []


def test_a_device_is_written_to_and_stays(asked, capsys):
    """Replacing /dev/null with a file would be a disservice."""
    device = Path("/dev/null")
    if not device.exists():
        pytest.skip("no /dev/null here")
    assert main(["a.csv", "--json", str(device)]) == 0
    assert not device.is_file()


def test_no_option_is_abbreviated(capsys):
    """A new option must never change what an old command line means."""
    assert main(["x.csv", "--buil", "s.toml"]) == 2
    assert "the nearest known one is --build" in one_sentence(said(capsys)[1])
    assert Parser(prog="x").allow_abbrev is False
