"""A figure as SVG inside a page: its colours follow the page's light or dark, its ids are its own."""

from __future__ import annotations

import html
import io
import re
from typing import TYPE_CHECKING

from benchfit.show.palette import DARK, LIGHT

if TYPE_CHECKING:
    from matplotlib.figure import Figure


def inline_svg(figure: Figure, name: str, title: str, says: str) -> str:
    """The figure as one ``<svg>`` element; ``title`` and ``says`` are its accessible name and description.

    Its colours are the page's custom properties (``--ink``, ``--data``, …), its ids begin with ``name``:
    several figures may stand in one page. Text stays text; coordinates are rounded to 0.01 point.
    """
    import matplotlib as mpl

    out = io.StringIO()
    with mpl.rc_context({"svg.fonttype": "none", "svg.hashsalt": name}):
        figure.savefig(out, format="svg", transparent=True, metadata={"Date": None, "Creator": None})
    text = out.getvalue()
    text = text[text.index("<svg ") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, count=1, flags=re.S)
    text = re.sub(r'(?<= d=")[^"]+', lambda d: _rounded(d[0]), text)
    text = re.sub(r'(?<= [xy]=")-?\d+\.\d+(?=")', lambda number: _rounded(number[0]), text)
    text = re.sub(r'(<g clip-path="[^"]*")>((?:\s*<use [^>]*/>)+)', _shared_style, text)
    for role, colour in LIGHT.items():
        text = text.replace(colour, f"var(--{role})")
    text = re.sub(r'\bid="([^"]+)"', rf'id="{name}-\1"', text)
    text = re.sub(r'href="#([^"]+)"', rf'href="#{name}-\1"', text)
    text = re.sub(r"url\(#([^)]+)\)", rf"url(#{name}-\1)", text)
    text = re.sub(r'(<svg [^>]*?) width="[^"]*"', r"\1", text, count=1)
    text = re.sub(r'(<svg [^>]*?) height="[^"]*"', r"\1", text, count=1)
    head = f'<svg role="img" aria-labelledby="{name}-name {name}-says" '
    label = f'<title id="{name}-name">{html.escape(title)}</title>'
    label += f'<desc id="{name}-says">{html.escape(says)}</desc>'
    text = text.replace("<svg ", head, 1)
    end = text.index(">") + 1
    return text[:end] + label + text[end:].strip()


def _shared_style(dots: re.Match[str]) -> str:
    """The style that all dots of a group have, said once by the group."""
    styles = set(re.findall(r' style="([^"]*)"', dots[2]))
    if len(styles) != 1:
        return dots[0]
    bare = re.sub(r' style="[^"]*"', "", dots[2])
    return f'{dots[1]} style="{styles.pop()}">{bare}'


def _rounded(text: str) -> str:
    """Decimal numbers in a text, to two decimals."""
    return re.sub(r"-?\d+\.\d+", lambda n: f"{float(n[0]):.2f}".rstrip("0").rstrip("."), text)


def custom_properties() -> tuple[str, str]:
    """The roles of the palette as CSS declarations, light and dark."""
    light, dark = ("".join(f"--{role}:{colour};" for role, colour in p.items()) for p in (LIGHT, DARK))
    return light, dark
