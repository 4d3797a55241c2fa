"""The desk without a screen: one line per change, for pipes, dumb terminals and screen readers."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path

from monitor.desk.advice import Health, headline, rows
from monitor.desk.lookout import POLL_SECONDS, guard_alive
from monitor.desk.story import Story
from monitor.exits import Exit
from monitor.growthlog.follow import Follower
from monitor.wording import clean, moment_text

# Sentences of the verdict that a change is told with.
_ON_CHANGE = ("act", "left", "clean", "guard")


def follow(log: Path, clock: Callable[[], float] = time.time) -> int:
    """Print the events in the log and the verdict, then each change, until guard has ended or is
    gone. Snapshots that change nothing print nothing.

    Raises ReadError where the log cannot be read.
    """
    follower, story, known = Follower(log), Story(), False
    while True:
        # Asked before reading: what a guard writes before it goes is still read.
        alive = guard_alive(log, clock())
        records = follower.poll()
        if follower.restarted:
            _say("the log begins anew")
            story = Story()
        story.take(records)
        changed = bool(story.events)
        while story.events:
            event = story.events.popleft()
            _say(f"{moment_text(event.at, clock())}  {event.text}")
        if follower.behind:
            continue
        if changed or not known or not alive:
            health = Health(guard=alive, bad_lines=follower.bad_lines)
            _verdict(story, health, clock(), _ON_CHANGE if known else None)
            known = True
        if story.closed is not None or not alive:
            return Exit.GOOD
        time.sleep(POLL_SECONDS)


def _verdict(story: Story, health: Health, now: float, labels: tuple[str, ...] | None) -> None:
    """The condition and the verdict's sentences, or only those with the given labels."""
    last = story.last
    name = story.run or "run"
    condition = "nothing judged yet" if last is None else last.verdict.condition
    _say(f"{name}: {condition}, {headline(story, now)}")
    for row in rows(story, health, now):
        if labels is None or row.label in labels:
            _say(f"  {row.label}: {row.text}")
    if health.bad_lines and labels is None:
        _say(f"  log: {health.bad_lines} unreadable lines")


def _say(text: str) -> None:
    sys.stdout.write(f"{clean(text)}\n")
    sys.stdout.flush()
