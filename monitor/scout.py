"""Look at a run's folder and say what is there: snapshots, their format, fields, steps, cadence.

Names and times come from a bounded listing; what is inside a file is asked of the reading process,
so that a damaged file can at worst end that.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path, PurePosixPath

from msgspec.structs import replace

from monitor.namereading import NameGroup, group_names, merge_fields
from probes.arrivals.patterns import Pattern
from probes.errors import ArrivalError
from probes.wire import Examine, Examined, Failed, Reply, Request

MOST_FILES = 20_000
DEEPEST = 3
MOST_EXAMINED = 12

# Formats that hold one array a file, so that different words in names can be different fields.
_SINGLE_FIELD = ("npy", "raw")
_RESTARTS = ("restart", "checkpoint", "chk", "chkpt", "ckpt", "rst", "backup")
# Files that are not snapshots whatever is in them.
_IGNORED_SUFFIXES = (
    ".toml",
    ".jsonl",
    ".py",
    ".sh",
    ".txt",
    ".log",
    ".md",
    ".lock",
    ".out",
    ".err",
)
_OWN_FOLDERS = ("pins", "growth.window", "__pycache__")


@dataclass(frozen=True, slots=True)
class Sight:
    """One pattern and what its latest file holds.

    cadence: median seconds between files, None for fewer than three. contents: None where the
    reading process could not make anything of the file; failure says why.
    """

    group: NameGroup
    cadence: float | None
    contents: Examined | None
    failure: str = ""

    @property
    def steps(self) -> tuple[int, ...]:
        """Steps by name, else by contents."""
        if self.group.steps or self.contents is None:
            return self.group.steps
        return tuple(s for s in self.contents.steps if s is not None)

    @property
    def snapshots(self) -> int:
        """Distinct snapshots: steps in names, or records of a growing file, or files."""
        if self.group.steps:
            return len(self.group.steps)
        records = self.contents.records if self.contents else 1
        return max(records, len(self.group.names))

    @property
    def restarts(self) -> bool:
        """The name says that these are restart files."""
        return any(word in self.group.pattern.lower() for word in _RESTARTS)


@dataclass(frozen=True, slots=True)
class Scouted:
    """All that was found, the likeliest snapshots first. listed: files seen; cut: there are more
    than the listing takes."""

    folder: Path
    sights: tuple[Sight, ...]
    listed: int
    cut: bool

    @property
    def snapshots(self) -> Sight | None:
        """What guard should watch."""
        return next((s for s in self.sights if s.contents is not None), None)

    @property
    def checkpoints(self) -> Sight | None:
        """Restart files apart from the watched snapshots."""
        others = [s for s in self.sights if s.contents is not None and s is not self.snapshots]
        return next((s for s in others if s.restarts), None)


def scout(path: Path, ask: Callable[[Request], Reply]) -> Scouted:
    """Look at a folder, or at one file and those named like it. `ask` puts one request to the
    reading process.

    Raises ArrivalError where the folder cannot be listed.
    """
    folder = path if path.is_dir() else path.parent
    times, cut = _list(folder)
    groups = group_names(times)
    if folder != path:
        groups = [group for group in groups if path.name in group.names]
    sights = [_look(folder, group, times, ask) for group in groups[:MOST_EXAMINED]]
    sights = _with_fields(sights, times)
    sights.sort(key=lambda s: (s.contents is None, s.restarts, -s.snapshots, s.group.pattern))
    return Scouted(folder, tuple(sights), len(times), cut)


def _list(folder: Path) -> tuple[dict[str, float], bool]:
    """Names relative to `folder` with their times of change; True if there were too many."""
    times: dict[str, float] = {}
    ahead = [(folder, 0)]
    while ahead:
        here, depth = ahead.pop(0)
        try:
            with os.scandir(here) as entries:
                found = sorted(entries, key=lambda entry: entry.name)
        except OSError as error:
            if here == folder:
                raise ArrivalError(f"cannot list it: {error.strerror}", str(here)) from error
            continue
        for entry in found:
            name = entry.name
            if name.startswith(".") or ".tmp" in name:
                continue
            try:
                if entry.is_dir():
                    if depth < DEEPEST and name not in _OWN_FOLDERS:
                        ahead.append((Path(entry.path), depth + 1))
                elif not name.endswith(_IGNORED_SUFFIXES):
                    times[str(PurePosixPath(Path(entry.path).relative_to(folder)))] = (
                        entry.stat().st_mtime
                    )
            except OSError:
                continue  # gone since the listing
            if len(times) >= MOST_FILES:
                return times, True
    return times, False


def _look(
    folder: Path, group: NameGroup, times: dict[str, float], ask: Callable[[Request], Reply]
) -> Sight:
    """Ask for the last file but one where there are several: the last may still be written."""
    name = group.names[-2] if len(group.names) > 2 else group.names[-1]
    reply = ask(Examine(path=str(folder.resolve() / name)))
    cadence = _cadence(group, times)
    if isinstance(reply, Examined):
        return Sight(group, cadence, _named_as_guard_does(reply, group, name))
    failure = reply.what if isinstance(reply, Failed) else "no answer"
    return Sight(group, cadence, None, failure)


def _named_as_guard_does(seen: Examined, group: NameGroup, name: str) -> Examined:
    """A nameless array goes by the stem of its file, which holds the step: guard names it after
    the words that all files share."""
    stem = PurePosixPath(name).stem
    if len(seen.fields) != 1 or seen.fields[0][0] != stem:
        return seen
    shared = Pattern.of(group.pattern, "/").own_name
    return replace(seen, fields=((shared, *seen.fields[0][1:]),))


def _cadence(group: NameGroup, times: dict[str, float]) -> float | None:
    """Median seconds between the changes of files of consecutive steps (one part, one field)."""
    per = max(1, len(group.parts)) * max(1, len(group.fields))
    moments = sorted(times[name] for name in group.names)[::per]
    gaps = sorted(b - a for a, b in pairwise(moments))
    return gaps[len(gaps) // 2] if len(gaps) > 1 else None


def _with_fields(sights: Sequence[Sight], times: dict[str, float]) -> list[Sight]:
    """Put patterns together that differ in the field's name only."""
    single = [s for s in sights if s.contents and s.contents.format in _SINGLE_FIELD]
    rest = [s for s in sights if s not in single]
    by_steps: dict[tuple[object, ...], list[Sight]] = {}
    for sight in single:
        by_steps.setdefault((sight.group.steps, sight.group.parts), []).append(sight)
    for alike in by_steps.values():
        merged = merge_fields([s.group for s in alike])
        if merged is None:
            rest += alike
        else:
            rest.append(Sight(merged, _cadence(merged, times), _joined(merged, alike)))
    return rest


def _joined(merged: NameGroup, alike: Sequence[Sight]) -> Examined | None:
    """One description of all fields, each under the name that its files have."""
    first = alike[0].contents
    if first is None:
        return None
    fields = tuple(
        (name, *sight.contents.fields[0][1:])
        for name, sight in zip(merged.fields, alike, strict=True)
        if sight.contents and sight.contents.fields
    )
    return replace(first, fields=fields)
