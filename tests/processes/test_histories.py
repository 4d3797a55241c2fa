"""Sight between snapshots: guard follows what the solver prints."""

from __future__ import annotations

import math

import pytest

from monitor.growthlog.read import read_log
from monitor.growthlog.records import History, Intent, Outcome
from monitor.review import summarise
from tests.processes.scene import Scene
from tests.processes.test_guard_run import true_factor

SETTINGS = """\
[snapshots]
pattern = "out/T_{step}.npy"

[histories.corner]
path = "plate.log"
column = "corner"
step = "step"
alarm = %s

[[stop]]
do = "file"
path = "STOP"
"""


def histories(scene: Scene) -> list[History]:
    return [r for r in scene.records() if isinstance(r, History)]


def test_a_history_stops_a_run_that_no_snapshot_would_save(scene: Scene) -> None:
    """10 % over the limit with a snapshot every 1000 steps, which the field does not survive: the
    history alarms while its growing part is below 1e-6 of the field, with about the factor of the
    step matrix, and the run is stopped before the second snapshot, with the first one kept."""
    (scene.folder / "stepwarden.toml").write_text(SETTINGS % "true")
    solver = scene.solve(
        *("--factor", 1.1, "--last", 100000, "--every", 1000, "--stop-file", "STOP"),
        *("--history", "plate.log", "--haste", 0.02),
    )
    assert scene.guarded("--pid", solver.pid) == 10
    assert solver.wait(10.0) == 0
    assert scene.steps() == [0]
    turn = next(r for r in histories(scene) if r.verdict.alarmed)
    assert turn.verdict.factor is not None
    told = math.log(float(turn.verdict.factor.value or 0))
    assert abs(told / math.log(true_factor(1.1)) - 1) < 0.1
    assert turn.verdict.ruin is not None
    assert float(turn.verdict.ruin.low or 0) > math.log(1e6) / math.log(true_factor(1.1))
    outcomes = [r.outcome for r in scene.records() if isinstance(r, Outcome) and r.act != "pin"]
    assert outcomes == ["done", "done", "accepted"]
    assert "corner" in (scene.folder / "HOLD").read_text()
    (kept,) = scene.pins("kept")
    assert kept.step == 0
    review = summarise(read_log(scene.log))
    assert review.alarmed
    assert "alarm of the history corner alone" in review.text()
    assert review.clean is not None
    assert review.clean.step == 0


@pytest.mark.parametrize("factor", [1.1, 0.9])
def test_an_undeclared_history_is_only_told(factor: float, scene: Scene) -> None:
    """The same growth without `alarm`: in the log and in the review, and nothing is done; inside
    the limit nothing is told."""
    (scene.folder / "stepwarden.toml").write_text(SETTINGS % "false")
    scene.solved(
        *("--factor", factor, "--last", 300, "--every", 1000, "--history", "plate.log"),
    )
    assert scene.guarded("--catch-up") == 0
    assert not any(isinstance(r, Intent) and r.act != "pin" for r in scene.records())
    told = {r.verdict.condition for r in histories(scene)}
    assert ("swelling" in told) is (factor > 1.0)
    assert not any(r.verdict.alarmed for r in histories(scene))
    assert "corner" in summarise(read_log(scene.log)).text()
