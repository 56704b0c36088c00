"""A commented starter build sheet on standard output, which runs as it stands."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from benchfit.commands import options, streams

if TYPE_CHECKING:
    from benchfit.circuits.model import Circuit, Part
    from benchfit.sheet import Sheet

_REST = """
[readings]                   # what a meter says of this very build; the tolerance is the meter's
# {part} = "{text}"
# frequency = "{frequency} 10ppm"

[channels]                   # which channel was clipped to which node
{channels}

{probe}# resistance = "10M"
# capacitance = "12p"

# [scope]                    # limits of the instrument's own errors; these are assumed without the section
# gain = "3%"
# offset = "0.1 V"           # without it: 2 % of the channel's span
# timebase = "50ppm"

[record]                     # free text, passed on to every record and report
unit = "0001"
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """``benchfit sheet CIRCUIT``."""
    parser.add_argument("circuit", metavar="CIRCUIT", help="its name, as benchfit circuits lists it")
    options.add_talk(parser)


def run(args: argparse.Namespace) -> int:
    """Print the sheet."""
    from benchfit.commands.circuits import named

    streams.emit(starter(named(args.circuit)).removesuffix("\n"))
    return 0


def starter(circuit: Circuit) -> str:
    """The text of a starter sheet: the circuit's example build, every other part as a comment."""
    from benchfit.sheet import Sheet

    given = [part for part in circuit.parts if part.name in circuit.example]
    others = [part for part in circuit.parts if part.name not in circuit.example and part.nominal != "absent"]
    head = f"""\
# {circuit.title}
# What was meant to be built. Values as the trade writes them: "4k7", "100n 10%", "90 V ± 6 V", "60..80 V".

title = "My {circuit.name}"
circuit = "{circuit.name}"

"""
    parts = "[parts]                      # nominals and tolerances\n"
    for part in given:
        parts += _line(f'{part.name} = "{circuit.example[part.name]}"', part.says)
    sheet = Sheet.parse(f"{head}{parts}")
    if others:
        parts += "# what may be given as well (the values are those taken without it):\n"
        for part in others:
            parts += _line(f"# {part.name} = {_default(part, sheet)}", _says(part, sheet))
    frequency, duty = _expected(sheet)
    target = f"""\
[target]                     # what it should do; a tolerance here is the acceptance limit
{_line(f'frequency = "{frequency} 5%"', 'or period; this is what the values below give')}# duty = "{duty}"

"""
    part, nodes = given[0], [node.name for node in circuit.nodes]
    rest = _REST.format(
        part=part.name,
        text=circuit.example[part.name],
        frequency=frequency,
        channels="\n".join(f'# {node} = "CH{n}"' for n, node in enumerate(nodes, 1)),
        probe=_line(f"# [probe.{nodes[0]}]", "what the probe there does to the circuit"),
    )
    return f"{head}{target}{parts}{rest}"


def _line(text: str, says: str) -> str:
    return f"{text:<28} # {says}\n"


def _default(part: Part, sheet: Sheet) -> str:
    """What is taken for a part that the sheet leaves out, as the sheet would say it."""
    from benchfit.quantity import si

    if part.base is not None:
        nominal = sheet.build().parts[part.name].nominal
        return f'"{si(nominal, part.unit)} {part.nominal}"'
    return '"…"' if part.nominal is None else f'"{part.nominal}"'


def _says(part: Part, sheet: Sheet) -> str:
    is_other = part.name in sheet.build().absent and not part.optional
    return f"{part.says} (instead)" if is_other else part.says


def _expected(sheet: Sheet) -> tuple[str, str]:
    """Frequency and duty cycle of the example build, as its nominals give them."""
    from benchfit import pipeline
    from benchfit.quantity import si

    predicted = pipeline.predict(sheet)["predicted"]
    frequency = si(float(f"{predicted['frequency']['value']:.3g}"), "Hz")
    return frequency, f"{100 * predicted['duty']['value']:.4g} %"
