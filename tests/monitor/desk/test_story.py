"""What the desk knows of a run, folded from its records."""

from __future__ import annotations

import pytest

from monitor.growthlog.records import (
    Closed,
    Intent,
    Opened,
    Outcome,
    PinRecord,
    PulseChange,
    Snapshot,
)
from monitor.lastclean import clean_pins
from monitor.review import summarise
from tests.monitor.desk.conftest import story_of
from tests.monitor.desk.made_runs import (
    ALARM,
    STRIDE,
    Maker,
    healthy,
    overflowed,
    runaway,
    stalled,
    stopped,
    three_fields,
)
from tests.monitor.made_log import contents


def test_an_empty_story_answers_everything() -> None:
    """No record yet: nothing is known, and asking is no error."""
    story = story_of(Maker())
    assert (story.run, story.now, story.last, story.clean()) == ("", None, None, None)
    assert story.per == "step"


def test_since_when_and_the_alarm() -> None:
    """The condition dates from its first snapshot, not from the last; the alarm stays known."""
    story = story_of(runaway())
    assert story.now is not None
    assert story.now.since is not None
    assert story.now.since.step == ALARM * STRIDE
    assert story.now.alarm is story.now.since
    assert story.last is not None
    assert story.last.index == 124


def test_events_tell_changes_and_acts_but_not_every_snapshot() -> None:
    """Quiet, swelling, runaway, the kept pin, the stop: six lines for 124 snapshots."""
    told = [event.text for event in story_of(runaway()).events]
    assert len(told) == 6
    starts = ("quiet at", "swelling at", "runaway at", "kept:", "guard acts:", "stop file:")
    assert all(text.startswith(start) for text, start in zip(told, starts, strict=True))


@pytest.mark.parametrize("make", [healthy, runaway, stopped, overflowed])
def test_the_clean_checkpoint_is_that_of_the_review(make: object) -> None:
    """The desk keeps few snapshots and the review all of them: both name the same checkpoint."""
    made = make()  # type: ignore[operator]
    found, reviewed = story_of(made).clean(), summarise(contents(made.records)).clean
    assert found is not None
    assert reviewed is not None
    assert (found.step, found.path, found.pinned) == (reviewed.step, reviewed.path, reviewed.pinned)


def test_an_old_pin_is_judged_by_a_snapshot_long_gone() -> None:
    """A pin from 300 snapshots before the alarm, most of which the desk has forgotten, counts as in
    a judgement with all of them at hand."""
    made = Maker()
    made.open()
    made.segment()
    for n in range(1, 320):
        made.snap(n)
        if n == 19:
            made.pin(20)  # of a checkpoint that is judged only with the next snapshot
    made.snap(320, "runaway", kind="numerical", alarmed=True, onset=(6000, 6200), field="T")
    snaps = [r for r in made.records if isinstance(r, Snapshot)]
    pins = [r for r in made.records if isinstance(r, PinRecord)]
    found = story_of(made).clean()
    assert found is not None
    assert found == clean_pins(pins, snaps, snaps[-1])[-1]


def test_a_released_pin_is_gone() -> None:
    """Provisional pins give way; what is listed is what is kept."""
    made = healthy(30)
    assert len(story_of(made).pins) == 1
    made.pin(30, "released")
    assert story_of(made).pins == {}


def test_a_restart_begins_a_new_stretch_and_remembers_the_alarm() -> None:
    """The plot starts afresh, while the earlier segment's alarm stays known."""
    made = stopped()
    made.segment(2, "restart", 1800)
    made.snap(91, "gathering", seg=2)
    story = story_of(made)
    assert [s.number for s in story.stretches] == [1, 2]
    assert len(story.now.series) == 1  # type: ignore[union-attr]
    assert story.stretches[0].alarm is not None
    assert story.maps == {}


def test_acts_of_an_earlier_segment_are_over() -> None:
    """What was done about segment 1 is an event, and no deed of segment 2."""
    made = stopped()
    assert len(story_of(made).deeds) == 1
    made.segment(2, "restart", 1800)
    story = story_of(made)
    assert story.deeds == {}
    assert any("stop file" in event.text for event in story.events)


def test_a_notice_is_told_only_if_it_failed() -> None:
    """A mail that went out is no news on the screen; one that did not is."""
    made = healthy(10)
    made.add(Intent, act="notify", id="n1", target="./tell-me.sh")
    made.add(Outcome, act="notify", id="n1", outcome="done")
    before = len(story_of(made).events)
    made.add(Intent, act="notify", id="n2", target="./tell-me.sh")
    made.add(Outcome, act="notify", id="n2", outcome="failed", detail="status 1")
    events = story_of(made).events
    assert len(events) == before + 1
    assert events[-1].text == "notify command: failed, status 1"


def test_a_guard_that_takes_up_the_log_again_opens_it() -> None:
    """After Closed another guard's Opened means that the run is followed again."""
    made = healthy(10)
    made.add(Closed, why="told to end", status=0)
    assert story_of(made).closed is not None
    made.open(continues=True)
    story = story_of(made)
    assert story.closed is None
    assert "without a gap" in story.events[-1].text
    assert isinstance(story.opened, Opened)


def test_a_snapshot_ends_a_stall() -> None:
    """The run goes on: no pulse record is needed to see that."""
    made = stalled()
    assert isinstance(story_of(made).pulse, PulseChange)
    made.snap(61)
    assert story_of(made).pulse is None


def test_three_fields_have_a_curve_each() -> None:
    """In the order met."""
    story = story_of(three_fields())
    assert story.now is not None
    assert story.now.series.fields == ["h", "u", "v"]


def test_what_is_kept_of_a_long_run_is_bounded() -> None:
    """Five thousand snapshots and skips: lists of fixed length."""
    story = story_of(healthy(5000))
    assert len(story.arrivals) <= 400
    assert len(story.events) <= 1000
    assert story.snapshots == 5000
