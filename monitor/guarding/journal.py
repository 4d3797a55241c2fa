"""Number, date and append records: what guard and its actions write goes through here."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Literal, Protocol, TypeVar

from monitor.growthlog.records import AnyRecord, Intent, Outcome, Remark
from monitor.wording import clean

_R = TypeVar("_R", bound=AnyRecord)

Result = Literal["done", "accepted", "no-reaction", "failed", "found-done"]


class Writer(Protocol):
    """What a journal needs of a `monitor.growthlog.write.LogWriter`."""

    next_seq: int
    failing: str

    def append(self, record: AnyRecord, sync: bool = False) -> None: ...


class Journal:
    """Writes records of one guard. `tell` shows troubles and deeds to whoever sits there."""

    def __init__(
        self, log: Writer, clock: Callable[[], float], tell: Callable[[str], None] | None = None
    ) -> None:
        self._log, self._clock = log, clock
        self._tell = tell or (lambda text: None)
        self._said: set[str] = set()

    @property
    def next_seq(self) -> int:
        """Sequence number of the record that is written next."""
        return self._log.next_seq

    @property
    def failing(self) -> str:
        """Why records do not reach the disk at present, "" if they do."""
        return self._log.failing

    def write(self, kind: type[_R], *, sync: bool = False, **values: Any) -> _R:
        """Append one record; raises LockLost where another guard has the log."""
        record = kind(seq=self._log.next_seq, at=self._clock(), **values)
        self._log.append(record, sync=sync)
        return record

    def intend(self, act: str, request: str, target: str, attempt: int = 1) -> Intent:
        """Say, on the disk, what is about to be done."""
        return self.write(Intent, sync=True, act=act, id=request, target=target, attempt=attempt)

    def outcome(self, act: str, request: str, outcome: Result, detail: str = "") -> None:
        """Say, on the disk, what came of it."""
        detail = clean(detail)
        self.write(Outcome, sync=True, act=act, id=request, outcome=outcome, detail=detail)
        if act != "pin" or outcome == "failed":
            self._tell(f"{act}: {outcome}" + (f", {detail}" if detail else ""))

    def note(self, text: str) -> None:
        """News that changes nothing."""
        self.write(Remark, text=clean(text))

    def trouble(self, text: str, *, once: bool = False) -> None:
        """News that somebody should look at; with `once`, the same text is not repeated."""
        text = clean(text)
        if once and text in self._said:
            return
        self._said.add(text)
        self.write(Remark, text=text, level="trouble")
        self._tell(text)
