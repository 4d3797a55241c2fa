"""What cannot be judged is told once, and not before its time."""

from __future__ import annotations

from typing import Any

import pytest

from monitor.guarding.waiting import Waiting
from probes.wire import Pending


def pending(reason: str, since: float = 0.0, step: int | None = 40, key: str = "k") -> Pending:
    values: dict[str, Any] = {"reason": reason}
    return Pending(key=key, path="/run/T_40.npy", detail="why", since=since, step=step, **values)


def look(waiting: Waiting, p: Pending, now: float, step: int | None = None, at_end: bool = False):
    return waiting.look([p], now, step, at_end=at_end)


@pytest.mark.parametrize("reason", ["refused", "broken"])
def test_what_is_declined_is_told_at_once_and_once(reason: str) -> None:
    """The reading process is sure of it."""
    waiting = Waiting()
    (skip,), _ = look(waiting, pending(reason), 0.0)
    assert (skip.reason, skip.final, skip.key) == (reason, True, "k")
    assert look(waiting, pending(reason), 1.0) == ([], [])


def test_what_the_log_has_is_not_told_again() -> None:
    """After a restart of guard."""
    assert look(Waiting({"k"}), pending("broken"), 0.0) == ([], [])


def test_being_written_is_normal() -> None:
    """However long it takes; only at the end it is incomplete for good."""
    waiting = Waiting()
    assert look(waiting, pending("writing"), 4000.0, step=400) == ([], [])
    (skip,), _ = look(waiting, pending("writing"), 4000.0, at_end=True)
    assert skip.reason == "broken"
    assert "incomplete" in skip.detail


def test_an_incomplete_group_is_told_when_the_run_has_passed_it() -> None:
    """Not while it is the newest, not before a minute; later once, and it may yet be completed."""
    waiting = Waiting()
    assert look(waiting, pending("parts"), 200.0, step=20) == ([], [])
    assert look(waiting, pending("parts", since=180.0), 200.0, step=60) == ([], [])
    (skip,), _ = look(waiting, pending("parts"), 200.0, step=60)
    assert (skip.reason, skip.final) == ("parts", False)
    assert look(waiting, pending("parts"), 300.0, step=60) == ([], [])


def test_a_held_file_gives_one_remedy_after_a_minute() -> None:
    """What its writer should do is said once for a file, whatever its key."""
    waiting = Waiting()
    assert look(waiting, pending("held"), 59.0) == ([], [])
    skips, (text,) = look(waiting, pending("held"), 61.0)
    assert [s.reason for s in skips] == ["held"]
    for word in ("close the file", "SWMR", "rename"):
        assert word in text
    assert look(waiting, pending("held", key="other"), 90.0) == ([], [])


def test_an_empty_file_is_told_after_a_minute() -> None:
    """A solver that made it and died."""
    waiting = Waiting()
    assert look(waiting, pending("empty"), 30.0) == ([], [])
    assert [s.reason for s in look(waiting, pending("empty"), 61.0)[0]] == ["empty"]
