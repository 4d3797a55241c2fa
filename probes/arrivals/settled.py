"""When is a file complete? A pure rule over what successive looks have seen, and the quiet time
that a file system calls for."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from enum import IntEnum

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


# Inode, size in bytes, time of change in ns.
Identity = tuple[int, int, int]


class Rest(IntEnum):
    """NONE: it may still be written. CLOSED: renamed into place or closed after writing, and
    unchanged since: complete, unless its writer comes back for more (a growing file). QUIET:
    unchanged for the quiet time."""

    NONE = 0
    CLOSED = 1
    QUIET = 2


@dataclass
class Settling:
    """Remembers when each file was first seen as it is now.

    quiet: seconds without change that make a file complete. Times: `now` is monotonic, `wall` is
    seconds since the epoch.
    """

    quiet: float
    _first: dict[str, tuple[Identity, float]] = field(default_factory=dict)
    _hurried: dict[str, Identity] = field(default_factory=dict)

    def closed(self, path: str, identity: Identity) -> None:
        """The file was renamed into place or closed after writing, and was this then."""
        self._hurried[path] = identity

    def rest(self, path: str, identity: Identity, now: float, wall: float) -> Rest:
        """How calm a file is that is seen like this."""
        old = self._first.get(path)
        if old is None or old[0] != identity:
            old = self._first[path] = (identity, now)
        # Old enough already when first seen as it is: nobody is at it.
        if now - old[1] >= self.quiet or wall - identity[2] / 1e9 >= self.quiet:
            return Rest.QUIET
        return Rest.CLOSED if self._hurried.get(path) == identity else Rest.NONE

    def forget_all_but(self, paths: set[str]) -> None:
        """Drop what is remembered of files that are gone."""
        self._first = {p: v for p, v in self._first.items() if p in paths}
        self._hurried = {p: v for p, v in self._hurried.items() if p in paths}
