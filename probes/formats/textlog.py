"""Text logs that a solver appends to: one number per line, as it comes.

Whitespace tables, CSV, "key = value" lines and regular expressions. Only lines that are complete
are read, in bounded pieces; a file that was begun again is read from its beginning.
"""

from __future__ import annotations

import csv
import math
import os
import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

from probes.errors import ReadError
from probes.formats.textnumbers import Printed, printed
from probes.spec import HistorySpec

# A longer stretch without an end of line is no line of a log.
_LONGEST_LINE = 1 << 16
# So many bytes before the place reached are looked at again, to notice that they changed.
_PROOF = 64
_COMMENT = "#%!;*\"'"
_SEPARATORS = (",", ";", "\t")


@dataclass(slots=True)
class Batch:
    """What was read: per sample its step (NaN if unknown), time (NaN if unknown), value and unit
    (see `probes.formats.textnumbers`).

    odd: how unusual values were printed, by their place in the batch. more: bytes are left to read.
    """

    steps: list[float] = field(default_factory=list)
    times: list[float] = field(default_factory=list)
    values: list[float] = field(default_factory=list)
    units: list[float] = field(default_factory=list)
    odd: dict[int, str] = field(default_factory=dict)
    more: bool = False


# Value, step and time that a line tells, as they stand in it; None for what it does not.
_Told = tuple[str | None, str | None, str | None]
_Reader = Callable[[str], _Told]


class TextLog:
    """Follows one history in one file. Holds the place reached and what lines before have told.

    begun: how often the file was found to be another one, or the same begun again. mtime: of the
    file at the last read, seconds. notes: remarks for a person, once each.
    """

    def __init__(self, path: Path, spec: HistorySpec) -> None:
        """Raises ReadError for a pattern that is no regular expression."""
        self._path, self._spec = path, spec
        self._read_line: _Reader = (
            _Patterns(spec.pattern, str(path)) if spec.pattern else _Columns(spec)
        )
        self._identity = (0, 0)
        self.begun = 0
        self.mtime = 0.0
        self.notes: list[str] = []
        self._begin()

    @property
    def inode(self) -> int:
        """Of the file that was read last."""
        return self._identity[1]

    def _begin(self) -> None:
        self._offset, self._proof, self._skipping = 0, b"", False
        self._step = self._time = math.nan
        self._unread = 0
        if isinstance(self._read_line, _Columns):
            self._read_line.forget()

    def read(self, budget: int) -> Batch:
        """Samples in the next `budget` bytes at most; none where the file is not there (yet).

        Raises ReadError where the file is there and cannot be read.
        """
        batch = Batch()
        try:
            file = os.open(self._path, os.O_RDONLY | os.O_CLOEXEC | os.O_NONBLOCK)
        except FileNotFoundError:
            return batch
        except OSError as error:
            raise ReadError(f"cannot be opened ({error.strerror})", str(self._path)) from error
        try:
            piece = self._piece(file, budget)
            batch.more = os.fstat(file).st_size > self._offset + len(piece)
        except OSError as error:
            raise ReadError(f"cannot be read ({error.strerror})", str(self._path)) from error
        finally:
            os.close(file)
        for line in self._lines(piece, batch):
            self._sample(line, batch)
        return batch

    # --- bytes --------------------------------------------------------------------------

    def _piece(self, file: int, budget: int) -> bytes:
        status = os.fstat(file)
        identity = (status.st_dev, status.st_ino)
        same = identity == self._identity and status.st_size >= self._offset
        start = self._offset - len(self._proof)
        if self._offset and not (same and os.pread(file, len(self._proof), start) == self._proof):
            self._begin()
            self.begun += 1
        self._identity, self.mtime = identity, status.st_mtime
        left = min(max(budget, 2 * _LONGEST_LINE), status.st_size - self._offset)
        return os.pread(file, max(0, left), self._offset)

    def _lines(self, piece: bytes, batch: Batch) -> Iterator[str]:
        """Complete lines; the place moves behind them, and `batch.more` with it."""
        whole, newline, rest = piece.rpartition(b"\n")
        endless = len(rest) > _LONGEST_LINE
        if not newline and not endless:
            batch.more = False
            return
        taken = len(piece) if endless else len(whole) + 1
        self._offset += taken
        self._proof = (self._proof + piece[:taken])[-_PROOF:]
        lines = whole.split(b"\n") if newline else []
        if self._skipping and lines:
            del lines[0]
            self._skipping = False
        # No line is so long: what comes up to its end is left out.
        self._skipping = self._skipping or endless
        for line in lines:
            if len(line) <= _LONGEST_LINE and b"\0" not in line:
                yield line.decode("utf-8", "replace").rstrip("\r").rpartition("\r")[2]

    # --- samples ------------------------------------------------------------------------

    def _sample(self, line: str, batch: Batch) -> None:
        value, step, time = self._read_line(line)
        for told, name in ((step, "step"), (time, "time")):
            number = _number(told)
            if number is not None and math.isfinite(number.value):
                if name == "step":
                    self._step = number.value * self._spec.step_factor
                else:
                    self._time = number.value
        if value is None:
            return
        number = _number(value)
        if number is None or (self._spec.step != "" and math.isnan(self._step)):
            self._missed(value)
            return
        if not math.isfinite(number.value):
            batch.odd[len(batch.values)] = value.strip()[:40]
        batch.steps.append(self._step)
        batch.times.append(self._time)
        batch.values.append(number.value)
        batch.units.append(number.unit)

    def _missed(self, value: str) -> None:
        self._unread += 1
        if self._unread == 10:
            self.notes.append(
                f"{self._path}: ten lines had no number or no step where {value.strip()[:40]!r} "
                "stands; see [histories] column and step"
            )


def _number(told: str | None) -> Printed | None:
    return printed(told.strip().strip("\"'")) if told is not None else None


class _Patterns:
    """Regular expressions with groups named value, step and time."""

    def __init__(self, patterns: tuple[str, ...], where: str) -> None:
        try:
            self._patterns = [re.compile(p) for p in patterns]
        except re.error as error:
            raise ReadError(f"the pattern is no regular expression ({error})", where) from error

    def __call__(self, line: str) -> _Told:
        told: dict[str, str] = {}
        for pattern in self._patterns:
            found = pattern.search(line)
            if found is not None:
                told |= {k: v for k, v in found.groupdict().items() if v is not None}
        return told.get("value"), told.get("step"), told.get("time")


class _Columns:
    """Columns by number or by heading, and keys before "=" or ":"."""

    def __init__(self, spec: HistorySpec) -> None:
        self._wanted = (spec.column, spec.step, spec.time)
        self._keys = [_key(w) if isinstance(w, str) and w else None for w in self._wanted]
        self._named = any(isinstance(w, str) and w for w in self._wanted)
        self.forget()

    def forget(self) -> None:
        """The file has begun again."""
        self._headings: list[list[str]] = []

    def __call__(self, line: str) -> _Told:
        if self._named and ("=" in line or ":" in line):
            by_key = self._by_key(line)
            if by_key != (None, None, None):
                return by_key
        words = _split(line)
        if self._named and (headings := self._as_headings(line, words)):
            self._headings = headings
            return None, None, None
        if not words or _is_comment(words[0]):
            return None, None, None
        if not self._named:
            value, step, time = (self._cell(words, w) for w in self._wanted)
            # Text between the tables has no number there.
            number = printed(value.strip()) if value is not None else None
            return (value, step, time) if number is not None else (None, None, None)
        headings_now = next((h for h in self._headings if len(h) == len(words)), None)
        if headings_now is None:
            return None, None, None
        value, step, time = (self._cell(words, w, headings_now) for w in self._wanted)
        return value, step, time

    def _by_key(self, line: str) -> _Told:
        found = [key.search(line) if key is not None else None for key in self._keys]
        value, step, time = (f[1] if f is not None else None for f in found)
        return value, step, time

    def _as_headings(self, line: str, words: list[str]) -> list[list[str]]:
        """The ways to cut a line of headings; none where it is no such line."""
        bare = line.lstrip(_COMMENT + "/ \t")
        ways = [_split(bare), [w for w in re.split(r"\s{2,}|\t", bare.strip()) if w]]
        named = [w for w in self._wanted if isinstance(w, str) and w]
        return [w for w in ways if all(_place(w, name) is not None for name in named)]

    @staticmethod
    def _cell(words: list[str], wanted: str | int, headings: list[str] | None = None) -> str | None:
        if wanted == "":
            return None
        place = wanted - 1 if isinstance(wanted, int) else _place(headings or [], wanted)
        return words[place] if place is not None and place < len(words) else None


def _is_comment(word: str) -> bool:
    """Whether a line that begins with this word is a remark. Stars may be a number that did not
    fit."""
    return (word[:1] in _COMMENT or word[:2] == "//") and printed(word) is None


def _key(name: str) -> re.Pattern[str]:
    """`name = number`, with a colon too, quotes around the name, whatever the case."""
    number = r"\s*[\"']?\s*[=:]\s*[\"']?([^\s,;\"'}\])]+)"
    return re.compile(rf"(?<![\w.]){re.escape(name)}{number}", re.IGNORECASE)


def _place(headings: list[str], name: str) -> int | None:
    """Where a heading stands: as written, else whatever its case."""
    for fold in (str, str.lower):
        folded = [fold(h.strip().strip("\"'")) for h in headings]
        if fold(name) in folded:
            return folded.index(fold(name))
    return None


def _split(line: str) -> list[str]:
    """The cells of a line: by commas, semicolons or tabs where it has any, else by blanks."""
    line = line.strip()
    for separator in _SEPARATORS:
        if separator in line:
            return [cell.strip() for cell in next(csv.reader([line], delimiter=separator), [])]
    return line.split()
