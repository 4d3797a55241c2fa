"""The same runs through files and the whole program: `stepwarden guard --catch-up` on .npy."""

from __future__ import annotations

import itertools
import json
import os
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from tempfile import TemporaryDirectory

import msgspec
import numpy as np

from monitor.growthlog.numbers import rounded
from monitor.growthlog.read import each_record
from monitor.growthlog.records import Evidence, Snapshot, Verdict
from tests.corpus.case import Case, Run
from tests.corpus.running import files, follow

# Files that look as if they had lain there for an hour are taken at once.
_AGE = 3600.0


def write(run: Run, folder: Path, now: float) -> None:
    """One file per field, part and snapshot, and the settings. now: seconds since the epoch."""
    width = len(str(run.snapshots[-1].step))
    for number, snapshot in enumerate(run.snapshots):
        for name, part, values in files(snapshot.fields, run):
            path = folder / f"{f'{part}_' if part else ''}{name}_{snapshot.step:0{width}d}.npy"
            np.save(path, values)
            os.utime(path, (now - _AGE + number,) * 2)
    (folder / "stepwarden.toml").write_text(settings(run), encoding="utf-8")


def settings(run: Run) -> str:
    """What a user would write into stepwarden.toml for these files."""
    first = "{part}_" if run.parts else ""
    names = [f"{first}{name}_{{step}}.npy" for name in run.snapshots[0].fields]
    lines = ["[snapshots]", f"pattern = {json.dumps(names)}", ""]
    if run.parts:
        lines.insert(2, f"parts = {len(run.parts)}")
    for name in run.snapshots[0].fields:
        lines.append(f"[fields.{name}]")
        spec = msgspec.to_builtins(run.specs[name]) if name in run.specs else {}
        lines += [
            f"{key} = {json.dumps(spec[key])}"
            for key in ("grid", "min", "max")
            if spec.get(key) is not None
        ]
    return "\n".join(lines) + "\n"


def guarded(folder: Path) -> list[Snapshot]:
    """What guard wrote about the files in a folder. Raises RuntimeError where it could not."""
    command = [
        sys.executable,
        "-P",
        "-m",
        "monitor",
        "guard",
        "--catch-up",
        "--no-actions",
        "--quiet",
    ]
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=600)
    if done.returncode not in (0, 10, 11):
        raise RuntimeError(done.stderr.strip() or f"status {done.returncode}")
    return [r for r in each_record(folder / "growth.jsonl") if isinstance(r, Snapshot)]


def differing(run: Run) -> tuple[int, list[int]]:
    """Snapshots judged, and the steps of those of which guard and `follow` say different things."""
    with TemporaryDirectory(prefix="corpus-") as name:
        folder = Path(name)
        write(run, folder, now=folder.stat().st_mtime)
        records = guarded(folder)
    here = {s.step: _plain(s.evidence, s.verdict) for s in follow(run, timed=False)}
    there = {r.step: _plain(r.evidence, r.verdict) for r in records}
    steps = sorted(here.keys() | there.keys(), key=lambda s: s or 0)
    return len(there), [s or 0 for s in steps if here.get(s or 0) != there.get(s)]


def fit_for_files(run: Run) -> bool:
    """Whether the steps only go up; files of steps that come again would replace each other."""
    steps = [s.step for s in run.snapshots]
    return all(a < b for a, b in itertools.pairwise(steps))


def report(cases: Sequence[Case], draw: int) -> str:
    """A line for each case."""
    lines = []
    for case in cases:
        run = case.run(draw)
        if not fit_for_files(run):
            lines.append(f"{case.name}: steps come again, which files cannot show")
            continue
        judged, different = differing(run)
        what = (
            f"differ at steps {different[:8]}" if different else "the same in memory and from files"
        )
        lines.append(f"{case.name}: {judged} snapshots, {what}")
    return "\n".join(lines)


def _plain(evidence: Evidence, verdict: Verdict) -> object:
    return msgspec.to_builtins((evidence, rounded(verdict)))
