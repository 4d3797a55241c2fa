"""When is a file complete? A pure rule over what successive looks have seen, and the quiet time
that a file system calls for."""

from __future__ import annotations

import re
from dataclasses import dataclass, field

LOCAL_QUIET = 0.2
# Twice the three seconds for which attributes of files are commonly cached at least.
NETWORK_QUIET = 6.0
_NETWORK = re.compile(
    r"^(nfs\d?|cifs|smb3?|9p|afs|lustre|gpfs|beegfs|ceph|glusterfs|orangefs|pvfs2|panfs|virtiofs|vboxsf|fuse\..*|fuse)$"
)


def is_network(kind: str) -> bool:
    """Whether a file system type hides changes made elsewhere for a while, and sends no events."""
    return _NETWORK.match(kind) is not None


def mount_kind(path: str, mounts: str) -> str:
    """Type of the file system that holds an absolute path, from the text of /proc/self/mountinfo
    (format: Linux kernel documentation, filesystems/proc, section 3.5); "" if it does not say."""
    best, kind = -1, ""
    for line in mounts.splitlines():
        before, _, after = line.partition(" - ")
        words = before.split()
        if len(words) < 5 or not after:
            continue
        point = words[4].replace("\\040", " ")
        inside = path == point or path.startswith(point.rstrip("/") + "/")
        if inside and len(point) >= best:
            best, kind = len(point), after.split()[0]
    return kind


@dataclass
class Settling:
    """Remembers when each file was first seen as it is now.

    quiet: seconds without change that make a file complete. Times: `now` is monotonic, `wall` is
    seconds since the epoch.
    """

    quiet: float
    _first: dict[str, tuple[tuple[int, int, int], float]] = field(default_factory=dict)
    _hurried: dict[str, tuple[int, int, int] | None] = field(default_factory=dict)

    def closed(self, path: str) -> None:
        """The file was renamed into place or closed after writing: complete as it is next seen."""
        self._hurried[path] = None

    def complete(self, path: str, identity: tuple[int, int, int], now: float, wall: float) -> bool:
        """Whether a file with this (inode, size, time of change in ns) is complete."""
        if path in self._hurried:
            as_closed = self._hurried[path]
            if as_closed is None or as_closed == identity:
                self._hurried[path] = identity
                return True
            del self._hurried[path]  # it is being written again
        old = self._first.get(path)
        if old is None or old[0] != identity:
            self._first[path] = (identity, now)
            # Old enough already when first seen as it is: nobody is at it.
            return wall - identity[2] / 1e9 >= self.quiet
        return now - old[1] >= self.quiet or wall - identity[2] / 1e9 >= self.quiet

    def forget_all_but(self, paths: set[str]) -> None:
        """Drop what is remembered of files that are gone."""
        self._first = {p: v for p, v in self._first.items() if p in paths}
        self._hurried = {p: v for p, v in self._hurried.items() if p in paths}
