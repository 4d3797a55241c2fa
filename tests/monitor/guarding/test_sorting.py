"""Next, restart or late."""

from __future__ import annotations

import pytest

from monitor.guarding.sorting import Place, sort
from probes.wire import Arrival, FileId


def arrival(step: int | None, *times: float, growing: bool = False) -> Arrival:
    """times: of change of its files, s."""
    files = tuple(
        FileId(path=f"p{n}", size=1, mtime_ns=int(t * 1e9), inode=n) for n, t in enumerate(times)
    )
    return Arrival(key="k", files=files, step=step, mtime_ns=int(max(times) * 1e9), growing=growing)


@pytest.mark.parametrize(
    ("step", "times", "last", "what"),
    [
        (100, (50.0,), None, "next"),
        (120, (60.0,), Place(100, 50.0), "next"),
        (120, (40.0,), Place(100, 50.0), "next"),  # copied files keep no order of times
        (80, (60.0,), Place(100, 50.0), "restart"),
        (80, (40.0,), Place(100, 50.0), "late"),
        (80, (40.0, 60.0), Place(100, 50.0), "late"),  # its last part was slow, no restart
        (100, (60.0,), Place(100, 50.0), "late"),  # the last checkpoint, written once more
        (None, (60.0,), Place(100, 50.0), "next"),
        (80, (60.0,), Place(None, 50.0), "next"),
    ],
)
def test_what_an_arrival_is(
    step: int | None, times: tuple[float, ...], last: Place | None, what: str
) -> None:
    """By its step, and by when it began to be written."""
    assert sort(arrival(step, *times), last)[0] == what


def test_a_record_of_a_growing_file_counts_from_when_it_was_seen() -> None:
    """The file's own time changes with every record; the record's own is the time of sight."""
    seen = Arrival(
        key="k",
        files=(FileId(path="p", size=1, mtime_ns=10**9, inode=1),),
        step=80,
        mtime_ns=60 * 10**9,
        growing=True,
    )
    assert sort(seen, Place(100, 50.0))[0] == "restart"


def test_every_decision_says_why() -> None:
    """The log gets words for whatever is not simply the next."""
    assert "written after" in sort(arrival(80, 60.0), Place(100, 50.0))[1]
    assert "again" in sort(arrival(100, 60.0), Place(100, 50.0))[1]
    assert "after step 100" in sort(arrival(80, 40.0), Place(100, 50.0))[1]
