"""Following a log that somebody else writes."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from monitor.growthlog.follow import Follower
from monitor.growthlog.read import read_log
from monitor.growthlog.records import AnyRecord
from monitor.growthlog.write import encode
from probes.errors import ReadError
from tests.monitor.growthlog.conftest import remark

STREAM = b"".join(
    [encode(remark(1)), b"garbage\n", encode(remark(2)), b"\n", encode(remark(3)), b'{"rec":"re\n']
)


def append(path: Path, data: bytes) -> None:
    with path.open("ab") as file:
        file.write(data)


@settings(deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.integers(0, 90), max_size=12), st.integers(1, 200))
def test_following_gives_what_reading_gives(tmp_path: Path, sizes: list[int], at_most: int) -> None:
    """However the writer's bytes come and however little is read at a time, the records are those
    of the finished file, none twice."""
    path = tmp_path / "growth.jsonl"
    path.unlink(missing_ok=True)
    follower, got, start = Follower(path), list[AnyRecord](), 0
    for size in [*sizes, len(STREAM)]:
        append(path, STREAM[start : start + size])
        start += size
        got += follower.poll(at_most)
        assert not follower.restarted
    while follower.behind:
        got += follower.poll(at_most)
    whole = read_log(path)
    assert got == whole.records
    assert follower.bad_lines == whole.bad_lines


def test_an_incomplete_line_is_held_back(log: Path) -> None:
    """Half a record gives nothing; the other half completes it."""
    line = encode(remark(1))
    follower = Follower(log)
    append(log, line[:20])
    assert follower.poll() == []
    assert follower.poll() == []
    append(log, line[20:])
    assert follower.poll() == [remark(1)]
    assert (follower.bad_lines, follower.behind, follower.poll()) == (0, 0, [])


def test_a_log_that_is_not_there_yet(log: Path) -> None:
    """Waiting for a log is no error; once it is there it is read from its beginning."""
    follower = Follower(log)
    assert follower.poll() == []
    assert follower.missing
    append(log, encode(remark(1)))
    assert follower.poll() == [remark(1)]
    assert (follower.missing, follower.restarted) == (False, False)


def test_a_log_cut_short_is_read_anew(log: Path) -> None:
    """A file shorter than what was read is another log."""
    append(log, encode(remark(1)) * 3)
    follower = Follower(log)
    follower.poll()
    log.write_bytes(encode(remark(9)))
    assert follower.poll() == [remark(9)]
    assert follower.restarted
    assert follower.poll() == []
    assert not follower.restarted


def test_a_log_rewritten_to_more_than_before_is_noticed(log: Path) -> None:
    """Size alone would not tell: the same file cut and written again beyond the place reached."""
    append(log, encode(remark(1)))
    follower = Follower(log)
    follower.poll()
    log.write_bytes(encode(remark(5, "another run altogether")) + encode(remark(6)))
    assert follower.poll() == [remark(5, "another run altogether"), remark(6)]
    assert follower.restarted


def test_a_replaced_log_is_read_anew(log: Path) -> None:
    """Another file under the same name is read from its beginning, even if it starts alike; bad
    lines are counted anew."""
    append(log, b"bad\n" + encode(remark(1)))
    follower = Follower(log)
    follower.poll()
    assert follower.bad_lines == 1
    fresh = log.with_suffix(".new")
    fresh.write_bytes(encode(remark(1)) + encode(remark(2)))
    os.replace(fresh, log)
    assert follower.poll() == [remark(1), remark(2)]
    assert (follower.restarted, follower.bad_lines) == (True, 0)


def test_a_removed_log_that_comes_again(log: Path) -> None:
    """While the log is away nothing comes; a new one counts as a new beginning."""
    append(log, encode(remark(1)))
    follower = Follower(log)
    follower.poll()
    kept_inode = os.open(log, os.O_RDONLY)  # so that the new file cannot get the same number
    log.unlink()
    assert follower.poll() == []
    assert follower.missing
    append(log, encode(remark(1)))
    assert follower.poll() == [remark(1)]
    assert follower.restarted
    os.close(kept_inode)


def test_what_cannot_be_read_is_an_error(tmp_path: Path) -> None:
    """A folder instead of a log is told, not waited for."""
    with pytest.raises(ReadError, match="cannot be read"):
        Follower(tmp_path).poll()
