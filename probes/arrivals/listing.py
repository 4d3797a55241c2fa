"""Find the files that match the patterns, with as few system calls as a long run allows.

Names are listed every time; only what may have changed is looked at again: new names, names without
a step, the newest steps, and everything once in a while (a restart may rewrite old names).
"""

from __future__ import annotations

import os
import stat
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass

from probes.arrivals.patterns import Level, Match, Pattern
from probes.errors import ArrivalError

NEWEST = 64
FEW = 1000
EVERYTHING_AFTER = 30.0
_NOTHING = Match()


@dataclass(frozen=True, slots=True)
class Seen:
    """One matching file as last looked at. pattern: its pattern's index."""

    path: str
    pattern: int
    match: Match
    inode: int
    size: int
    mtime_ns: int

    @property
    def identity(self) -> tuple[int, int, int]:
        return self.inode, self.size, self.mtime_ns


class Listing:
    """Remembers what it saw, so that the next look is cheap. clock: monotonic seconds."""

    def __init__(self, patterns: tuple[Pattern, ...], clock: Callable[[], float]) -> None:
        self._patterns, self._clock = patterns, clock
        self._levels: dict[tuple[int, int, str], tuple[list[str], list[tuple[str, Match]]]] = {}
        self._visited: set[tuple[int, int, str]] = set()
        self._found: dict[str, tuple[int, Match]] = {}
        self._lively: list[str] = []
        self._seen: dict[str, Seen] = {}
        self._list: list[Seen] = []
        self._all_at = -EVERYTHING_AFTER
        self._other_names = True
        self.listed = 0

    def look(self, also: Iterable[str] = ()) -> list[Seen]:
        """All matching files now: the very list of the last look if nothing has changed.

        also: paths that have changed for certain. Raises ArrivalError where a folder cannot be
        listed; one that is not there yet holds nothing.
        """
        self.listed = 0
        self._visited.clear()
        found: dict[str, tuple[int, Match]] = {}
        for index, pattern in enumerate(self._patterns):
            for path, match in self._walk(index, pattern, 0, pattern.root, _NOTHING):
                found.setdefault(path, (index, match))
        other_names, self._other_names = self._other_names, False
        if other_names:
            self._found, self._lively = found, _newest(found)
            self._levels = {k: v for k, v in self._levels.items() if k in self._visited}
        now = self._clock()
        everything = len(found) <= FEW or now - self._all_at >= EVERYTHING_AFTER
        if everything:
            self._all_at = now
        wanted = set(self._found if everything else self._lively)
        wanted |= self._found.keys() & set(also)
        if other_names:
            wanted |= self._found.keys() - self._seen.keys()
        changed = other_names
        for path in wanted:
            index, match = self._found[path]
            old, seen = self._seen.get(path), _status(path, index, match)
            if seen == old:
                continue
            changed = True
            if seen is None:
                del self._seen[path]
            else:
                self._seen[path] = seen
        if changed:
            self._seen = {p: self._seen[p] for p in self._found if p in self._seen}
            self._list = list(self._seen.values())
        return self._list

    def folders(self) -> list[str]:
        """Folders that a new file may appear in, as far as they are there."""
        out = {p.root for p in self._patterns if os.path.isdir(p.root)}
        deep = {i for i, p in enumerate(self._patterns) if len(p.levels) > 1}
        if deep:
            out |= {os.path.dirname(s.path) for s in self._list if s.pattern in deep}
        return sorted(out)

    def _walk(
        self, index: int, pattern: Pattern, depth: int, folder: str, so_far: Match
    ) -> Iterator[tuple[str, Match]]:
        last = depth == len(pattern.levels) - 1
        for path, match in self._matching(index, depth, folder, pattern.levels[depth]):
            both = match if so_far is _NOTHING else so_far.joined(match)
            if both is None:
                continue
            if last:
                yield path, both
            else:
                yield from self._walk(index, pattern, depth + 1, path, both)

    def _matching(
        self, index: int, depth: int, folder: str, level: Level
    ) -> list[tuple[str, Match]]:
        """Entries of a folder that fit one level of a pattern; matched anew only where the names
        are others."""
        if level.literal:
            names = [level.text]
        else:
            try:
                names = os.listdir(folder)
            except (FileNotFoundError, NotADirectoryError):
                names = []
            except OSError as error:
                raise ArrivalError(f"cannot be listed ({error.strerror})", folder) from error
            self.listed += len(names)
        self._visited.add((index, depth, folder))
        known = self._levels.get((index, depth, folder))
        if known is not None and known[0] == names:
            return known[1]
        self._other_names = True
        fitting = [
            (os.path.join(folder, name), match)
            for name in names
            if (match := _NOTHING if level.literal else level.match(name)) is not None
        ]
        self._levels[index, depth, folder] = names, fitting
        return fitting


def _newest(found: dict[str, tuple[int, Match]]) -> list[str]:
    """Paths of the newest steps, and of files whose names have no step."""
    steps = sorted({m.step for _, m in found.values() if m.step is not None})
    newest = steps[-NEWEST] if len(steps) > NEWEST else -1
    return [path for path, (_, m) in found.items() if m.step is None or m.step >= newest]


def _status(path: str, index: int, match: Match) -> Seen | None:
    """A regular file behind a name (a symbolic link is followed), None for anything else."""
    try:
        found = os.stat(path)
    except OSError:
        return None  # gone between listing and looking, or a link to nowhere
    if not stat.S_ISREG(found.st_mode):
        return None
    return Seen(path, index, match, found.st_ino, found.st_size, found.st_mtime_ns)
