"""Find the files that match the patterns, with as few system calls as a long run allows.

Names are listed every time; only what may have changed is looked at again: new names, names without
a step, the newest steps, and everything once in a while (a restart may rewrite old names).
"""

from __future__ import annotations

import os
import stat
from collections.abc import Callable, Iterator
from dataclasses import dataclass

from probes.arrivals.patterns import Match, Pattern
from probes.errors import ArrivalError

NEWEST = 64
FEW = 1000
EVERYTHING_AFTER = 30.0


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
        self._seen: dict[str, Seen] = {}
        self._all_at = -EVERYTHING_AFTER
        self.listed = 0

    def look(self) -> list[Seen]:
        """All matching files now. Raises ArrivalError where a folder cannot be listed; a folder
        that is not there yet holds nothing."""
        found: dict[str, tuple[int, Match]] = {}
        self.listed = 0
        for index, pattern in enumerate(self._patterns):
            for path, match in self._walk(pattern.root, pattern, 0, Match()):
                found.setdefault(path, (index, match))
        now = self._clock()
        everything = len(found) <= FEW or now - self._all_at >= EVERYTHING_AFTER
        if everything:
            self._all_at = now
        steps = sorted({m.step for _, m in found.values() if m.step is not None})
        newest = steps[-NEWEST] if len(steps) > NEWEST else -1
        kept: dict[str, Seen] = {}
        for path, (index, match) in found.items():
            old = self._seen.get(path)
            calm = match.step is not None and match.step < newest and not everything
            if old is not None and calm:
                kept[path] = old
                continue
            seen = _status(path, index, match)
            if seen is not None:
                kept[path] = seen
        self._seen = kept
        return list(kept.values())

    def folders(self) -> list[str]:
        """Folders that a new file may appear in, as far as they are there."""
        out = {p.root for p in self._patterns if os.path.isdir(p.root)}
        out |= {os.path.dirname(path) for path in self._seen}
        return sorted(out)

    def _walk(
        self, folder: str, pattern: Pattern, depth: int, so_far: Match
    ) -> Iterator[tuple[str, Match]]:
        level = pattern.levels[depth]
        last = depth == len(pattern.levels) - 1
        if level.literal:
            names = [level.text]
        else:
            try:
                names = os.listdir(folder)
            except (FileNotFoundError, NotADirectoryError):
                return
            except OSError as error:
                raise ArrivalError(f"cannot be listed ({error.strerror})", folder) from error
            self.listed += len(names)
        for name in names:
            match = Match() if level.literal else level.match(name)
            both = so_far.joined(match) if match is not None else None
            if both is None:
                continue
            path = os.path.join(folder, name)
            if last:
                yield path, both
            else:
                yield from self._walk(path, pattern, depth + 1, both)


def _status(path: str, index: int, match: Match) -> Seen | None:
    """A regular file behind a name (a symbolic link is followed), None for anything else."""
    try:
        found = os.stat(path)
    except OSError:
        return None  # gone between listing and looking, or a link to nowhere
    if not stat.S_ISREG(found.st_mode):
        return None
    return Seen(path, index, match, found.st_ino, found.st_size, found.st_mtime_ns)
