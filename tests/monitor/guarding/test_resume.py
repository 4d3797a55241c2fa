"""What the next guard knows from the log of the one before."""

from __future__ import annotations

from monitor.growthlog.records import (
    AnyRecord,
    Intent,
    Outcome,
    PinRecord,
    PulseChange,
    Segment,
    Skipped,
)
from monitor.guarding.resume import resume
from tests.monitor.actions.fakes import snapshot


def intent(seq: int, act: str, name: str, attempt: int = 1) -> Intent:
    return Intent(seq=seq, at=1.0, act=act, id=name, target="x", attempt=attempt)


def outcome(seq: int, act: str, name: str, result: str) -> Outcome:
    return Outcome(seq=seq, at=1.0, act=act, id=name, outcome=result)  # type: ignore[arg-type]


def pin(seq: int, name: str, state: str = "provisional") -> PinRecord:
    return PinRecord(
        seq=seq, at=1.0, pin=name, state=state, folder=f"pins/{name}", files=("T.npy",), step=20
    )  # type: ignore[arg-type]


def segment(seq: int, number: int) -> Segment:
    return Segment(seq=seq, at=1.0, number=number, why="start")


def test_an_empty_log() -> None:
    """Nothing is known."""
    state = resume([])
    assert state.empty
    assert (state.known, state.total, state.last) == (set(), 0, None)


def test_keys_that_are_settled() -> None:
    """Judged, late, refused and broken contents never come again; incomplete ones may."""
    skipped: list[AnyRecord] = [
        Skipped(seq=9, at=1.0, path="p", reason=reason, detail="", key=reason)  # type: ignore[arg-type]
        for reason in ("late", "refused", "broken", "parts", "held", "empty")
    ]
    state = resume([segment(1, 1), snapshot(2, 20), *skipped])
    assert state.known == {"20", "late", "refused", "broken"}
    assert state.skipped >= {"parts", "held", "empty"}


def test_segments_start_condition_and_deeds_afresh() -> None:
    """What was decided and done in an earlier segment is over; counts go on."""
    state = resume(
        [
            segment(1, 1),
            snapshot(2, 20, condition="runaway", alarmed=True, kind="numerical"),
            intent(3, "stop-file", "stop-1"),
            segment(4, 2),
            snapshot(5, 10, seg=2, condition="gathering"),
        ]
    )
    assert state.segment is not None
    assert state.segment.number == 2
    assert (state.condition, state.turn, state.deeds, state.total) == ("gathering", None, [], 2)


def test_the_alarm_and_its_deeds() -> None:
    """The first alarmed snapshot, every act with its outcomes, attempts under one id together."""
    state = resume(
        [
            segment(1, 1),
            snapshot(2, 20),
            snapshot(3, 40, condition="runaway", alarmed=True),
            snapshot(4, 60, condition="runaway", alarmed=True),
            intent(5, "hold", "hold-1"),
            outcome(6, "hold", "hold-1", "done"),
            intent(7, "command", "stop-1"),
            intent(8, "command", "stop-1", attempt=2),
            outcome(9, "command", "stop-1", "done"),
            outcome(10, "command", "stop-1", "no-reaction"),
            intent(11, "signal", "stop-2"),
        ]
    )
    assert state.turn is not None
    assert state.turn.step == 40
    assert [(d.intent.act, d.intent.attempt, [o.outcome for o in d.outcomes]) for d in state.deeds]\
        == [
            ("hold", 1, ["done"]),
            ("command", 2, ["done", "no-reaction"]),
            ("signal", 1, []),
        ]  # fmt: skip


def test_the_last_change_of_condition_and_its_notice() -> None:
    """So that a notice that was never begun is made up for."""
    state = resume(
        [
            segment(1, 1),
            snapshot(2, 20),
            snapshot(3, 40),
            snapshot(4, 60, condition="swelling"),
            snapshot(5, 80, condition="swelling"),
            intent(6, "notify", "notify-2"),
        ]
    )
    assert state.changed is not None
    assert (state.changed[0].step, state.changed[1]) == (60, "quiet")
    assert state.notified == {"notify-2"}


def test_pins_with_their_ages() -> None:
    """Held ones with the number of snapshots before them, released ones gone, open intents kept."""
    state = resume(
        [
            segment(1, 1),
            snapshot(2, 20),
            intent(3, "pin", "a"),
            pin(4, "a"),
            outcome(5, "pin", "a", "done"),
            snapshot(6, 40),
            snapshot(7, 60),
            intent(8, "pin", "b"),
            pin(9, "b"),
            outcome(10, "pin", "b", "done"),
            pin(11, "a", "released"),
            pin(12, "b", "kept"),
            intent(13, "pin", "c"),
        ]
    )
    (held,) = state.pins.held
    assert (held.record.pin, held.record.state, held.at) == ("b", "kept", 3)
    assert held.judged is not None
    assert held.judged.step == 60
    assert state.pins.used == {"a", "b", "c"}
    assert [i.id for i in state.pins.open] == ["c"]


def test_the_pulse() -> None:
    """The last word on it."""
    changes = [PulseChange(seq=n, at=1.0, pulse=p) for n, p in ((1, "arriving"), (2, "stalled"))]  # type: ignore[arg-type]
    assert resume(changes).pulse == "stalled"
