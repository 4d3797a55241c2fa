"""Arriving, stalled, and back."""

from __future__ import annotations

from monitor.guarding.pulse import PATIENCE, PulseWatch


def test_the_first_snapshot_starts_it() -> None:
    """arriving is told once."""
    watch = PulseWatch(0.0, 100.0)
    assert watch.arrived(110.0) == ""
    assert watch.arrived(120.0) is None
    assert watch.pulse == "arriving"


def test_stalled_after_five_spacings_and_back() -> None:
    """Told once, with how long and what is usual; the next snapshot ends it, with how long."""
    watch = PulseWatch(0.0, 100.0)
    watch.arrived(110.0)
    assert watch.look(159.0, 10.0) is None
    text = watch.look(161.0, 10.0)
    assert text is not None
    assert "51 s" in text
    assert "10 s" in text
    assert watch.look(171.0, 10.0) is None
    assert watch.pulse == "stalled"
    back = watch.arrived(180.0)
    assert back is not None
    assert "70 s" in back


def test_fast_runs_get_ten_seconds() -> None:
    """Five times a tenth of a second is no stall."""
    watch = PulseWatch(0.0, 100.0)
    watch.arrived(100.0)
    assert watch.look(109.0, 0.1) is None
    assert watch.look(110.5, 0.1) is not None


def test_the_setting_wins() -> None:
    """stale_seconds as given."""
    watch = PulseWatch(3.0, 100.0)
    watch.arrived(100.0)
    assert watch.look(102.0, 0.1) is None
    assert watch.look(103.0, 100.0) is not None


def test_nothing_ever_came() -> None:
    """A run that never starts to write is told as such, with patience."""
    watch = PulseWatch(0.0, 100.0)
    assert watch.look(100.0 + PATIENCE - 1.0, None) is None
    text = watch.look(100.0 + PATIENCE, None)
    assert text is not None
    assert text.startswith("no snapshot yet")


def test_a_finished_run_does_not_stall() -> None:
    """Nothing more is expected of it."""
    assert PulseWatch(1.0, 100.0, "finished").look(500.0, 1.0) is None
