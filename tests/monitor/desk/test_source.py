"""The reading thread."""

from __future__ import annotations

import os
import queue
import time
from pathlib import Path

import pytest
from textual.message import Message

from monitor.desk import source as module
from monitor.desk.lookout import guard_alive
from monitor.desk.messages import Arrived, GuardSeen, LogTrouble
from monitor.desk.source import Source
from monitor.growthlog.records import AnyRecord
from monitor.growthlog.write import encode
from tests.monitor.desk.made_runs import healthy, write


class Ear:
    """Receives what a source posts."""

    def __init__(self, source: Source) -> None:
        self.heard: queue.Queue[Message] = queue.Queue()
        self.source = source
        source.begin(self.heard.put)

    def next(self, kind: type[Message]) -> Message:
        """The next message of a kind, others dropped."""
        while True:
            message = self.heard.get(timeout=20)
            if isinstance(message, Arrived):
                self.source.taken()
            if isinstance(message, kind):
                return message


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "POLL_SECONDS", 0.02)
    monkeypatch.setattr(module, "_LOOK_AT_LOCK_SECONDS", 0.05)


def test_what_is_there_and_what_comes(tmp_path: Path, quick: None) -> None:
    """First the whole log, then a record that is appended."""
    made = healthy(20)
    log = write(tmp_path / "growth.jsonl", made.records[:-1], junk=b"no record\n")
    source = Source(log)
    ear = Ear(source)
    first = ear.next(Arrived)
    assert isinstance(first, Arrived)
    assert (len(first.records), first.bad_lines) == (len(made.records) - 1, 1)
    with log.open("ab") as file:
        file.write(encode(made.records[-1]))
    second = ear.next(Arrived)
    assert isinstance(second, Arrived)
    assert [r.seq for r in second.records] == [made.records[-1].seq]
    source.stop()


def test_a_log_that_goes_and_comes_back(tmp_path: Path, quick: None) -> None:
    """Gone: trouble is told once. Back with other contents: it begins anew."""
    log = write(tmp_path / "growth.jsonl", healthy(20).records)
    source = Source(log)
    ear = Ear(source)
    ear.next(Arrived)
    log.unlink()
    trouble = ear.next(LogTrouble)
    assert isinstance(trouble, LogTrouble)
    assert "gone" in trouble.text
    other = healthy(20)
    other.records = other.records[:5]
    write(tmp_path / "new", other.records)
    os.replace(tmp_path / "new", log)
    assert isinstance(message := ear.next(LogTrouble), LogTrouble)
    assert message.text == ""
    again = ear.next(Arrived)
    assert isinstance(again, Arrived)
    assert again.restarted
    assert len(again.records) == 5
    source.stop()


def test_pieces_wait_for_the_screen(
    tmp_path: Path, quick: None, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A long log comes in pieces, and no more than two of them before the first is taken."""
    monkeypatch.setattr(module, "PIECE", 2000)
    made = healthy(60)
    source = Source(write(tmp_path / "growth.jsonl", made.records))
    heard: list[Message] = []
    source.begin(heard.append)
    until = time.monotonic() + 20
    records: list[AnyRecord] = []
    while len(records) < len(made.records):
        assert time.monotonic() < until
        arrived = [m for m in heard if isinstance(m, Arrived)]
        assert len(arrived) <= 2
        for message in arrived:
            records += message.records
            heard.remove(message)
            source.taken()
        time.sleep(0.001)
    assert [r.seq for r in records] == [r.seq for r in made.records]
    source.stop()


def test_a_guard_is_alive_while_it_touches_its_lock(tmp_path: Path, quick: None) -> None:
    """No lock: gone. A fresh one: alive. One not touched for minutes: gone again."""
    log = write(tmp_path / "growth.jsonl", healthy(5).records)
    source = Source(log)
    ear = Ear(source)
    seen = ear.next(GuardSeen)
    assert isinstance(seen, GuardSeen)
    assert not seen.alive
    lock = tmp_path / "growth.jsonl.lock"
    lock.write_text("{}")
    assert isinstance(seen := ear.next(GuardSeen), GuardSeen)
    assert seen.alive
    long_ago = time.time() - 1000
    os.utime(lock, (long_ago, long_ago))
    assert isinstance(seen := ear.next(GuardSeen), GuardSeen)
    assert not seen.alive
    assert not guard_alive(log, time.time())
    source.stop()
