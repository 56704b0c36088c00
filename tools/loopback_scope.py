"""A bench instrument on this very machine: ``python tools/loopback_scope.py --port 5025 --circuit op-amp``.

It digitises a simulated build, with noise, drift and a trimmer that turns, and answers on 127.0.0.1 over a
raw socket in SCPI-1999 and in the dialect of ``tools/loopback_dialect.toml``; it misbehaves on request:

    python tools/loopback_scope.py --build sample_captures/tide_gate_pacer.toml --trim R=40k..55k --turn 60
    benchfit poll TCPIP::127.0.0.1::5025::SOCKET --build sample_captures/tide_gate_pacer.toml
"""

from __future__ import annotations

import argparse
import sys
import threading
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from tools.loopback import (  # noqa: E402
    KINDS,
    CircuitSource,
    LoopbackScope,
    Misbehaviour,
    PatternSource,
    Replay,
    Trimmer,
)
from tools.loopback.builds import BUILDS, known  # noqa: E402
from tools.loopback.misbehave import parse_rates  # noqa: E402
from tools.loopback.source import Source  # noqa: E402

LINE_ENDS = {"lf": b"\n", "crlf": b"\r\n", "cr": b"\r"}


def main(argv: Sequence[str] | None = None) -> int:
    """Serve until Ctrl-C."""
    args = _parser().parse_args(argv)
    try:
        source, trimmer = _source(args)
        misbehaviour = Misbehaviour(
            parse_rates(args.fault) if args.fault else {},
            seed=args.seed,
            late_by=args.late_by,
            refuse_for=args.refuse_for,
            trickle=args.trickle,
        )
    except ValueError as error:
        print(f"loopback_scope: {error}", file=sys.stderr)
        return 2
    end = LINE_ENDS[args.line_end]
    duration = 0.0 if args.instant else (args.duration if args.duration is not None else source.span)
    if args.instant and args.replay:
        source = Replay(source, args.replay)
    scope = LoopbackScope(
        source, port=args.port, misbehaviour=misbehaviour, duration=duration, line_end=end, reply_end=end
    )
    try:
        scope.start()
    except OSError as error:
        print(f"loopback_scope: port {args.port} cannot be used ({error.strerror})", file=sys.stderr)
        return 1
    _announce(scope, source, trimmer)
    try:
        _obey(trimmer)
    except KeyboardInterrupt:
        pass
    finally:
        scope.stop()
    for kind in KINDS:
        times = sum(1 for _, done in misbehaviour.committed if done == kind)
        if times:
            print(f"{kind}: {times}", file=sys.stderr)
    return 0


def _source(args: argparse.Namespace) -> tuple[Source, Trimmer | None]:
    if args.pattern:
        return PatternSource(samples=args.samples), None
    circuit, parts, nodes, probe = args.circuit, dict(BUILDS.get(args.circuit, {})), {}, {}
    if args.build:
        circuit, parts, nodes, probe = _from_sheet(args.build)
    for text in args.part:
        name, value = _pair(text, "--part")
        parts[name] = _number(value)
    for text in args.channel:
        name, node = _pair(text, "--channel")
        nodes[name] = node
    trimmer = _trimmer(args, parts)
    drift = {name: _number(rate) for name, rate in (_pair(text, "--drift") for text in args.drift)}
    unknown = [*drift, *([trimmer.part] if trimmer else [])]
    for name in unknown:
        if name not in parts:
            raise ValueError(f"{name} is no part of this {circuit}; it has {', '.join(parts)}")
    source = CircuitSource(
        circuit,
        parts,
        nodes or _usual_channels(circuit),
        samples=args.samples,
        cycles=args.cycles,
        noise=args.noise,
        drift=drift,
        trimmer=trimmer,
        probe=probe,
        seed=args.seed,
    )
    return source, trimmer


def _usual_channels(circuit: str) -> dict[str, str]:
    from tools.bench.rigs import RIGS

    nodes = RIGS[circuit].nodes
    usual = [node for node in ("capacitor", "output", "base1", "collector1") if node in nodes][:2]
    return {f"CH{k}": node for k, node in enumerate(usual, 1)}


def _from_sheet(
    path: str,
) -> tuple[str, dict[str, float], dict[str, str], dict[str, tuple[float, float]]]:
    """Circuit, nominal parts, channels and probes of a build sheet."""
    from benchfit import Sheet

    sheet = Sheet.load(path)
    build = sheet.build()
    circuit = build.circuit.name
    parts = known(circuit, {name: part.nominal for name, part in build.parts.items()})
    nodes = {choice.name: node for node, choice in sheet.channels.items()}
    probe = {
        node: (
            p.resistance.nominal if p.resistance else float("inf"),
            p.capacitance.nominal if p.capacitance else 0.0,
        )
        for node, p in sheet.probes.items()
    }
    return circuit, parts, nodes, probe


def _trimmer(args: argparse.Namespace, parts: dict[str, float]) -> Trimmer | None:
    if not args.trim:
        return None
    name, limits = _pair(args.trim, "--trim")
    low, separator, high = limits.partition("..")
    if not separator:
        raise ValueError(f"--trim {args.trim}: write the part and its range, such as R=1k..20k")
    bottom, top = _number(low), _number(high)
    at = args.at
    if at is None:
        at = min(1.0, max(0.0, (parts.get(name, bottom) - bottom) / (top - bottom)))
    return Trimmer(name, bottom, top, at=at, turn=args.turn)


def _pair(text: str, option: str) -> tuple[str, str]:
    name, separator, value = text.partition("=")
    if not separator:
        raise ValueError(f"{option} {text}: write NAME=VALUE")
    return name.strip(), value.strip()


def _number(text: str) -> float:
    """A value with an SI prefix or a percentage; the unit may be left out."""
    from benchfit.quantity import parse

    if text.endswith("%"):
        return float(text[:-1]) / 100.0
    for unit in ("", "Ω", "F", "V", "A", "s", "V/s"):
        try:
            return parse(text, unit).nominal
        except ValueError:
            continue
    raise ValueError(f"{text!r} is not a value such as 47k, 100n or 9.5 V")


def _announce(scope: LoopbackScope, source: Source, trimmer: Trimmer | None) -> None:
    channels = ", ".join(source.channels)
    print(f"{scope.resource}: {channels}, {1e3 * source.span:.4g} ms a record; Ctrl-C ends it", flush=True)
    if trimmer is not None:
        print(
            f"trimmer {trimmer.part}: {trimmer.low:.4g} to {trimmer.high:.4g}, now {trimmer.value(0):.5g};"
            " type a position from 0 to 1 and Enter to turn it",
            flush=True,
        )


def _obey(trimmer: Trimmer | None) -> None:
    """Take trimmer positions from standard input until it ends, then wait for Ctrl-C."""
    if trimmer is not None and sys.stdin is not None and sys.stdin.isatty():
        for line in sys.stdin:
            try:
                position = float(line)
            except ValueError:
                continue
            trimmer.at, trimmer.turn = min(1.0, max(0.0, position)), 0.0
            print(f"{trimmer.part} = {trimmer.value(0):.5g}", flush=True)
    threading.Event().wait()


def _parser() -> argparse.ArgumentParser:
    faults = "; ".join(f"{kind}: {says}" for kind, says in KINDS.items())
    parser = argparse.ArgumentParser(prog="loopback_scope", description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--port", type=int, default=5025, help="port on 127.0.0.1 (0: any free one)")
    parser.add_argument("--circuit", choices=sorted(BUILDS), default="op-amp", help="what is on the bench")
    parser.add_argument(
        "--build", metavar="SHEET", help="build its nominal parts, probe and channels instead"
    )
    parser.add_argument(
        "--part", action="append", default=[], metavar="NAME=VALUE", help="what was really fitted"
    )
    parser.add_argument(
        "--channel", action="append", default=[], metavar="CH1=NODE", help="what is clipped where"
    )
    parser.add_argument("--pattern", action="store_true", help="digitise test patterns in place of a circuit")
    parser.add_argument("--samples", type=int, default=4000, help="samples a record")
    parser.add_argument("--cycles", type=float, default=10.0, help="cycles a record, at the start")
    parser.add_argument("--noise", type=float, default=0.03, help="rms noise in divisions of the screen")
    parser.add_argument(
        "--drift", action="append", default=[], metavar="NAME=2%", help="change of a part per hour"
    )
    parser.add_argument("--trim", metavar="NAME=LOW..HIGH", help="a trimmer and its range")
    parser.add_argument("--at", type=float, help="its position from 0 to 1 (default: the part's value)")
    parser.add_argument(
        "--turn", type=float, default=0.0, metavar="S", help="turn it there and back in S seconds"
    )
    parser.add_argument(
        "--duration", type=float, metavar="S", help="time an acquisition takes (default: the record's)"
    )
    parser.add_argument("--instant", action="store_true", help="acquisitions take no time")
    parser.add_argument(
        "--replay", type=int, default=0, metavar="N", help="with --instant: digitise N records first"
    )
    parser.add_argument(
        "--line-end", choices=sorted(LINE_ENDS), default="lf", help="line end it listens for and sends"
    )
    parser.add_argument(
        "--fault", metavar="5%|KIND=RATE,…", help=f"misbehave: all kinds mixed, or by kind ({faults})"
    )
    parser.add_argument("--late-by", type=float, default=7.0, metavar="S", help="how late a late reply is")
    parser.add_argument(
        "--refuse-for", type=float, default=2.0, metavar="S", help="how long connections are refused"
    )
    parser.add_argument("--trickle", type=float, default=20.0, metavar="B/S", help="speed of a slow reply")
    parser.add_argument("--seed", type=int, default=0, help="seed of noise and faults")
    return parser


if __name__ == "__main__":
    sys.exit(main())
