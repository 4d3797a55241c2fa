"""A log under lock, and records to put into it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from monitor.growthlog.lock import Lock
from monitor.growthlog.records import Remark
from monitor.growthlog.write import LogWriter


def remark(seq: int, text: str = "the mask of h is confirmed") -> Remark:
    return Remark(seq=seq, at=1000.0 + seq, text=text)


@pytest.fixture
def log(tmp_path: Path) -> Path:
    return tmp_path / "growth.jsonl"


@pytest.fixture
def open_writer(log: Path) -> Iterator[Callable[[], LogWriter]]:
    """Makes writers of the same log, each ending the one before, as guards that follow each
    other."""
    locks: list[Lock] = []
    writers: list[LogWriter] = []

    def make() -> LogWriter:
        if locks:
            writers[-1].close()
            locks[-1].release()
        locks.append(Lock.acquire(log))
        writers.append(LogWriter(log, locks[-1]))
        return writers[-1]

    yield make
    for writer in writers:
        writer.close()
    for lock in locks:
        lock.release()
