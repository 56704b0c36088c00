"""How far the suspects can be trusted: builds drawn, broken and measured on the bench, then explained.

``python tools/fault_study.py --builds 300 --circuits five --seed 1 --jobs 2`` draws builds
(``tools/bench/faults``), hands each capture and its build sheet to the program's public face, compares what
it says with the truth, prints the figures, and writes what went wrong to a CSV file, one line each. What a
capture can decide in principle is judged on the bench (``tools/bench/identify``), not by the program; those
judgements are kept in ``--cache`` for the next run.
"""

from __future__ import annotations

import argparse
import csv
import json
import os
import sys
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict
from pathlib import Path
from typing import Any

# One build is one thread's work: linear algebra that spreads over the cores only gets in its own way.
for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

import numpy as np  # noqa: E402

from tools.bench.builds import Build, draw  # noqa: E402
from tools.bench.designs import DESIGNS, FIVE  # noqa: E402
from tools.bench.identify import judge  # noqa: E402
from tools.bench.score import Outcome, report, score  # noqa: E402

# Raise it whenever the draws or the judgement change: what is in the cache is of no use then.
JUDGEMENT = 4
SKIP = "skip"

Task = tuple[str, int, str, bool, str | None, str | None]


def capture_of(build: Build) -> Any:
    """The build's record as the program's own capture, without a file in between."""
    from benchfit.capture.model import Capture, Channel

    channels = []
    for node, volts in build.record.channels.items():
        seen = np.unique(volts)
        channels.append(Channel(build.names[node], "V", volts, float(np.diff(seen).min()) if seen.size > 1 else 0.0))
    return Capture(f"draw {build.seed}", build.record.interval, build.record.start, tuple(channels))


def explained(build: Build) -> tuple[Mapping[str, Any] | None, float, str]:
    """The program's record for a build, the time it took (s), and its error if it failed."""
    import benchfit

    began = time.perf_counter()
    try:
        record = benchfit.explain(capture_of(build), benchfit.Sheet.parse(build.sheet)).record()
    except Exception as error:  # every failure of the program is a finding of the study
        return None, time.perf_counter() - began, f"{type(error).__name__}: {error}"
    return record, time.perf_counter() - began, ""


def judged(build: Build, name: str, cache: str | None) -> Mapping[str, Any] | None:
    """What the bench says could be decided, from the cache where it has been judged before."""
    if not build.waves.oscillates or cache == SKIP or build.fault.how == "family":
        return None
    path = Path(cache) / f"{name}.json" if cache else None
    if path is not None and path.exists():
        known: Mapping[str, Any] = json.loads(path.read_text())
        return known
    found = judge(build)
    answer = {
        "excess": found.excess,
        "truth": found.truth,
        "u": dict(found.u),
        "posterior": [[list(k), v] for k, v in list(found.posterior.items())[:6]],
    }
    if path is not None:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(json.dumps(answer))
    return answer


def one(task: Task) -> Outcome:
    """Draw, explain, judge and score one build."""
    circuit, seed, mix, rough, kind, cache = task
    build = draw(circuit, seed, mix=mix, rough=rough, kind=kind)
    record, spent, error = explained(build)
    name = f"{JUDGEMENT}-{circuit}-{seed}-{mix}-{'rough' if rough else 'plain'}-{kind or 'any'}"
    return score(build, record, spent, error, judged(build, name, cache))


def tasks(options: argparse.Namespace) -> list[Task]:
    """What to draw: the circuits in turn."""
    named = {"five": list(FIVE), "all": list(DESIGNS)}
    circuits = named.get(options.circuits) or options.circuits.split(",")
    kind = None if options.kind == "any" else options.kind
    cache = SKIP if options.quick else None if options.cache == "none" else options.cache
    return [
        (
            circuits[i % len(circuits)],
            100_000 * options.seed + i // len(circuits),
            options.mix,
            options.rough,
            kind,
            cache,
        )
        for i in range(options.builds)
    ]


def write_failures(outcomes: Sequence[Outcome], path: Path) -> None:
    """One line for each build of which something wrong was said."""
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("w", newline="", encoding="utf-8") as file:
        out = csv.writer(file)
        out.writerow(
            [
                "failure",
                "circuit",
                "seed",
                "nodes",
                "how",
                "truth",
                "change",
                "posterior of truth",
                "said",
                "settled",
                "note",
            ]
        )
        for o in outcomes:
            for failure in o.failures:
                said = "; ".join(f"{'+'.join(c) or 'nothing'} {p:.2f}" for c, p in o.suspects[:3])
                out.writerow(
                    [
                        failure,
                        o.circuit,
                        o.seed,
                        "+".join(o.nodes),
                        o.how,
                        "+".join(o.causes) or "nothing",
                        " ".join(f"{v:.4g}" for v in o.change),
                        "" if o.truth is None else f"{o.truth:.2f}",
                        said,
                        o.settled,
                        o.error,
                    ]
                )


def main(words: Sequence[str] | None = None) -> int:
    """Run the study."""
    ask = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    ask.add_argument("--builds", type=int, default=300)
    ask.add_argument("--circuits", default="five", help="five, all, or names separated by commas")
    ask.add_argument("--seed", type=int, default=1)
    ask.add_argument("--jobs", type=int, default=1)
    ask.add_argument("--mix", choices=["rectangular", "gaussian", "prior"], default="rectangular")
    ask.add_argument("--kind", choices=["any", "healthy", "single", "two"], default="any")
    ask.add_argument("--rough", action="store_true", help="devices less simple than their models")
    ask.add_argument("--quick", action="store_true", help="without judging what could be decided")
    ask.add_argument("--cache", default=str(Path.home() / ".cache" / "bench-judgements"), help="folder, or none")
    ask.add_argument("--failures", type=Path, default=ROOT / "build" / "fault_study_failures.csv")
    ask.add_argument("--outcomes", type=Path, help="every build's score, one JSON object a line")
    options = ask.parse_args(words)
    todo = tasks(options)
    began = time.perf_counter()
    if options.jobs > 1:
        with ProcessPoolExecutor(options.jobs) as pool:
            outcomes = list(pool.map(one, todo, chunksize=4))
    else:
        outcomes = [one(task) for task in todo]
    print(report(outcomes))
    write_failures(outcomes, options.failures)
    if options.outcomes:
        options.outcomes.write_text("".join(json.dumps(asdict(o)) + "\n" for o in outcomes), encoding="utf-8")
    print(f"\n{len(outcomes)} builds in {time.perf_counter() - began:.0f} s")
    print(f"failures listed in {options.failures}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
