"""Patience with files that cannot be read, and its end."""

from __future__ import annotations

import pytest

from monitor.guarding.reading import PATIENCE, PATIENCE_BEHIND, NotRead, Reading
from probes.errors import ChildError
from probes.wire import Arrival, Failed, Reply, Request, Sketched

ARRIVAL = Arrival(key="k", files=())
SKETCHED = Sketched(arrival=ARRIVAL, blocks=())


class Script:
    """Replies one after the other; an exception is raised."""

    def __init__(self, *replies: Reply | Exception) -> None:
        self.replies = list(replies)
        self.now = 0.0

    def ask(self, request: Request, limit_s: float) -> Reply:
        reply = self.replies.pop(0)
        if isinstance(reply, Exception):
            raise reply
        return reply


def read(script: Script, times: int = 1, *, behind: bool = False, wait: float = 0.0):
    reading = Reading(script.ask, lambda: script.now)
    result: Sketched | NotRead | None = None
    for _ in range(times):
        result = reading.read(ARRIVAL, (), False, behind=behind)
        script.now += wait
    return result


def not_yet() -> Failed:
    return Failed(kind="not-yet", what="cut off")


def test_read() -> None:
    """The sketch comes back."""
    assert read(Script(SKETCHED)) is SKETCHED


@pytest.mark.parametrize(("behind", "patience"), [(True, PATIENCE_BEHIND), (False, PATIENCE)])
def test_not_yet_is_tried_again_for_a_while(behind: bool, patience: float) -> None:
    """Less long where others wait behind it."""
    early = read(Script(not_yet(), not_yet()), 2, behind=behind, wait=patience - 1.0)
    assert early == NotRead(True, "broken", "cut off")
    late = read(Script(not_yet(), not_yet()), 2, behind=behind, wait=patience + 1.0)
    assert late == NotRead(False, "broken", "cut off")


def test_refused_and_broken_are_final() -> None:
    """With the reason and the remedy."""
    reply = Failed(kind="refused", what="external data", remedy="copy it")
    assert read(Script(reply)) == NotRead(False, "refused", "external data; copy it")
    assert read(Script(Failed(kind="read", what="noise"))) == NotRead(False, "broken", "noise")


def test_a_file_that_kills_the_reader_is_tried_twice() -> None:
    """The second death is its end; in between it may succeed."""
    died = ChildError("the reading process died")
    twice = read(Script(died, died), 2)
    assert isinstance(twice, NotRead)
    assert not twice.later
    assert "died" in twice.detail
    assert read(Script(died, SKETCHED), 2) is SKETCHED
