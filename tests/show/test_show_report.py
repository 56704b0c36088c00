"""The page: whole in itself, in order, text from files stays text; a browser looks where there is one."""

from __future__ import annotations

import dataclasses
import html
import json
import re
import shutil
import subprocess
from functools import cache
from html.parser import HTMLParser
from pathlib import Path

import pytest
from show_examples import ALL, as_left, fault_settled, healthy, hostile, no_oscillation, waveform

from benchfit.capture.model import Capture
from benchfit.cycle.constants import CycleConstants
from benchfit.errors import UsageError
from benchfit.show.report import page, report

TIMER = {"lower": 1.661, "upper": 3.352, "asymptotes": (5.01, 0.052), "taus": (0.0573, 0.0222)}
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
browser = pytest.mark.skipif(CHROMIUM is None, reason="no chromium on this machine to look at the page")

VOID = {"meta", "link", "img", "br", "hr", "input", "area", "base", "col", "embed", "source", "track", "wbr"}


class Outline(HTMLParser):
    """Headings, ids, references, unlabelled drawings and columns, and elements that do not nest."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.headings: list[int] = []
        self.ids: list[str] = []
        self.references: list[str] = []
        self.outside: list[str] = []
        self.tags: set[str] = set()
        self.unlabelled: list[str] = []
        self.problems: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = dict(attrs)
        self.tags.add(tag)
        if tag not in VOID:
            self.open.append(tag)
        self._note(tag, given)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.add(tag)
        self._note(tag, dict(attrs))

    def _note(self, tag: str, given: dict[str, str | None]) -> None:
        if re.fullmatch(r"h[1-6]", tag):
            self.headings.append(int(tag[1]))
        if given.get("id"):
            self.ids.append(str(given["id"]))
        if tag == "svg" and not (given.get("role") == "img" and given.get("aria-labelledby")):
            self.unlabelled.append(tag)
        if tag == "th" and not given.get("scope"):
            self.unlabelled.append(tag)
        for name, value in given.items():
            if name in ("href", "xlink:href", "src") and value:
                (self.references if value.startswith("#") else self.outside).append(value)
            if name.startswith("on"):
                self.problems.append(f"{tag} {name}")

    def handle_endtag(self, tag: str) -> None:
        if tag in VOID:
            return
        if not self.open or self.open.pop() != tag:
            self.problems.append(f"</{tag}> closes nothing")


def outline(text: str) -> Outline:
    parser = Outline()
    parser.feed(text)
    parser.close()
    return parser


@cache
def made(name: str) -> str:
    capture, constants = waveform(**TIMER, samples=400, output=(0.12, 3.71))
    if name == "hostile":
        capture, constants = hostile_capture()
    return page(ALL[name](), constants, capture)


def hostile_capture() -> tuple[Capture, CycleConstants]:
    capture, constants = waveform(**TIMER, samples=400)
    first = dataclasses.replace(capture.channels[0], name="<img src=x onerror=alert(1)>")
    return dataclasses.replace(capture, channels=(first,)), constants


@pytest.mark.parametrize("name", ["fault_settled", "probe_loads", "no_oscillation", "no_sheet", "hostile"])
def test_a_page_is_sound_and_whole_in_itself(name: str) -> None:
    """Elements nest, headings descend by one, ids are unique and found, drawings and columns are labelled,
    and nothing outside the page is named."""
    found = outline(made(name))
    assert not found.problems
    assert not found.open
    assert found.headings[0] == 1
    assert found.headings.count(1) == 1
    assert all(b - a <= 1 for a, b in zip(found.headings, found.headings[1:], strict=False))
    assert len(found.ids) == len(set(found.ids))
    assert {r[1:] for r in found.references} <= set(found.ids)
    assert not found.unlabelled
    assert found.outside == ["data:,"]
    assert "script" not in found.tags


def test_text_from_files_stays_text() -> None:
    text = made("hostile")
    found = outline(text)
    assert not found.tags & {"script", "img", "b", "u"}
    assert not re.search(r"[\x00-\x08\x0b-\x1f\x7f]", text)
    shown = html.unescape(re.sub(r"<[^>]+>", "", text))
    assert "<script>alert('x')</script>" in shown
    assert "<img src=x onerror=alert(1)>" in shown
    assert "{{ 7*7 }}" in shown


def test_everything_that_was_found_is_on_the_page() -> None:
    """Identity, set-up, figures with U, verdict and rule, budget, suspects, ruled out, parts, remedies."""
    shown = html.unescape(re.sub(r"<[^>]+>", " ", made("fault_settled"))).replace("\N{NO-BREAK SPACE}", " ")
    shown = " ".join(shown.split())
    for text in (
        "Greenhouse fan chopper", "unit 0017", "ambient 23 °C", "timer-555", "greenhouse fan 0017.csv",
        "5000 samples every 100 µs", "17.920 ± 0.011 Hz", "To blame, 98 % sure: RA and RB are exchanged",
        "JCGM 106", "RB +29.4 0.8", "miss +12.0", "What speaks against it C the charging time has not moved",
        "+49.1 %, outside", "RA 32.8 kΩ → 22 kΩ (E24), with RB 22.3 kΩ → 33 kΩ (E24) 16.41 ± 0.39 Hz",
    ):  # fmt: skip
        assert text in shown, text


def test_cautions_stand_before_the_figures() -> None:
    text = made("probe_loads")
    assert text.index('role="note"') < text.index("<h2>")
    assert "qualified person" in text


def test_as_left_stands_beside_as_found() -> None:
    text = page(as_left(), acquired="2031-05-04T10:00:00Z")
    for state, frequency in (("as found", "39.170"), ("predicted", "47.90"), ("as left", "47.620")):
        (row,) = re.findall(rf'<tr><th scope="row">{state}</th>(.*?)</tr>', text)
        assert frequency in row
    assert "The change did it: as left is as predicted." in text
    assert text.index("What the change did") < text.index("<h2>As left</h2>")
    assert "2031-05-04T10:00:00Z" in text
    assert "What the change did" not in page(healthy())


def test_a_page_without_a_capture_has_no_waveforms() -> None:
    text = page(no_oscillation())
    assert "<svg" not in text
    assert "does not oscillate" in text


def test_the_file_appears_whole_or_not_at_all(tmp_path: Path) -> None:
    path = tmp_path / "a report.html"
    report(no_oscillation(), None, None, path)
    assert path.read_text(encoding="utf-8").rstrip().endswith("</html>")
    assert [p.name for p in tmp_path.iterdir()] == ["a report.html"]
    with pytest.raises(UsageError, match="cannot be written"):
        report(no_oscillation(), None, None, tmp_path / "no such folder" / "a.html")


def chromium(folder: Path, page_path: Path, *options: str) -> subprocess.CompletedProcess[str]:
    assert CHROMIUM is not None
    command = [
        CHROMIUM, "--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars", "--no-first-run",
        "--disable-background-networking", "--disable-component-update", "--enable-logging=stderr",
        f"--user-data-dir={folder / 'profile'}", *options, page_path.as_uri(),
    ]  # fmt: skip
    return subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)


@browser
def test_a_browser_finds_no_error_and_asks_for_nothing(tmp_path: Path) -> None:
    """Hostile texts run nothing: the title is as given, the console is silent, no request leaves the page."""
    capture, constants = hostile_capture()
    base = hostile()
    notes = {**base.record_notes, "logo": "http://page.invalid/logo.png"}
    path, log = tmp_path / "page.html", tmp_path / "net.json"
    report(dataclasses.replace(base, record_notes=notes), constants, capture, path)
    done = chromium(tmp_path, path, "--dump-dom", f"--log-net-log={log}")
    assert "<title>&lt;/title&gt;&lt;script&gt;" in done.stdout
    assert "</html>" in done.stdout
    assert "CONSOLE" not in done.stderr
    assert "http://page.invalid" in done.stdout
    asked = [json.dumps(e) for e in json.loads(log.read_text(encoding="utf-8"))["events"]]
    assert not any("page.invalid" in event for event in asked)


@browser
@pytest.mark.long
@pytest.mark.parametrize(("width", "dark"), [(1200, False), (390, False), (1200, True)])
def test_a_browser_draws_the_page_light_dark_and_narrow(width: int, dark: bool, tmp_path: Path) -> None:
    """The picture's corner is the page's paper in either scheme, and nothing juts out of a phone's width."""
    from PIL import Image

    capture, constants = waveform(**TIMER, samples=2000, output=(0.12, 3.71))
    path, shot = tmp_path / "page.html", tmp_path / "shot.png"
    report(fault_settled(), constants, capture, path)
    scheme = ["--blink-settings=preferredColorScheme=0"] if dark else []
    chromium(tmp_path, path, f"--screenshot={shot}", f"--window-size={width},3000", *scheme)
    picture = Image.open(shot).convert("L")
    assert picture.size == (width, 3000)
    paper = picture.getpixel((2, 2))
    assert paper < 40 if dark else paper > 230  # type: ignore[operator]
    edge = picture.crop((width - 6, 0, width, 3000))
    low, high = edge.getextrema()  # type: ignore[misc]
    assert high - low < 30  # type: ignore[operator]


@browser
@pytest.mark.long
@pytest.mark.skipif(shutil.which("pdftotext") is None, reason="no pdftotext to read the printed page")
def test_no_table_is_cut_in_print(tmp_path: Path) -> None:
    """On A4, the heading row and the last row of every table stand on one sheet."""
    capture, constants = waveform(**TIMER, samples=2000, output=(0.12, 3.71))
    path, sheet = tmp_path / "page.html", tmp_path / "page.pdf"
    report(dataclasses.replace(fault_settled(), as_found=as_left().as_found), constants, capture, path)
    chromium(tmp_path, path, "--no-pdf-header-footer", f"--print-to-pdf={sheet}")
    text = subprocess.run(
        ["pdftotext", "-layout", str(sheet), "-"], capture_output=True, text=True, check=True
    )
    pages = [" ".join(p.split()).replace("\N{NO-BREAK SPACE}", " ") for p in text.stdout.split("\f")]
    assert len(pages) > 2
    for head, foot in (
        ("Quantity Built Target Miss", "output low level"),
        ("Miss budget of the frequency", "miss +12.0"),
        ("Miss budget of the duty cycle", "miss +13.0"),
        ("Part Nominal Limits", "k_lower"),
        ("State Frequency Duty cycle", "as left"),
        ("Cause Probability", "nothing off"),
    ):
        assert any(head in p and foot in p[p.index(head) :] for p in pages), head
