"""May a pin be a hard link? Only where the solver was seen never to write into an old file. Pure.

A hard link costs nothing, and keeps nothing from a solver that opens the same file again and writes
into it. So links are allowed for a run whose names were seen to change to new files (rename into
place), or whose names carry the step and were never seen again.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Iterable

from probes.wire import FileId

# Names whose last inode is remembered, and new names needed before "never again" means anything.
REMEMBERED = 4096
FRESH = 4


class LinkRule:
    """Watches how names are used. stepped: every pattern of these files holds {step}."""

    def __init__(self, stepped: bool) -> None:
        self._stepped = stepped
        self._last: OrderedDict[str, tuple[int, int]] = OrderedDict()
        self._fresh = 0
        self._replaced = 0
        self._in_place = False

    def saw(self, files: Iterable[FileId]) -> None:
        """These files were complete at one time, as a snapshot or checkpoint."""
        for file in files:
            now = (file.inode, file.mtime_ns)
            last = self._last.pop(file.path, None)
            self._last[file.path] = now
            if last is None:
                self._fresh += 1
            elif last[0] != file.inode:
                self._replaced += 1
            elif last[1] != file.mtime_ns:
                self._in_place = True
        while len(self._last) > REMEMBERED:
            self._last.popitem(last=False)

    @property
    def allowed(self) -> bool:
        if self._in_place:
            return False
        return self._replaced > 0 or (self._stepped and self._fresh >= FRESH)
