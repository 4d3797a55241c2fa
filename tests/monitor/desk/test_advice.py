"""The verdict in words."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from monitor.desk.advice import Health, advice, guard, headline, left, plan, rows, where
from monitor.desk.parts.part import Scene
from monitor.growthlog.records import Closed, Estimate, Outcome, PulseChange
from tests.monitor.desk import made_runs
from tests.monitor.desk.made_runs import Maker, healthy, overflowed, runaway, stalled, stopped

SceneOf = Callable[..., Scene]


def verdict(scene: Scene) -> dict[str, str]:
    return {row.label: row.text for row in rows(scene.story, scene.health, scene.now)}


def test_a_quiet_run_asks_for_nothing(scene: SceneOf) -> None:
    """Nothing to do, nothing counted down, and what guard would do on an alarm."""
    told = verdict(scene(healthy()))
    assert told["act"] == "nothing to do"
    assert told["left"].startswith("no countdown")
    assert "where" not in told
    assert told["guard"] == (
        "on an alarm: keep a clean checkpoint, then create file STOP, after 60 s signal TERM"
    )
    assert "arriving every 15 s" in told["run"]


def test_a_runaway_tells_what_where_how_long_and_what_is_done(scene: SceneOf) -> None:
    """Everything an engineer needs at night, with ranges."""
    shown = scene(runaway())
    told = verdict(shown)
    assert told["act"] == "wait: guard is stopping the run"
    assert "T, cells [196, 218) x [164, 190)" in told["where"]
    assert "at this rate ruin in 743 to 813 steps (about 9 to 10 min)" in told["left"]
    assert "overflow in 34 to 37 k steps" in told["left"]
    assert "step 1,800, pinned, pins/001800" in told["clean"]
    assert told["guard"].startswith("stop file STOP: done, created")
    assert told["guard"].endswith("waits 60 s, then signal TERM")
    head = headline(shown.story, shown.now)
    assert head.startswith("ruin in 743 to 813 steps (about 9 to 10 min); 1.0204 per step in T")
    assert "since step 2,240, 3 min ago" in head


def test_without_a_stop_the_engineer_must_act(scene: SceneOf) -> None:
    """No stop is configured: say so, and name the checkpoint."""
    made = runaway(stopping=False)
    made.records = [
        r if r.seq > 1 else type(r)(**{**_fields(r), "settings": {"stop": []}})  # type: ignore[call-arg]
        for r in made.records
    ]
    told = verdict(scene(made))
    assert told["act"].startswith("stop the run yourself, no stop is configured")
    assert "restart from step 1,800" in told["act"]
    assert "no stop is configured" in told["guard"]


def _fields(record: object) -> dict[str, object]:
    return {name: getattr(record, name) for name in record.__struct_fields__}  # type: ignore[attr-defined]


def test_after_a_stop_the_advice_is_to_restart(scene: SceneOf) -> None:
    """The run is over: no clock runs, and what to restart from is the first line."""
    told = verdict(scene(stopped()))
    assert told["act"].startswith("restart from step 1,800 with a smaller step")
    assert "min)" not in told["left"]
    assert "ended: the run ended (status 10)" in told["guard"]
    assert "ago" not in told["run"]


def test_an_overflow_has_nothing_left_and_points_to_the_origin(scene: SceneOf) -> None:
    """The first non-finite cell is not the origin: the place is that of the alarm."""
    shown = scene(overflowed())
    told = verdict(shown)
    assert told["left"] == "nothing: the fields hold values that are not finite"
    assert "[196, 218) x [164, 190)" in told["where"]
    assert advice(shown.story, shown.health, shown.now)[1] == "overflowed"


def test_a_stop_without_effect_is_handed_to_the_engineer(scene: SceneOf) -> None:
    """The ladder failed: act yourself."""
    made = runaway()
    made.add(Outcome, act="stop-file", id="r1", outcome="no-reaction")
    told = verdict(scene(made))
    assert told["act"] == "stop the run yourself: stop file STOP brought no reaction"


def test_a_stall_is_told_with_what_is_usual(scene: SceneOf) -> None:
    """The fields are quiet, the solver is not well."""
    told = verdict(scene(stalled()))
    assert told["act"] == "look at the solver: no snapshot for 12 min, usually one every 15 s"
    assert "stalled" in told["run"]


def test_a_guard_that_is_gone_is_told_first(scene: SceneOf) -> None:
    """Quiet without anybody watching is no quiet; an alarm without guard stops nothing."""
    gone = Health(guard=False)
    assert verdict(scene(healthy(), health=gone))["act"].startswith("start guard again")
    told = verdict(scene(runaway(), health=gone))
    assert told["act"].startswith("stop the run yourself")
    assert told["guard"].startswith("not running")


def test_a_log_in_trouble_is_told(scene: SceneOf) -> None:
    """What is shown may be old: say why."""
    told = verdict(scene(healthy(), health=Health(guard=True, trouble="permission denied")))
    assert told["act"] == "look at the log: permission denied"


def test_before_the_first_snapshot(scene: SceneOf) -> None:
    """Nothing judged: no verdict is made up."""
    made = Maker()
    made.open()
    shown = scene(made)
    assert verdict(shown)["act"] == "nothing yet: no snapshot was judged"
    assert headline(shown.story, shown.now) == "no snapshot was judged yet"
    made.add(Closed, why="nothing came", status=3)
    assert "guard ended without a snapshot" in verdict(scene(made))["act"]


def test_resolved_growth_is_no_reason_to_act(scene: SceneOf) -> None:
    """Growth that the grid carries is reported, and left alone."""
    made = healthy()
    made.snap(91, kind="resolved", field="T", factor=Estimate(1.01, 1.009, 1.011, 0.9))
    told = verdict(scene(made))
    assert told["act"] == "nothing to do: what grows is carried by the grid"
    assert told["why"].startswith("T grows 1.01 (1.009 to 1.011) per step")


def test_an_earlier_alarm_is_not_forgotten(scene: SceneOf) -> None:
    """Segment 2 has just begun and ended: the review has the story."""
    made = stopped()
    made.segment(2, "restart", 1800)
    made.snap(91, "gathering", seg=2)
    made.add(PulseChange, pulse="finished")
    told = verdict(scene(made))
    assert told["act"] == "see `stepwarden review`: segment 1 was alarmed at step 2,240"


@pytest.mark.parametrize(("factor", "wanted"), [(1.0204, ""), (2.5, "every 6 steps")])
def test_too_fast_for_the_snapshots(scene: SceneOf, factor: float, wanted: str) -> None:
    """At 2.5 per step round-off fills the field in 36 / ln 2.5 = 39 steps, two snapshots: detected,
    not foretold. At 1.02 it takes 1,800."""
    made = healthy()
    made.snap(
        91,
        "runaway",
        kind="numerical",
        alarmed=True,
        field="T",
        factor=Estimate(factor),
        ruin=Estimate(9.0, 8.0, 10.0),
        overflow=Estimate(700.0, 690.0, 720.0),
    )
    shown = scene(made)
    assert shown.story.last is not None
    told = left(shown.story, shown.story.last)
    assert ("not foretold" in told) == bool(wanted)
    assert told.endswith(wanted)


def test_settings_of_another_shape_are_no_stop(scene: SceneOf) -> None:
    """The settings in a log are untrusted: what is no stop ladder is none."""
    for stop in ("rm", [{"do": "rm"}], {"a": 1}, [3]):
        made = Maker()
        made.open(settings={"stop": stop})
        shown = scene(made)
        assert plan(shown.story) == "keep a clean checkpoint; no stop is configured"
        assert guard(shown.story, shown.health, shown.now)[0].startswith("on an alarm")


def test_boundaries_are_named(scene: SceneOf) -> None:
    """A growth at a face is told as one."""
    made = healthy()
    evidence = {**made.growing(110)["evidence"], "edges": {"axis 1 low": 0.93}}  # type: ignore[dict-item]
    made.snap(91, "swelling", kind="undetermined", evidence=evidence, field="T")
    shown = scene(made)
    assert shown.story.now is not None
    assert shown.story.last is not None
    told = where(shown.story.now, shown.story.last)
    assert told.endswith("93% at boundary axis 1 low")


def test_no_sentence_has_an_empty_piece(scene: SceneOf) -> None:
    """In all made runs every label has its sentence."""
    for make in ("healthy", "runaway", "stopped", "overflowed", "stalled", "three_fields"):
        for text in verdict(scene(getattr(made_runs, make)())).values():
            assert text.strip(" ;,:") == text
