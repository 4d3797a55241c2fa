"""Follow a growth log that another process writes, by byte offset. Never writes, never locks."""

from __future__ import annotations

import os
from pathlib import Path

from monitor.growthlog.read import Lines
from monitor.growthlog.records import AnyRecord
from probes.errors import ReadError

_BLOCK = 1 << 20
# So many bytes before the place reached are looked at again, to notice that they changed.
_PROOF = 64


class Follower:
    """Reads on where it stopped.

    restarted: the last poll found another file than before, or the same one cut short or rewritten:
        its records are those of the new file from the beginning, and what was read before is void.
    bad_lines: of the present file. missing: there was no file at the last poll.
    behind: bytes of the file that the last poll left for the next.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self._identity: tuple[int, int] | None = None
        self._begin()
        self.restarted = False
        self.missing = False
        self.behind = 0

    def _begin(self) -> None:
        self._lines = Lines()
        self._offset = 0
        self._proof = b""

    @property
    def bad_lines(self) -> int:
        return self._lines.bad

    def poll(self, at_most: int = 64 << 20) -> list[AnyRecord]:
        """Records whose lines have become complete since the last poll.

        at_most: bytes to read, so that a screen can draw between two pieces of a long log.
        Raises ReadError where the file is there and cannot be read.
        """
        self.restarted = self.missing = False
        try:
            file = os.open(self._path, os.O_RDONLY | os.O_CLOEXEC)
        except FileNotFoundError:
            self.missing, self.behind = True, 0
            return []
        except OSError as error:
            raise self._unreadable(error) from error
        try:
            return self._read(file, at_most)
        except OSError as error:
            raise self._unreadable(error) from error
        finally:
            os.close(file)

    def _read(self, file: int, at_most: int) -> list[AnyRecord]:
        status = os.fstat(file)
        identity = (status.st_dev, status.st_ino)
        if self._offset and not (identity == self._identity and self._unchanged(file, status)):
            self._begin()
            self.restarted = True
        self._identity = identity
        records: list[AnyRecord] = []
        # Up to the size seen now: a writer that never pauses must not keep us here.
        end = min(status.st_size, self._offset + at_most)
        while self._offset < end:
            piece = os.pread(file, min(_BLOCK, end - self._offset), self._offset)
            if not piece:
                break
            self._offset += len(piece)
            self._proof = (self._proof + piece)[-_PROOF:]
            records += self._lines.feed(piece)
        self.behind = max(0, status.st_size - self._offset)
        return records

    def _unchanged(self, file: int, status: os.stat_result) -> bool:
        if status.st_size < self._offset:
            return False
        start = self._offset - len(self._proof)
        return os.pread(file, len(self._proof), start) == self._proof

    def _unreadable(self, error: OSError) -> ReadError:
        return ReadError(f"the growth log cannot be read ({error.strerror})", str(self._path))
