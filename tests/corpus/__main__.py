"""python -m tests.corpus: run the whole corpus and print how well the detector does."""

from __future__ import annotations

import os

# Before the first import of the linear algebra library: one thread in each process.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from tests.corpus import causes, tables
from tests.corpus.cases import CASES, FAMILIES
from tests.corpus.playing import play_all


def main(words: Sequence[str] | None = None) -> int:
    options = _parser().parse_args(words)
    if options.fieldset is not None:
        from tests.corpus import fieldset

        print(fieldset.report(options.fieldset, options.jobs))
        return 0
    if options.noise:
        from tests.corpus import healthy_noise

        print(healthy_noise.report(options.draw[0], options.jobs))
        return 0
    cases = [
        c
        for c in CASES
        if (options.half in (None, c.half))
        and (options.family in (None, c.family))
        and (options.case in (None, c.name))
    ]
    if options.list:
        for c in cases:
            print(f"{c.name:36s} {c.label:8s} {c.half:7s} {c.what}")
        return 0
    if options.files:
        from tests.corpus import filing

        print(filing.report(cases, options.draw[0]))
        return 0
    runs = play_all(cases, options.draw, options.jobs)
    print(f"draws {', '.join(map(str, options.draw))}\n")
    print(tables.tables(runs))
    print(f"\nwhat falls short, {causes.told(runs)}")
    for title, text in (("scored apart", causes.apart(runs)), ("removed", _removed(cases))):
        if text:
            print(f"\n{title}:\n{text}")
    if options.runs:
        print("\n" + "\n".join(_line(r) for r in runs if r.half == "tuned" or r.failed))
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="python -m tests.corpus", description=__doc__)
    parser.add_argument("--draw", type=int, nargs="+", default=[1], metavar="SEED")
    parser.add_argument("--half", choices=("tuned", "scored"))
    parser.add_argument("--family", choices=[f.name for f in FAMILIES])
    parser.add_argument("--case", choices=[c.name for c in CASES], metavar="NAME")
    parser.add_argument("--jobs", type=int, default=len(os.sched_getaffinity(0)), metavar="N")
    parser.add_argument("--list", action="store_true", help="list the cases and run none")
    parser.add_argument("--runs", action="store_true", help="a line for each run of the tuned half")
    parser.add_argument(
        "--noise", action="store_true", help="short healthy runs: the bound on false alarms"
    )
    parser.add_argument(
        "--files",
        action="store_true",
        help="through files and guard, compared with the same in memory",
    )
    parser.add_argument(
        "--fieldset", type=Path, metavar="OUT", help="score a folder of real runs instead"
    )
    return parser


def _removed(cases: Sequence) -> str:
    return "\n".join(f"{c.name}: {c.removed}" for c in cases if c.removed)


def _line(run) -> str:
    s = run.score
    facts = f"alarm {s.alarm} early {s.early} rows {s.rows} share {s.share} error {s.error}"
    return (
        f"{run.case:36s} {run.draw:3d} {run.snapshots:3d} {facts} {'; '.join(causes.troubles(run))}"
    )


if __name__ == "__main__":
    sys.exit(main())
