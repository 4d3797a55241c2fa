"""The verdict in words."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from msgspec.structs import replace

from monitor.desk.advice import Health, advice, guard, headline, left, plan, rows, where
from monitor.desk.parts.part import Scene
from monitor.growthlog.records import (
    Closed,
    Estimate,
    History,
    Outcome,
    PulseChange,
    Snapshot,
    Verdict,
)
from tests.monitor.desk import made_runs
from tests.monitor.desk.made_runs import Maker, healthy, overflowed, runaway, stalled, stopped

SceneOf = Callable[..., Scene]
QUIET = Verdict(condition="quiet")


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


def test_the_drift_of_totals_is_a_number_on_the_screen(scene: SceneOf) -> None:
    """Beside where the run is, for fields that are declared conserved."""
    made = healthy()
    at = max(i for i, r in enumerate(made.records) if isinstance(r, Snapshot))
    last = made.records[at]
    assert isinstance(last, Snapshot)
    channel = replace(last.evidence.channels[0], drift=3.4e-9)
    made.records[at] = replace(last, evidence=replace(last.evidence, channels=(channel,)))
    assert "total of T +3.4e-9" in verdict(scene(made))["run"]
    assert "total" not in verdict(scene(healthy()))["run"]


def test_histories_stand_beside_the_fields(scene: SceneOf) -> None:
    """The worst first; one that is an alarm asks for what an alarm of the fields would."""
    made = healthy()
    made.add(History, name="dt", file="", sample=9, step=9, value=0.1, verdict=QUIET)
    grows = Verdict(condition="swelling", why="energy: its changes grew", field="energy")
    made.add(History, name="energy", file="", sample=9, step=9, value=5.0, verdict=grows)
    shown = scene(made)
    row = next(r for r in rows(shown.story, shown.health, shown.now) if r.label == "also")
    assert row.text.startswith("energy 5 at step 9, swelling: its changes grew; dt 0.1")
    assert row.style == "swelling"
    assert [e.text for e in shown.story.events][-1].startswith("history energy 5 at step 9")
    assert verdict(shown)["act"] == "nothing to do"
    alarm = Verdict(condition="runaway", alarmed=True, field="energy", onset=(1790, 1900))
    made.add(History, name="energy", file="", sample=99, step=1999, value=5.0, verdict=alarm)
    told = verdict(scene(made))
    assert told["act"] == "stand by: guard is about to stop the run"
    assert "step 1,200, pinned" in told["clean"]
    assert "before the growth can have begun (step 1790)" in told["clean"]
    assert "also" not in verdict(scene(healthy()))
