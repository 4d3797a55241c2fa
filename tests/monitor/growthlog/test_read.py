"""Reading logs that are whole, torn, or full of garbage."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from monitor.growthlog.read import BadLine, Lines, decode, read_log
from monitor.growthlog.records import AnyRecord, Remark
from monitor.growthlog.write import encode
from probes.errors import ReadError
from tests.monitor.growthlog.any_records import any_record
from tests.monitor.growthlog.conftest import remark

LINES = [encode(remark(n, text)) for n, text in enumerate(["first", "zweite", "third {}"], 1)]


def is_record(line: bytes) -> bool:
    try:
        decode(line)
    except BadLine:
        return False
    return True


def test_a_log_torn_at_any_byte(tmp_path: Path) -> None:
    """Cut anywhere, a log gives all records whose lines are whole, and says whether a piece of one
    is left over. A last line that only lacks its newline is whole."""
    whole = b"".join(LINES)
    ends = [len(b"".join(LINES[:n])) for n in range(len(LINES) + 1)]
    path = tmp_path / "growth.jsonl"
    for cut in range(len(whole) + 1):
        path.write_bytes(whole[:cut])
        read = read_log(path)
        count = sum(cut >= end - 1 for end in ends[1:])
        assert [r.seq for r in read.records] == list(range(1, count + 1))
        assert read.torn == (cut not in ends and cut + 1 not in ends)
        assert (read.bad_lines, read.size) == (0, cut)


@settings(deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.binary(max_size=200).map(lambda b: b.replace(b"\n", b" ")) | any_record))
def test_garbage_between_records_is_counted(
    tmp_path: Path, pieces: list[bytes | AnyRecord]
) -> None:
    """Whatever lines stand between records, all records are read, in order, and every line that is
    neither a record nor blank is counted."""
    path = tmp_path / "growth.jsonl"
    lines = [p.rstrip(b"\r") + b"\n" if isinstance(p, bytes) else encode(p) for p in pieces]
    path.write_bytes(b"".join(lines))
    read = read_log(path)
    good = [line for line in lines if is_record(line)]
    assert [encode(r) for r in read.records] == [encode(decode(line)) for line in good]
    assert read.bad_lines == sum(bool(line.strip()) for line in lines) - len(good)
    assert not read.torn


@settings(deadline=None)
@given(st.lists(st.integers(1, 40)), st.binary(max_size=60))
def test_pieces_make_no_difference(sizes: list[int], tail: bytes) -> None:
    """A stream cut into pieces of any length gives the same records and the same count."""
    stream = b"".join([LINES[0], b"no record\n", LINES[1], b"\n", LINES[2], tail])
    at_once, piecewise = Lines(), Lines()
    expected = at_once.feed(stream)
    got: list[AnyRecord] = []
    start = 0
    for size in [*sizes, len(stream)]:
        got += piecewise.feed(stream[start : start + size])
        start += size
    assert got == expected
    assert (piecewise.bad, piecewise.rest) == (at_once.bad, at_once.rest)


def test_an_endless_line_is_not_held_in_memory() -> None:
    """A stretch of 40 MB without a newline counts as one bad line, and what follows is read."""
    lines = Lines()
    held = 0
    for _ in range(40):
        assert lines.feed(b"\0" * (1 << 20)) == []
        held = max(held, len(lines.rest))
    assert held <= 17 << 20
    assert lines.bad == 1
    assert lines.feed(b"\0\0\n" + LINES[0]) == [remark(1, "first")]
    assert (lines.bad, lines.rest) == (1, b"")


def test_an_empty_log(tmp_path: Path) -> None:
    """A log without a byte is a log without records."""
    path = tmp_path / "growth.jsonl"
    path.touch()
    read = read_log(path)
    assert (read.records, read.bad_lines, read.torn, read.size) == ([], 0, False, 0)


def test_a_missing_log_and_one_that_is_none(tmp_path: Path) -> None:
    """What cannot be read at all is an error that names the file."""
    with pytest.raises(ReadError, match=r"gone\.jsonl: there is no growth log"):
        read_log(tmp_path / "gone.jsonl")
    with pytest.raises(ReadError, match="cannot be read"):
        read_log(tmp_path)


def test_progress_is_told(tmp_path: Path) -> None:
    """A long log tells how far reading has come, ending at its size."""
    path = tmp_path / "growth.jsonl"
    path.write_bytes(encode(remark(1, "x" * 1000)) * 3000)
    told: list[tuple[int, int]] = []
    read = read_log(path, lambda done, total: told.append((done, total)))
    assert len(read.records) == 3000
    assert all(isinstance(record, Remark) for record in read.records)
    assert len(told) > 1
    assert told == sorted(told)
    assert told[-1] == (path.stat().st_size,) * 2
