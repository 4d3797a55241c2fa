"""When a pin may be a hard link."""

from __future__ import annotations

from monitor.actions.linkrule import LinkRule
from probes.wire import FileId


def file(name: str, inode: int, time: int) -> FileId:
    return FileId(path=name, size=8, mtime_ns=time, inode=inode)


def test_not_before_anything_was_seen() -> None:
    """One snapshot tells nothing of how names are used."""
    rule = LinkRule(stepped=True)
    rule.saw([file("T_1", 1, 1)])
    assert not rule.allowed


def test_names_with_steps_that_never_come_again() -> None:
    """Four new names with {step} in the pattern are enough, without {step} they are not."""
    stepped, fixed = LinkRule(stepped=True), LinkRule(stepped=False)
    for n in range(4):
        stepped.saw([file(f"T_{n}", n, n)])
        fixed.saw([file(f"T_{n}", n, n)])
    assert stepped.allowed
    assert not fixed.allowed


def test_names_replaced_by_rename() -> None:
    """The same name on a new inode: the old file lives on under its link."""
    rule = LinkRule(stepped=False)
    rule.saw([file("latest", 1, 1)])
    rule.saw([file("latest", 2, 2)])
    assert rule.allowed


def test_written_in_place_once_is_never_trusted_again() -> None:
    """The same inode with a new time: a link would have been overwritten."""
    rule = LinkRule(stepped=True)
    for n in range(9):
        rule.saw([file(f"T_{n}", n, n)])
    rule.saw([file("T_3", 3, 99)])
    rule.saw([file("T_3", 77, 100)])
    assert not rule.allowed


def test_seeing_a_file_twice_unchanged_means_nothing() -> None:
    """Checkpoints are listed again and again."""
    rule = LinkRule(stepped=True)
    for _ in range(9):
        rule.saw([file("T_1", 1, 1)])
    assert not rule.allowed
