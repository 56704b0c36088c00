"""A commented starter build sheet on standard output, which runs as it stands."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from benchfit.commands import options

if TYPE_CHECKING:
    from benchfit.circuits.model import Circuit, Part

_REST = """
[readings]                   # what a meter says of this very build; the tolerance is the meter's
# {part} = "{text}"
# frequency = "{frequency} 10ppm"

[channels]                   # which channel was clipped to which node
{channels}

# [probe.{node}]             # what the probe there does to the circuit
# resistance = "10M"
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

    print(starter(named(args.circuit)), end="")
    return 0


def starter(circuit: Circuit) -> str:
    """The text of a starter sheet: the circuit's example build, every other part as a comment."""
    given = [part for part in circuit.parts if part.name in circuit.example]
    others = [part for part in circuit.parts if part.name not in circuit.example and part.nominal != "absent"]
    head = f"""\
# {circuit.title}
# What was meant to be built. Values as the trade writes them: "4k7", "100n 10%", "90 V ± 6 V", "60..80 V".

title = "My {circuit.name}"
circuit = "{circuit.name}"

"""
    parts = "[parts]                      # nominals and tolerances\n"
    parts += "".join(_line(f'{part.name} = "{circuit.example[part.name]}"', part.says) for part in given)
    if others:
        parts += "# what may be given as well:\n"
        parts += "".join(_line(f"# {part.name} = {_default(part)}", part.says) for part in others)
    frequency, duty = _expected(f"{head}{parts}")
    target = f"""\
[target]                     # what it should do; a tolerance here is the acceptance limit
frequency = "{frequency} 5%"{" " * max(1, 13 - len(frequency))}# or period = "…"; what the values below give
# duty = "{duty}"

"""
    nodes = [node.name for node in circuit.nodes]
    rest = _REST.format(
        part=given[0].name, text=circuit.example[given[0].name], frequency=frequency, node=nodes[0],
        channels="\n".join(f'{"" if n == 0 else "# "}{node} = "CH{n + 1}"' for n, node in enumerate(nodes)),
    )  # fmt: skip
    return f"{head}{target}{parts}{rest}"


def _line(text: str, says: str) -> str:
    return f"{text:<29}# {says}\n"


def _default(part: Part) -> str:
    if part.nominal is None or part.base is not None:
        return '"…"'
    return f'"{part.nominal}"'


def _expected(text: str) -> tuple[str, str]:
    """Frequency and duty cycle of the example build, as its nominals give them."""
    from benchfit import pipeline
    from benchfit.quantity import percent, si
    from benchfit.sheet import Sheet

    predicted = pipeline.predict(Sheet.parse(text)).record()["predicted"]
    frequency = si(float(f"{predicted['frequency']['value']:.3g}"), "Hz")
    return frequency, percent(predicted["duty"]["value"])
