"""Appending: after torn lines, on a full disk, beside other writers, killed at any moment."""

from __future__ import annotations

import errno
import os
import random
import resource
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from monitor.growthlog.lock import Lock, LockLost
from monitor.growthlog.read import read_log
from monitor.growthlog.records import Opened, Segment
from monitor.growthlog.write import LogWriter, encode, last_seq
from probes.errors import ReadError
from tests.monitor.growthlog.conftest import remark

MakeWriter = Callable[[], LogWriter]


def seqs(log: Path) -> list[int]:
    return [record.seq for record in read_log(log).records]


def test_sequence_numbers_go_on(open_writer: MakeWriter, log: Path) -> None:
    """A log starts at 1, and the next guard goes on where the last one ended."""
    writer = open_writer()
    assert writer.next_seq == 1
    for _ in range(3):
        writer.append(remark(writer.next_seq))
    assert open_writer().next_seq == 4
    assert seqs(log) == [1, 2, 3]


@pytest.mark.parametrize("cut", range(1, len(encode(remark(2)))))
def test_after_a_torn_line_the_next_record_is_whole(
    cut: int, open_writer: MakeWriter, log: Path
) -> None:
    """A line torn at any byte costs itself only: the next guard starts a new line. Where just the
    newline was missing the record counts, and its number is not given again."""
    torn = encode(remark(2))[:cut]
    log.write_bytes(encode(remark(1)) + torn)
    complete = cut == len(encode(remark(2))) - 1
    writer = open_writer()
    assert writer.next_seq == (3 if complete else 2)
    writer.append(remark(writer.next_seq, "after"))
    read = read_log(log)
    assert [r.seq for r in read.records] == ([1, 2, 3] if complete else [1, 2])
    assert (read.bad_lines, read.torn) == (0 if complete else 1, False)


def test_the_last_number_is_found_behind_other_lines(tmp_path: Path) -> None:
    """Types of tomorrow, garbage and long lines at the end do not hide the last number."""
    path = tmp_path / "growth.jsonl"
    assert last_seq(path) == 0
    path.write_bytes(
        encode(remark(7))
        + b'{"rec":"a type of tomorrow","seq":8,"at":2.0}\n'
        + b"x" * 3_000_000
        + b'\n[1]\n{"seq":"9"}\n'
    )
    assert last_seq(path) == 8
    path.write_bytes(b"no log\n" * 1000)
    assert last_seq(path) == 0
    with pytest.raises(ReadError, match="cannot be read"):
        last_seq(tmp_path)


class Calls:
    """Real writes and syncs, taken down in order."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        self.made: list[bytes | str] = []
        self._write, self._sync = os.write, os.fsync
        monkeypatch.setattr(os, "write", self.write)
        monkeypatch.setattr(os, "fsync", self.sync)

    def write(self, file: int, data: bytes) -> int:
        self.made.append(bytes(data))
        return self._write(file, data)

    def sync(self, file: int) -> None:
        self.made.append("sync")
        self._sync(file)


def test_a_record_is_one_write_synced_on_request(
    open_writer: MakeWriter, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each record goes to the file in a single call, so that no other can come between, and is
    synced if it asks for that, and not otherwise."""
    writer = open_writer()
    writer.append(remark(1))
    calls = Calls(monkeypatch)
    writer.append(remark(2, "x" * 2000))
    writer.append(remark(3), sync=True)
    assert calls.made == [encode(remark(2, "x" * 2000)), encode(remark(3)), "sync"]


# --- a full disk ----------------------------------------------------------------------------


@pytest.fixture
def limit_file_size() -> Iterator[Callable[[int], None]]:
    """Lets the kernel refuse bytes beyond a size, as a full disk does: the last write is cut short,
    the next one fails."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    # Python ignores the signal that comes with it, as long as nobody changes that.
    assert signal.getsignal(signal.SIGXFSZ) == signal.SIG_IGN
    yield lambda size: resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


@pytest.mark.parametrize("room", [*range(len(encode(remark(2))) + 3), 150, 200])
def test_a_full_disk_loses_nothing(
    room: int,
    open_writer: MakeWriter,
    log: Path,
    limit_file_size: Callable[[int], None],
) -> None:
    """While the file cannot grow nothing is raised and `failing` says what and why; once it can,
    the records that waited follow in order. A torn line costs no record."""
    writer = open_writer()
    writer.append(remark(1))
    limit_file_size(log.stat().st_size + room)
    for n in range(2, 8):
        writer.append(remark(n))
        assert [k for k in seqs(log) if k > n] == []
    assert "is not being written" in writer.failing
    assert "records wait in memory" in writer.failing
    limit_file_size(resource.RLIM_INFINITY)
    writer.append(remark(8), sync=True)
    assert writer.failing == ""
    read = read_log(log)
    assert [r.seq for r in read.records] == list(range(1, 9))
    assert read.bad_lines <= 1
    assert writer.next_seq == 9


def test_what_waits_is_written_at_the_end(
    open_writer: MakeWriter, log: Path, limit_file_size: Callable[[int], None]
) -> None:
    """Closing tries once more."""
    writer = open_writer()
    limit_file_size(10)
    writer.append(remark(1))
    assert writer.failing
    limit_file_size(resource.RLIM_INFINITY)
    writer.close()
    assert (writer.failing, seqs(log)) == ("", [1])
    writer.close()


def test_a_disk_full_for_very_long_loses_the_oldest(
    open_writer: MakeWriter, log: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Memory is bounded: of thousands of records the oldest go, and `failing` counts them."""

    def full(file: int, data: bytes) -> int:
        raise OSError(errno.ENOSPC, "No space left on device")

    writer = open_writer()
    with monkeypatch.context() as patch:
        patch.setattr(os, "write", full)
        # The lock is looked at before each record; its own file is not what is tested here.
        for n in range(1, 2011):
            writer.append(remark(n))
    assert "No space left on device" in writer.failing
    assert "2000 records wait" in writer.failing
    assert "10 older ones are lost" in writer.failing
    writer.append(remark(2011))
    assert seqs(log) == list(range(12, 2012))
    assert writer.failing == ""


def test_a_log_that_was_moved_away_is_begun_again(open_writer: MakeWriter, log: Path) -> None:
    """Somebody renames or removes the log of a running guard: a new one is begun that says first
    what it is about, and numbers go on."""
    opened = Opened(seq=1, at=1.0, run="brine tank", settings={}, versions={}, host="n1", pid=3)
    segment = Segment(seq=2, at=1.0, number=1, why="start")
    writer = open_writer()
    for record in (opened, segment, remark(3)):
        writer.append(record)
    moved = log.with_name("old.jsonl")
    log.rename(moved)
    writer.append(remark(4))
    writer.append(remark(5))
    assert seqs(moved) == [1, 2, 3]
    assert read_log(log).records == [opened, segment, remark(4), remark(5)]


# --- two guards -----------------------------------------------------------------------------


def test_a_guard_whose_lock_was_taken_writes_nothing(open_writer: MakeWriter, log: Path) -> None:
    """After a take-over the first writer raises LockLost and leaves the log alone."""
    first = open_writer()
    first.append(remark(1))
    lock = Lock.acquire(log, take_over=True)
    second = LogWriter(log, lock)
    with pytest.raises(LockLost, match="another guard has taken this log over"):
        first.append(remark(2, "from the first"))
    second.append(remark(second.next_seq, "from the second"))
    first.close()
    assert read_log(log).records == [remark(1), remark(2, "from the second")]
    lock.release()


# --- killed ---------------------------------------------------------------------------------

_ENDLESS = """
import sys
from pathlib import Path
from monitor.growthlog.lock import Lock
from monitor.growthlog.records import Remark
from monitor.growthlog.write import LogWriter
log = Path(sys.argv[1])
writer = LogWriter(log, Lock.acquire(log))
while True:
    n = writer.next_seq
    writer.append(Remark(seq=n, at=1.0, text="x" * (n * 37 % 3000)), sync=n % 50 == 0)
"""


def test_killed_at_any_moment_a_writer_leaves_whole_records(log: Path) -> None:
    """Ten writers in turn, each killed with signal 9 at a random moment of its work: the next gets
    the lock at once and goes on, and in the end every record is there once and in order."""
    moments = random.Random(60217)
    for _ in range(10):
        before = log.stat().st_size if log.exists() else 0
        process = subprocess.Popen([sys.executable, "-P", "-c", _ENDLESS, str(log)])
        try:
            deadline = time.monotonic() + 30
            while not (log.exists() and log.stat().st_size > before):
                assert process.poll() is None, "the writer ended by itself"
                assert time.monotonic() < deadline
            until = time.monotonic() + moments.uniform(0.0, 0.05)
            while time.monotonic() < until:
                pass
        finally:
            process.kill()
            process.wait(timeout=30)
    read = read_log(log)
    assert len(read.records) > 10
    assert [r.seq for r in read.records] == list(range(1, len(read.records) + 1))
    assert read.bad_lines <= 10
