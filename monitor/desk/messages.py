"""What the reading thread tells the screen."""

from __future__ import annotations

from dataclasses import dataclass

from textual.message import Message

from monitor.growthlog.records import AnyRecord


@dataclass
class Arrived(Message):
    """Records in file order. restarted: they begin the log anew, all before is void. behind: bytes
    still to be read. bad_lines: of the whole log."""

    records: list[AnyRecord]
    restarted: bool
    behind: int
    bad_lines: int


@dataclass
class GuardSeen(Message):
    """Whether a guard holds the log; sent when that changes."""

    alive: bool


@dataclass
class LogTrouble(Message):
    """The log cannot be read for the reason given, or can again (""); sent on a change."""

    text: str
