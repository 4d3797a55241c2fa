"""A folder of real runs through the whole program, and how well it did on them.

OUT/NAME/snapshots holds the files of a run and OUT/NAME/truth.json what is known of it. For each
run `stepwarden scout --write` proposes the settings and `stepwarden guard --catch-up` follows them,
in a scratch folder; the answer is what `stepwarden review` would tell.
"""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

from monitor.config import load, watch_spec
from monitor.growthlog.read import read_log
from monitor.review import summarise
from probes.child import Child
from probes.formats import open_snapshot
from probes.spec import WatchSpec
from probes.wire import Configure, Look, Looked
from tests.corpus.case import Stored
from tests.corpus.fieldscore import Answer, table
from tests.corpus.playing import spread_out
from tests.corpus.rules import maximum_rule, rising_rule

SETTINGS = "stepwarden.toml"


@dataclass(frozen=True, slots=True)
class Told:
    """What program and rules said of one run; failed: why there is no answer."""

    run: str
    answer: Answer
    maximum: Answer
    rising: Answer
    failed: str = ""


def report(out: Path, jobs: int) -> str:
    """The table for all runs in a folder."""
    names = sorted(p.parent.name for p in out.glob("*/truth.json"))
    told = spread_out(answer, [(str(out / name),) for name in names], jobs, "runs").values()
    truths = {n: json.loads((out / n / "truth.json").read_text(encoding="utf-8")) for n in names}
    columns = {
        "guard": {t.run: t.answer for t in told},
        "max rule": {t.run: t.maximum for t in told},
        "rising rule": {t.run: t.rising for t in told},
    }
    failures = [f"{t.run}: {t.failed}" for t in told if t.failed]
    return "\n".join([table(truths, columns), *failures])


def answer(folder: str) -> Told:
    """Follow one run. A failure is told and does not end the rest."""
    run = Path(folder)
    nothing = Answer()
    try:
        with TemporaryDirectory(prefix="fieldset-") as name:
            scratch = Path(name)
            found = guarded(run / "snapshots", scratch)
            settings = load(scratch / SETTINGS)
            watch = watch_spec(settings, scratch)
            rules = [_step(watch, rule) for rule in (maximum_rule, rising_rule)]
    except Exception as error:
        return Told(run.name, nothing, nothing, nothing, f"{type(error).__name__}: {error}")
    return Told(run.name, found, *(Answer(step) for step in rules))


def guarded(snapshots: Path, scratch: Path) -> Answer:
    """Alarm, factor and region that the program finds. Raises RuntimeError where it fails."""
    _stepwarden(scratch, {0}, "scout", str(snapshots), "--write", SETTINGS)
    _stepwarden(scratch, {0, 10, 11}, "guard", "--catch-up", "--no-actions", "--quiet")
    review = summarise(read_log(scratch / "growth.jsonl"))
    if review.turn is None:
        return Answer()
    factor = review.growth.value
    return Answer(
        step=review.turn.step if review.turn.step is not None else review.turn.index,
        factor=float(factor) if isinstance(factor, int | float) else None,
        region=review.region.box,
        why=review.turn.verdict.why,
    )


def _stepwarden(folder: Path, good: set[int], *words: str) -> None:
    command = [sys.executable, "-P", "-m", "monitor", *words]
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=1800)
    if done.returncode not in good:
        last = (done.stderr.strip() or "no message").splitlines()[-1]
        raise RuntimeError(f"{words[0]} ended with {done.returncode}: {last}")


def _step(watch: WatchSpec, rule) -> int | None:
    """Solver step at which a rule of ten lines fires, None if it does not."""
    steps: list[int] = []

    def passing() -> Iterator[Stored]:
        for snapshot in read_through(watch):
            steps.append(snapshot.step)
            yield snapshot

    number = rule(passing())
    return None if number is None else steps[number]


def read_through(watch: WatchSpec) -> Iterator[Stored]:
    """The snapshots that guard would judge, whole, in its order."""
    child = Child()
    child.answer(Configure(watch=watch))
    looked = child.answer(Look())
    if not isinstance(looked, Looked):
        raise RuntimeError(str(looked))
    for arrival in looked.arrivals:
        fields: dict[str, np.ndarray] = {}
        for file in arrival.files:
            with open_snapshot(Path(file.path), watch.snapshots) as snapshot:
                contents = snapshot.contents()
                for info in contents.fields:
                    slabs = [s.copy() for s in snapshot.slabs(info.name, arrival.record, 1 << 20)]
                    fields[f"{file.path} {info.name}"] = np.concatenate(slabs)
                step = arrival.step if arrival.step is not None else contents.steps[arrival.record]
        yield Stored(step or 0, 0.0, fields)
