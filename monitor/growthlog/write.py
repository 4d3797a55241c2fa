"""Append records to a growth log: one line, one write, plain ASCII, by one guard at a time."""

from __future__ import annotations

import contextlib
import errno
import math
import os
from collections import deque
from pathlib import Path

import msgspec
from msgspec.structs import replace

from monitor.growthlog import fitting
from monitor.growthlog.lock import Lock, LockLost
from monitor.growthlog.numbers import rounded, significant
from monitor.growthlog.plain import plain_json, with_valid_text
from monitor.growthlog.records import (
    AnyRecord,
    Evidence,
    History,
    Opened,
    Segment,
    Snapshot,
    TileMap,
)
from probes.errors import ReadError

# Lines that wait in memory while the disk is full.
_MOST_WAITING = 2000
# The last record is looked for in so many bytes at the end of the file.
_TAIL = 1 << 18


class _Numbered(msgspec.Struct):
    """What every record has, of whatever type and version it may be."""

    seq: int


_numbered = msgspec.json.Decoder(_Numbered)


def as_logged(evidence: Evidence) -> Evidence:
    """`evidence` exactly as a reader of the log will decode it: rounded, spelled, and without
    what does not fit into a record. Decide upon this. Applying it twice changes nothing more."""
    return fitting.fit_evidence(rounded(evidence))


def encode(record: AnyRecord) -> bytes:
    """One line of the log, newline included. Snapshot records are shorter than 4,000 bytes.

    Numbers are rounded as `monitor.growthlog.numbers` says.
    """
    record = replace(record, at=round(record.at, 3))
    if isinstance(record, Snapshot):
        record = replace(
            record,
            evidence=as_logged(record.evidence),
            verdict=fitting.fit_verdict(rounded(record.verdict)),
            mtime=round(record.mtime, 3),
            time=_finite(record.time),
        )
    elif isinstance(record, History):
        record = fitting.fit_history(rounded(record))
    elif isinstance(record, TileMap):
        low, high = (_finite(v) or 0.0 for v in (record.low, record.high))
        record = replace(record, low=significant(low), high=significant(high))
    try:
        line = plain_json(record)
    except UnicodeEncodeError:
        # Names of files need not be valid text.
        kind = type(record)
        record = msgspec.convert(with_valid_text(msgspec.to_builtins(record)), kind)
        line = plain_json(record)
    if isinstance(record, Snapshot) and len(line) > fitting.LONGEST_SNAPSHOT:
        line = plain_json(fitting.fit_snapshot(record))
    return line + b"\n"


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None


class LogWriter:
    """Appends to one log. Whoever makes one holds the log's lock.

    failing: "" or why records are not reaching the file at present. They wait in memory then, in
    order, and are written with the first append that succeeds: a full disk does not stop a guard.
    next_seq: for the next record.
    """

    def __init__(self, path: Path, lock: Lock) -> None:
        self._path, self._lock = path, lock
        self._file: int | None = None
        self._identity: tuple[int, int] | None = None
        self._head: dict[type, bytes] = {}
        self._waiting: deque[bytes] = deque()
        self._lost = 0
        self.failing = ""
        self.next_seq = last_seq(path) + 1

    def append(self, record: AnyRecord, sync: bool = False) -> None:
        """Write one record; with `sync`, return only when it is on the disk.

        Raises LockLost, and writes nothing, if another guard has taken the log over.
        """
        if not self._lock.held():
            self._close_file()
            raise LockLost.of(self._path)
        line = encode(record)
        self.next_seq = max(self.next_seq, record.seq + 1)
        self._waiting.append(line)
        if len(self._waiting) > _MOST_WAITING:
            self._waiting.popleft()
            self._lost += 1
        try:
            self._write_waiting()
            if sync and self._file is not None:
                os.fsync(self._file)
        except OSError as error:
            # The next append starts from the path again, and sees whether this one tore a line.
            self._close_file()
            self.failing = self._explain(error)
        else:
            self.failing, self._lost = "", 0
        if isinstance(record, Opened | Segment):
            self._head[type(record)] = line

    def close(self) -> None:
        """Try once more to write what waits, and close the file. May be called twice."""
        if self._waiting and self._lock.held():
            try:
                self._write_waiting()
                self.failing = ""
            except OSError as error:
                self.failing = self._explain(error)
        self._close_file()

    def _write_waiting(self) -> None:
        file, torn = self._ready()
        while self._waiting:
            # After a torn line a newline comes first: readers then count one bad line, and this
            # record follows whole.
            line = b"\n" + self._waiting[0] if torn else self._waiting[0]
            written = os.write(file, line)
            if written >= len(line) - 1:
                # Where only the newline is missing, the next line brings it.
                self._waiting.popleft()
            if written < len(line):
                raise OSError(errno.ENOSPC, f"only {written} of {len(line)} bytes were taken")
            torn = False

    def _ready(self) -> tuple[int, bool]:
        """The open file, and whether its last line is torn."""
        if self._file is not None and self._moved():
            self._close_file()
        if self._file is not None:
            return self._file, False
        flags = os.O_RDWR | os.O_APPEND | os.O_CREAT | os.O_CLOEXEC
        file = self._file = os.open(self._path, flags, 0o644)
        status = os.fstat(file)
        identity = (status.st_dev, status.st_ino)
        if self._identity not in (None, identity):
            # The log was moved away or removed: the new one has to say what it is about.
            self._waiting.extendleft(reversed(self._head.values()))
        if self._identity != identity and status.st_size == 0:
            sync_folder(self._path.parent)
        self._identity = identity
        torn = status.st_size > 0 and os.pread(file, 1, status.st_size - 1) != b"\n"
        return file, torn

    def _moved(self) -> bool:
        try:
            status = os.stat(self._path)
        except FileNotFoundError:
            return True
        return (status.st_dev, status.st_ino) != self._identity

    def _close_file(self) -> None:
        if self._file is not None:
            with contextlib.suppress(OSError):
                os.close(self._file)
            self._file = None

    def _explain(self, error: OSError) -> str:
        lost = f", {self._lost} older ones are lost" if self._lost else ""
        return (
            f"growth log {self._path} is not being written ({error.strerror or error}); "
            f"{len(self._waiting)} records wait in memory{lost}"
        )


def last_seq(path: Path) -> int:
    """Highest sequence number near the end of a log, whatever the types and versions of its
    records; 0 for a log that is empty, missing or holds none."""
    try:
        with path.open("rb") as file:
            end = file.seek(0, os.SEEK_END)
            span = _TAIL
            while True:
                file.seek(max(0, end - span))
                found = _seqs(file.read(min(span, end)))
                if found or span >= end:
                    return max(found, default=0)
                span *= 8
    except FileNotFoundError:
        return 0
    except OSError as error:
        raise ReadError(
            f"the growth log cannot be read ({error.strerror})", str(path), "check its permissions"
        ) from error


def _seqs(tail: bytes) -> list[int]:
    found = []
    for line in tail.split(b"\n"):
        with contextlib.suppress(msgspec.MsgspecError, UnicodeDecodeError, RecursionError):
            found.append(_numbered.decode(line).seq)
    return found


def sync_folder(folder: Path) -> None:
    """Make a new name in `folder` durable, where the file system can."""
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
