"""Read a growth log: everything that can be read, and a count of what cannot."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import msgspec

from monitor.growthlog.records import AnyRecord
from probes.errors import ReadError

_BLOCK = 1 << 20
# No record is nearly as long; a longer stretch without a newline is not worth holding in memory.
_LONGEST_LINE = 16 << 20

_decoder: msgspec.json.Decoder[AnyRecord] = msgspec.json.Decoder(AnyRecord)


class BadLine(ReadError):
    """A line is no record that this version knows."""


@dataclass(frozen=True, slots=True)
class LogContents:
    """A log as it was read.

    records: in file order. bad_lines: complete lines that are no known record. torn: the last line
    has no newline and is no record (yet): its writer was cut off or is at it. size: bytes read.
    """

    records: list[AnyRecord]
    bad_lines: int
    torn: bool
    size: int


def decode(line: bytes) -> AnyRecord:
    """The record in one line, with or without its newline. Unknown fields are skipped.

    Raises BadLine for anything else, also for a type of record that this version does not know.
    """
    try:
        return _decoder.decode(line)
    except (msgspec.MsgspecError, UnicodeDecodeError, RecursionError) as error:
        raise BadLine(f"not a record of a growth log ({error})") from error


class Lines:
    """Cuts a stream of bytes, in whatever pieces it comes, into records.

    size: bytes so far. bad: complete lines so far that are no known record. rest: the incomplete
    last line.
    """

    def __init__(self) -> None:
        self.size = 0
        self.bad = 0
        self.rest = b""
        self._skipping = False

    def feed(self, piece: bytes) -> list[AnyRecord]:
        """Records whose lines are complete with `piece`."""
        self.size += len(piece)
        whole, newline, rest = piece.rpartition(b"\n")
        if not newline:
            self._keep(self.rest + piece)
            return []
        lines = (self.rest + whole).split(b"\n")
        if self._skipping:
            del lines[0]
            self._skipping = False
        self.rest = b""
        self._keep(rest)
        return self._records(lines)

    def finish(self) -> list[AnyRecord]:
        """At the end of the stream: the record of a last line that only lacks its newline."""
        try:
            last = [decode(self.rest)]
        except BadLine:
            return []
        self.rest = b""
        return last

    def _keep(self, rest: bytes) -> None:
        if self._skipping:
            return
        if len(rest) > _LONGEST_LINE:
            self.bad += 1
            self._skipping, rest = True, b""
        self.rest = rest

    def _records(self, lines: list[bytes]) -> list[AnyRecord]:
        records = []
        for line in lines:
            if not line.strip():
                continue
            try:
                records.append(decode(line))
            except BadLine:
                self.bad += 1
        return records


def each_record(
    path: Path, lines: Lines | None = None, progress: Callable[[int, int], None] | None = None
) -> Iterator[AnyRecord]:
    """The records of the log at `path` one after the other, for whoever must not hold them all (a
    record takes about 3 kB of memory).

    lines: tells afterwards what else was in the file. progress: called now and then with (bytes
    read, bytes in all). A last line without newline counts as a record if it is whole. Raises
    ReadError where the file cannot be read at all.
    """
    lines = Lines() if lines is None else lines
    try:
        with path.open("rb", buffering=0) as file:
            total = os.fstat(file.fileno()).st_size
            while piece := file.read(_BLOCK):
                yield from lines.feed(piece)
                if progress is not None:
                    progress(lines.size, max(total, lines.size))
    except FileNotFoundError as error:
        remedy = "guard writes it; start that first, or name another log"
        raise ReadError("there is no growth log", str(path), remedy) from error
    except OSError as error:
        raise ReadError(f"the growth log cannot be read ({error.strerror})", str(path)) from error
    yield from lines.finish()


def read_log(path: Path, progress: Callable[[int, int], None] | None = None) -> LogContents:
    """All records of the log at `path`; arguments and errors as for `each_record`."""
    lines = Lines()
    records = list(each_record(path, lines, progress))
    return LogContents(records, lines.bad, torn=bool(lines.rest.strip()), size=lines.size)
