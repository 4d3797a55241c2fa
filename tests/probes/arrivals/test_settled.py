"""When a file counts as complete, and which file systems need patience."""

from __future__ import annotations

import pytest

from probes.arrivals.settled import Rest, Settling, is_network, mount_kind

WALL = 1_700_000_000.0
PATH = "/run/h_1.npy"


def identity(age_s: float, size: int = 100, inode: int = 7) -> tuple[int, int, int]:
    return inode, size, int((WALL - age_s) * 1e9)


def test_old_file_at_first_sight() -> None:
    """A file unchanged for longer than the quiet time is complete at once (catching up)."""
    assert Settling(0.2).rest(PATH, identity(0.3), 10.0, WALL)


def test_young_file_waits() -> None:
    """A young file is complete after the quiet time without change, not before."""
    rule = Settling(0.2)
    young = identity(0.05)
    assert not rule.rest(PATH, young, 10.0, WALL)
    assert not rule.rest(PATH, young, 10.1, WALL + 0.1)
    assert rule.rest(PATH, young, 10.21, WALL + 0.21)


def test_change_begins_anew() -> None:
    """A change of size, time or inode starts the quiet time again."""
    rule = Settling(0.2)
    assert not rule.rest(PATH, identity(0.0), 10.0, WALL)
    for n, changed in enumerate(
        [identity(-0.15, size=120), identity(-0.3), identity(-0.45, inode=8)], 1
    ):
        assert not rule.rest(PATH, changed, 10.0 + 0.15 * n, WALL + 0.15 * n)


def test_clock_ahead() -> None:
    """A file dated in the future (a server's clock is ahead) is complete after two looks."""
    rule = Settling(0.2)
    ahead = identity(-500.0)
    assert not rule.rest(PATH, ahead, 10.0, WALL)
    assert rule.rest(PATH, ahead, 10.3, WALL + 0.3)


def test_closed_is_complete_until_it_changes() -> None:
    """After an event the file is complete as it was then, and no longer once written again."""
    rule = Settling(0.2)
    rule.closed(PATH, identity(0.0))
    assert rule.rest(PATH, identity(0.0), 10.0, WALL) == Rest.CLOSED
    assert rule.rest(PATH, identity(0.0), 10.01, WALL + 0.01) == Rest.CLOSED
    assert rule.rest(PATH, identity(0.0), 10.21, WALL + 0.21) == Rest.QUIET
    assert not rule.rest(PATH, identity(-0.22, size=50), 10.22, WALL + 0.22)


def test_forgets_what_is_gone() -> None:
    """An event of a file that is gone by the next look counts no more."""
    rule = Settling(0.2)
    rule.closed(PATH, identity(0.0))
    rule.forget_all_but(set())
    assert not rule.rest(PATH, identity(0.0), 10.0, WALL)


MOUNTS = """\
21 1 8:1 / / rw,relatime shared:1 - ext4 /dev/sda1 rw
30 21 0:50 / /projects rw shared:2 - nfs4 server:/p rw
31 21 0:51 / /mnt/tide\\040data rw - fuse.sshfs far: rw
32 21 0:52 / /scratch rw - lustre mds:/scratch rw
"""


@pytest.mark.parametrize(
    ("path", "kind", "network"),
    [
        ("/var/run1", "ext4", False),
        ("/projects/run", "nfs4", True),
        ("/projects-old", "ext4", False),
        ("/mnt/tide data/run", "fuse.sshfs", True),
        ("/scratch", "lustre", True),
    ],
)
def test_mounts(path: str, kind: str, network: bool) -> None:
    """The deepest mount that holds the path tells; a shared beginning of a name does not."""
    assert mount_kind(path, MOUNTS) == kind
    assert is_network(kind) is network


def test_unreadable_mounts() -> None:
    """Lines of another form are passed over."""
    assert mount_kind("/x", "nonsense\n1 2 3 - ext4\n") == ""
