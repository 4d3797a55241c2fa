"""The loop of guard on a scripted reading process: trouble, order, segments, signals."""

from __future__ import annotations

import signal
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from monitor import guard as guard_module
from monitor.config import RunSection, Settings
from monitor.growthlog.read import read_log
from monitor.growthlog.records import (
    AnyRecord,
    Closed,
    Opened,
    PulseChange,
    Remark,
    Segment,
    Skipped,
    Snapshot,
)
from monitor.guard import Guard
from monitor.guarding import session
from monitor.measure import Measurer
from probes.errors import ChildError, ChildHung
from probes.spec import SnapshotSpec
from probes.wire import Arrival, Failed, Looked, Pending, ReadSnapshot, Reply, Request
from tests.monitor.guarding.keeper import Content, ScriptedKeeper, arrival, values

Run = Callable[..., int]


@pytest.fixture(autouse=True)
def short_pauses(monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("SHORTEST_LOOK", "TROUBLE_PAUSE"):
        monkeypatch.setattr(session, name, 0.01)


@pytest.fixture
def log(tmp_path: Path) -> Path:
    return tmp_path / "growth.jsonl"


@pytest.fixture
def run(log: Path, monkeypatch: pytest.MonkeyPatch) -> Run:
    """Guards a script; by default catches up, only recording."""

    def runner(keeper: ScriptedKeeper, *, clock: Callable[[], float] | None = None, **more) -> int:
        monkeypatch.setattr(guard_module, "ChildKeeper", keeper.start)
        section = more.pop("section", RunSection())
        settings = Settings(snapshots=SnapshotSpec(pattern=("out/T_*.npy",)), run=section)
        options = {"actions": False, "catch_up": True, "quiet": True, **more}
        if clock is not None:
            options["clock"] = clock
        return Guard(settings, Path("/run"), log, **options).run()

    return runner


def only(log: Path, kind: type[AnyRecord]) -> list[AnyRecord]:
    return [r for r in read_log(log).records if isinstance(r, kind)]


def troubles(log: Path) -> list[str]:
    return [r.text for r in only(log, Remark) if r.level == "trouble"]


def script(*steps: int, **contents: list[Content]) -> ScriptedKeeper:
    """One look that offers these steps; contents by "k_20" replace the usual ones."""
    offered = tuple(arrival(step) for step in steps)
    usual: dict[str, list[Content]] = {f"k-{step}": [values(step)] for step in steps}
    usual.update({name.replace("_", "-"): content for name, content in contents.items()})
    return ScriptedKeeper([Looked(arrivals=offered, wakeup="events")], usual)


def steps(log: Path) -> list[int | None]:
    return [s.step for s in only(log, Snapshot)]


def test_in_order_and_once(run: Run, log: Path) -> None:
    """Each arrival is read once, settled and recorded; the child is closed."""
    keeper = script(10, 20, 30)
    assert run(keeper) == 0
    assert steps(log) == [10, 20, 30]
    assert keeper.done == {"k-10", "k-20", "k-30"}
    assert len(keeper.reads()) == 3
    assert keeper.closed


def test_only_the_first_of_a_segment_is_read_as_such(run: Run, log: Path) -> None:
    """There the reading process forgets its masks."""
    keeper = script(10, 20, 30)
    run(keeper)
    assert [r.new_segment for r in keeper.reads()] == [True, False, False]


def test_crops_are_wanted_back(run: Run, log: Path) -> None:
    """From the second difference on, boxes of the worst tiles come back with each sketch."""
    keeper = script(10, 20, 30, 40)
    run(keeper)
    assert keeper.reads()[0].crops == ()
    assert keeper.reads()[-1].crops != ()


def test_what_was_settled_is_not_judged_again(run: Run, log: Path) -> None:
    """Offered again by mistake: settled again, recorded once, also by the next guard."""
    run(script(10, 20))
    again = script(10, 20, 30)
    again.start = lambda watch, known: ScriptedKeeper.start(again, watch, ())  # type: ignore[method-assign]
    assert run(again) == 0
    assert steps(log) == [10, 20, 30]


def test_a_folder_that_cannot_be_listed_is_told_once(run: Run, log: Path) -> None:
    """Guard goes on when it can be listed again."""
    keeper = script(10)
    missing = Failed(kind="arrival", what="no such folder", where="/run/out")
    keeper.looks[:0] = [missing, missing, missing]
    assert run(keeper) == 0
    assert steps(log) == [10]
    assert troubles(log) == ["looking for snapshots: /run/out: no such folder"]


def test_a_file_system_that_does_not_answer_is_told_once(run: Run, log: Path) -> None:
    """The reading process hangs and is replaced; guard goes on."""
    keeper = script(10)
    keeper.looks[:0] = [ChildHung("no answer within 90 s")] * 3
    assert run(keeper) == 0
    assert steps(log) == [10]
    (told,) = troubles(log)
    assert "file system not answering" in told


def test_a_file_that_kills_the_reader_is_passed(run: Run, log: Path) -> None:
    """Tried twice, recorded as broken, and the next is judged."""
    died = ChildError("the reading process died")
    keeper = script(10, 20, 30, k_20=[died])
    assert run(keeper) == 0
    assert steps(log) == [10, 30]
    assert [(s.step, s.reason) for s in only(log, Skipped)] == [(20, "broken")]
    assert len([r for r in keeper.reads() if r.arrival.step == 20]) == 2


def test_not_yet_holds_up_those_behind(run: Run, log: Path) -> None:
    """Step 30 is not judged before 20 could be read."""
    not_yet = Failed(kind="not-yet", what="cut off")
    keeper = script(10, 20, 30, k_20=[not_yet, not_yet, values(20)])
    assert run(keeper) == 0
    assert steps(log) == [10, 20, 30]


def test_refused_is_recorded_with_its_remedy(run: Run, log: Path) -> None:
    """And never asked for again."""
    refused = Failed(kind="refused", what="external data", remedy="copy it into the file")
    keeper = script(10, 20, k_20=[refused])
    run(keeper)
    (skipped,) = only(log, Skipped)
    assert (skipped.reason, skipped.detail) == ("refused", "external data; copy it into the file")
    assert "k-20" in keeper.done


def test_a_held_file_is_told_once(run: Run, log: Path) -> None:
    """After a minute, with what its writer should do."""
    held = Pending(key="h", path="/run/out/T.h5", reason="held", detail="locked", since=0.0)
    keeper = script(10)
    keeper.looks += [Looked(pending=(held,), wakeup="events")] * 4
    assert run(keeper, catch_up=False, section=RunSection(last_step=10)) == 0
    assert len(troubles(log)) == 1
    assert "rename" in troubles(log)[0]
    assert [s.reason for s in only(log, Skipped)] == ["held"]


def test_steps_that_stand_in_the_files_alone(run: Run, log: Path) -> None:
    """They are known after reading; a restart is then read once more, as the first of a segment."""
    offered = [arrival(None, key=f"a-{s}", at=float(s)) for s in (10, 20, 30)]
    offered += [arrival(None, key=f"b-{s}", at=100.0 + s) for s in (20, 30)]
    contents: dict[str, list[Content]] = {
        a.key: [values(int(a.key.split("-")[1]))] for a in offered
    }
    keeper = ScriptedKeeper([Looked(arrivals=tuple(offered), wakeup="events")], contents)
    assert run(keeper) == 0
    assert steps(log) == [10, 20, 30, 20, 30]
    assert [s.why for s in only(log, Segment)] == ["start", "restart"]
    reads = [(r.arrival.key, r.new_segment) for r in keeper.reads()]
    assert reads[3:] == [("b-20", False), ("b-20", True), ("b-30", False)]


def test_another_shape_is_read_again_as_a_segment(run: Run, log: Path) -> None:
    """The mask of the old shape is forgotten."""
    keeper = script(10, 20, 30, k_30=[values(30, size=32)])
    run(keeper)
    assert [s.why for s in only(log, Segment)] == ["start", "shape"]
    assert [r.new_segment for r in keeper.reads()] == [True, False, False, True]


def test_a_fault_in_the_estimates_does_not_end_guarding(
    run: Run, log: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It is told as ours, and an overflow is seen all the same."""
    whole = Measurer.take

    def faulty(self: Measurer, sketched, step, time):
        if step >= 20:
            raise np.linalg.LinAlgError("did not converge")
        return whole(self, sketched, step, time)

    monkeypatch.setattr(Measurer, "take", faulty)
    burst = values(30)
    burst[3, 4] = np.inf
    assert run(script(10, 20, 30, k_30=[burst])) == 11
    assert steps(log) == [10, 20, 30]
    assert any("did not converge" in text for text in troubles(log))
    last = only(log, Snapshot)[-1]
    assert last.verdict.condition == "overflowed"
    assert last.evidence.bad_at == ("T", "", (3, 4))


def test_a_fault_in_the_decision_does_not_end_guarding(
    run: Run, log: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The condition stays as it was, but for an overflow."""

    def faulty(*arguments: object) -> None:
        raise OverflowError("math range error")

    monkeypatch.setattr("monitor.condition.decide", faulty)
    burst = values(30)
    burst[3, 4] = np.inf
    assert run(script(10, 20, 30, k_30=[burst])) == 11
    conditions = [s.verdict.condition for s in only(log, Snapshot)]
    assert conditions == ["gathering", "gathering", "overflowed"]
    assert len(troubles(log)) == 1


def test_an_overflow_is_not_learnt_as_a_mask(run: Run, log: Path) -> None:
    """A guard that is started again when NaN has just appeared: its reading process takes them for
    a mask, the guard does not."""
    run(script(10, 20, 30))
    burst = values(40)
    burst[5:8, 6] = np.nan
    assert run(script(40, k_40=[burst])) == 11
    last = only(log, Snapshot)[-1]
    assert (last.verdict.condition, last.evidence.channels[0].bad) == ("overflowed", 3)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP])
def test_a_signal_during_a_read(number: signal.Signals, run: Run, log: Path) -> None:
    """Guard does not wait for the end of the read; what was judged is closed, the rest is left to
    the next guard."""
    keeper = script(10, 20, 30)
    usual = keeper.ask

    def ask(request: Request, limit_s: float) -> Reply:
        if isinstance(request, ReadSnapshot) and request.arrival.step == 20:
            signal.raise_signal(number)
            pytest.fail("went on reading")
        return usual(request, limit_s)

    keeper.ask = ask  # type: ignore[method-assign]
    assert run(keeper) == 128 + number
    assert steps(log) == [10]
    assert only(log, Closed)[-1].status == 128 + number
    assert run(script(10, 20, 30)) == 0
    assert steps(log) == [10, 20, 30]


def test_notes_of_the_reader_are_told_once(run: Run, log: Path) -> None:
    """For example a doubtful mask."""
    keeper = script(10, 20, 30)
    keeper.notes = ("field 'T': 60 % of the cells are masked",)
    run(keeper)
    assert [r.text for r in only(log, Remark)].count(keeper.notes[0]) == 1


def test_a_process_that_is_not_there(run: Run, log: Path) -> None:
    """What lies there is taken, and the log says that there is no such process."""
    section = RunSection(pid=2**22 + 12345)
    assert run(script(10, 20), catch_up=False, section=section) == 0
    assert steps(log) == [10, 20]
    assert "no process" in only(log, Closed)[-1].why


def test_idle_is_an_end_by_the_given_clock(run: Run, log: Path) -> None:
    """The clock is passed in: an hour without a snapshot takes no time to test."""
    now = [1000.0]

    def clock() -> float:
        now[0] += 10.0
        return now[0]

    section = RunSection(idle_seconds=3600.0)
    assert run(script(10, 20), catch_up=False, section=section, clock=clock) == 0
    assert [p.pulse for p in only(log, PulseChange)] == ["arriving", "stalled", "finished"]


def test_an_internal_error_is_in_the_log(
    run: Run, log: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The closing record says what happened; the error goes on to the command line."""

    def faulty(*arguments: object, **more: object) -> None:
        raise RuntimeError("impossible")

    monkeypatch.setattr("monitor.guarding.judging.Judge._save", faulty)
    with pytest.raises(RuntimeError, match="impossible"):
        run(script(10))
    closed = only(log, Closed)[-1]
    assert (closed.status, "impossible" in closed.why) == (1, True)


def test_a_guard_says_what_it_goes_on_from(run: Run, log: Path) -> None:
    """continues: the window of the guard before was taken up."""
    run(script(10, 20))
    run(script(10, 20, 30))
    assert [(o.continues, o.note) for o in only(log, Opened)] == [(False, ""), (True, "")]
    assert [s.index for s in only(log, Snapshot)] == [1, 2, 3]
    assert only(log, Snapshot)[-1].evidence.fresh == 3


def test_what_is_still_being_written_at_the_end_is_recorded(run: Run, log: Path) -> None:
    """A file that its solver never finished: incomplete, and not waited for without end."""
    cut = Pending(
        key="c", path="/run/out/T_40.npy", reason="writing", detail="cut off", since=0.0, step=40
    )
    keeper = script(10)
    keeper.looks += [Looked(pending=(cut,), wakeup="events")] * 2
    assert run(keeper) == 0
    assert isinstance(arrival(40), Arrival)
    assert [s.step for s in only(log, Skipped)] == []
