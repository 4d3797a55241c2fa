"""The stop ladder on obedient, stubborn and dead solvers, and after a kill of guard."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from monitor.actions.runprocess import RunProcess
from monitor.actions.stop import Deed, Ladder, describe
from monitor.config import RunSection, Settings, StopStep
from monitor.growthlog.records import Intent, Outcome, Remark
from monitor.guarding.journal import Journal
from probes.errors import ChildError
from probes.spec import SnapshotSpec
from probes.wire import Failed, Request, StopFile
from tests.monitor.actions.conftest import OBEDIENT, STUBBORN, StartJob
from tests.monitor.actions.fakes import FakeChild, FakeLog

FILE = StopStep(do="file", path="STOP", wait_seconds=30.0)
TERM = StopStep(do="signal", signal="TERM", wait_seconds=30.0)
KILL = StopStep(do="signal", signal="KILL", wait_seconds=30.0)

Make = Callable[..., Ladder]


@pytest.fixture
def make(child: FakeChild, journal: Journal, tmp_path: Path) -> Make:
    def made(*rungs: StopStep, process: RunProcess | None = None, spacing: float = 2.0) -> Ladder:
        return Ladder(rungs, child.ask, journal, process, tmp_path, tmp_path, lambda: spacing)

    return made


def command(code: str, wait: float = 20.0) -> StopStep:
    return StopStep(do="command", command=(sys.executable, "-c", code), wait_seconds=wait)


def until(ladder: Ladder, done: Callable[[], bool], now: float = 1000.0) -> None:
    """Advance at a fixed time until something real has happened."""
    deadline = time.monotonic() + 20.0
    while not done() and time.monotonic() < deadline:
        ladder.advance(now)
        time.sleep(0.01)
    assert done()


def test_an_obedient_solver_ends_at_the_first_rung(
    make: Make, start_job: StartJob, log: FakeLog
) -> None:
    """TERM, the process ends: accepted, and KILL is never tried."""
    job = start_job(OBEDIENT)
    ladder = make(TERM, KILL, process=RunProcess(job.pid))
    ladder.begin(1000.0, "T grows")
    until(ladder, lambda: not ladder.active)
    assert log.outcomes("signal") == ["done", "accepted"]
    assert log.outcomes("kill") == []
    assert not ladder.failed


def test_a_stubborn_solver_is_tried_harder(
    make: Make, start_job: StartJob, log: FakeLog, tmp_path: Path
) -> None:
    """Stop file, then TERM, then KILL, each after its waiting time and not before."""
    job = start_job(STUBBORN)
    ladder = make(FILE, TERM, KILL, process=RunProcess(job.pid))
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    ladder.advance(1029.0)
    assert log.outcomes("stop-file") == ["done"]
    assert (tmp_path / "STOP").exists()
    ladder.advance(1030.0)
    assert log.outcomes("stop-file") == ["done", "no-reaction"]
    ladder.advance(1031.0)
    ladder.advance(1060.0)
    assert log.outcomes("signal") == ["done"]
    ladder.advance(1061.5)
    until(ladder, lambda: not ladder.active, 1062.0)
    assert log.outcomes("signal") == ["done", "no-reaction"]
    assert log.outcomes("kill") == ["done", "accepted"]


def test_a_dead_solver_is_left_alone(make: Make, start_job: StartJob, log: FakeLog) -> None:
    """It ended by itself before anything was done: no rung is tried."""
    job = start_job("print()")
    process = RunProcess(job.pid)
    job.wait()
    ladder = make(TERM, KILL, process=process)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    assert not ladder.active
    assert [r.act for r in log.only(Intent)] == ["hold"]


def test_a_stop_file_that_is_taken_away_is_a_reaction(
    make: Make, log: FakeLog, tmp_path: Path
) -> None:
    """The solver removed it: accepted without waiting further."""
    ladder = make(FILE, KILL)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    (tmp_path / "STOP").unlink()
    ladder.advance(1002.0)
    assert log.outcomes("stop-file") == ["done", "accepted"]
    assert not ladder.active


@pytest.mark.parametrize("action", ["create", "write", "remove"])
def test_every_way_with_a_file(action: str, make: Make, log: FakeLog, tmp_path: Path) -> None:
    """Created, written with its text, or removed."""
    path = tmp_path / "STOP"
    if action == "remove":
        path.write_text("run on")
    text = "stop\n" if action == "write" else ""
    ladder = make(StopStep(do="file", path="STOP", action=action, text=text))  # type: ignore[arg-type]
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    assert path.exists() == (action != "remove")
    assert not path.exists() or path.read_text() == text
    assert log.outcomes("stop-file") == ["done"]


def test_without_a_process_silence_is_the_reaction(make: Make, log: FakeLog) -> None:
    """No snapshot for the waiting time or three spacings, whichever is longer: accepted."""
    ladder = make(FILE, spacing=40.0)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    ladder.arrived(1010.0)
    ladder.advance(1100.0)
    assert ladder.active
    ladder.advance(1130.0)
    assert log.outcomes("stop-file") == ["done", "accepted"]


def test_without_a_process_a_snapshot_after_the_time_is_none(make: Make, log: FakeLog) -> None:
    """Snapshots that come after the waiting time show that the run goes on."""
    ladder = make(FILE)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    ladder.arrived(1020.0)
    ladder.advance(1021.0)
    assert log.outcomes("stop-file") == ["done"]
    ladder.arrived(1031.0)
    ladder.advance(1031.0)
    assert log.outcomes("stop-file") == ["done", "no-reaction"]
    assert ladder.failed
    assert any("did not react" in r.text for r in log.only(Remark))


def test_a_command_gets_its_request_id(make: Make, log: FakeLog, tmp_path: Path) -> None:
    """The id in the log stands in the command's environment, and it runs in the run's folder."""
    code = "import os; open('seen', 'w').write(os.environ['STEPWARDEN_REQUEST'])"
    ladder = make(command(code))
    ladder.begin(1000.0, "T grows")
    until(ladder, lambda: log.outcomes("command") == ["done"])
    intent = next(r for r in log.only(Intent) if r.act == "command")
    assert (tmp_path / "seen").read_text() == intent.id


def test_a_failing_command_leads_to_the_next_rung(make: Make, log: FakeLog) -> None:
    """Exit status and last words are in the log; the next rung comes at once."""
    ladder = make(command("import sys; print('no such job'); sys.exit(2)"), FILE)
    ladder.begin(1000.0, "T grows")
    until(ladder, lambda: log.outcomes("stop-file") == ["done"])
    failed = next(r for r in log.only(Outcome) if r.act == "command")
    assert (failed.outcome, failed.detail) == ("failed", "exit status 2: no such job")


def test_a_command_without_end_is_ended(make: Make, log: FakeLog) -> None:
    """Its waiting time is its time limit."""
    ladder = make(command("import time; time.sleep(60)", wait=0.5))
    ladder.begin(1000.0, "T grows")
    until(ladder, lambda: log.outcomes("command") == ["failed"])
    assert ladder.failed


def test_a_signal_without_process_fails(make: Make, log: FakeLog) -> None:
    """Nobody to send it to is a failure with a remedy, not a crash."""
    ladder = make(TERM)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    assert log.outcomes("signal") == ["failed"]
    assert "pid" in log.only(Outcome)[-1].detail


@pytest.mark.parametrize("trouble", ["reply", "death"])
def test_a_file_system_in_trouble(trouble: str, make: Make, child: FakeChild, log: FakeLog) -> None:
    """A stop file that cannot be made is a failed rung."""

    def before(request: Request) -> Failed | None:
        if not isinstance(request, StopFile):
            return None
        if trouble == "death":
            raise ChildError("file system not answering")
        return Failed(kind="arrival", what="read-only file system")

    child.before = before
    ladder = make(FILE)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    assert log.outcomes("stop-file") == ["failed"]
    assert ladder.failed


def test_every_intent_is_on_the_disk_before_the_act(
    make: Make, child: FakeChild, log: FakeLog
) -> None:
    """When the file is made, its synced intent is the last record."""
    seen = []

    def before(request: Request) -> None:
        if isinstance(request, StopFile) and request.action == "create":
            seen.append((log.records[-1], log.synced[-1]))

    child.before = before
    ladder = make(FILE)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    ((record, synced),) = seen
    assert isinstance(record, Intent)
    assert record.act == "stop-file"
    assert synced


def test_hold_comes_first_and_says_why(make: Make, log: FakeLog, tmp_path: Path) -> None:
    """The run's script may resubmit as soon as the run ends, so HOLD is there before."""
    ladder = make(FILE)
    ladder.begin(1000.0, "T grows 1.02 per step")
    assert "T grows 1.02 per step" in (tmp_path / "HOLD").read_text()
    assert not (tmp_path / "STOP").exists()
    assert log.outcomes("hold") == ["done"]


def test_nothing_configured_nothing_done(make: Make, log: FakeLog, tmp_path: Path) -> None:
    """Without rungs there is no stop and no HOLD."""
    ladder = make()
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    assert log.records == []
    assert list(tmp_path.iterdir()) == []


def test_a_hold_that_is_there_stays(make: Make, log: FakeLog, tmp_path: Path) -> None:
    """Somebody's own HOLD is not overwritten."""
    (tmp_path / "HOLD").write_text("mine")
    make(FILE).begin(1000.0, "T grows")
    assert (tmp_path / "HOLD").read_text() == "mine"
    assert log.outcomes("hold") == ["found-done"]


def test_begun_once(make: Make, log: FakeLog) -> None:
    """A second alarm does not start a second stop."""
    ladder = make(FILE)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    ladder.begin(1001.0, "T grows")
    ladder.advance(1001.0)
    assert [r.act for r in log.only(Intent)] == ["hold", "stop-file"]


# --- after a kill of guard ------------------------------------------------------------------


def intent(act: str, attempt: int = 1, at: float = 990.0) -> Intent:
    return Intent(seq=1, at=at, act=act, id="stop-77", target="x", attempt=attempt)


def outcome(act: str, result: str, at: float = 991.0) -> Outcome:
    return Outcome(seq=2, at=at, act=act, id="stop-77", outcome=result)  # type: ignore[arg-type]


def test_an_effect_that_is_there_is_not_made_again(
    make: Make, log: FakeLog, tmp_path: Path
) -> None:
    """Killed after making the stop file, before saying so: it is found, and the wait goes on."""
    (tmp_path / "STOP").touch()
    ladder = make(FILE)
    ladder.resume([Deed(intent("stop-file"))], 1000.0)
    ladder.advance(1000.0)
    assert log.outcomes("stop-file") == ["found-done"]
    assert log.only(Intent) == []
    assert ladder.active


def test_an_effect_that_is_missing_is_made_with_the_same_id(
    make: Make, log: FakeLog, tmp_path: Path
) -> None:
    """Killed before making it: second attempt, same request."""
    ladder = make(FILE)
    ladder.resume([Deed(intent("stop-file"))], 1000.0)
    ladder.advance(1000.0)
    (again,) = log.only(Intent)
    assert (again.id, again.attempt) == ("stop-77", 2)
    assert (tmp_path / "STOP").exists()


def test_a_command_runs_twice_at_most(make: Make, log: FakeLog, tmp_path: Path) -> None:
    """Cut off in the second attempt, it counts as failed and the next rung comes."""
    ladder = make(command("open('ran', 'w')"), FILE)
    ladder.resume([Deed(intent("command", attempt=2))], 1000.0)
    ladder.advance(1000.0)
    assert log.outcomes("command") == ["failed"]
    assert log.outcomes("stop-file") == ["done"]
    assert not (tmp_path / "ran").exists()


def test_the_second_attempt_of_a_command_has_the_same_id(
    make: Make, log: FakeLog, tmp_path: Path
) -> None:
    """The command itself can tell that it was asked before."""
    code = "import os; open('seen', 'w').write(os.environ['STEPWARDEN_REQUEST'])"
    ladder = make(command(code))
    ladder.resume([Deed(intent("command"))], 1000.0)
    until(ladder, lambda: log.outcomes("command") == ["done"])
    assert (tmp_path / "seen").read_text() == "stop-77"


def test_waiting_goes_on_from_when_it_was_done(make: Make, log: FakeLog, tmp_path: Path) -> None:
    """Nothing is done again, and the time that passed counts."""
    (tmp_path / "STOP").touch()
    ladder = make(FILE)
    ladder.resume([Deed(intent("stop-file"), [outcome("stop-file", "done", at=991.0)])], 1000.0)
    ladder.arrived(1022.0)
    ladder.advance(1022.0)
    assert log.outcomes("stop-file")[-1] == "no-reaction"
    assert log.only(Intent) == []


@pytest.mark.parametrize("last", ["accepted", "no-reaction", "failed"])
def test_a_finished_stop_is_never_repeated(last: str, make: Make, log: FakeLog) -> None:
    """Whatever came of its last rung."""
    ladder = make(FILE)
    ladder.resume([Deed(intent("stop-file"), [outcome("stop-file", last)])], 1000.0)
    ladder.begin(1000.0, "T grows")
    ladder.advance(1000.0)
    assert log.records == []
    assert not ladder.active
    assert ladder.failed == (last != "accepted")


def test_between_two_rungs_the_next_is_taken(make: Make, log: FakeLog) -> None:
    """Killed after a rung had failed: the ladder goes on with the one after it."""
    ladder = make(TERM, FILE)
    ladder.resume([Deed(intent("signal"), [outcome("signal", "failed")])], 1000.0)
    ladder.advance(1000.0)
    assert [r.act for r in log.only(Intent)] == ["stop-file"]


def test_killed_right_after_hold(make: Make, log: FakeLog, tmp_path: Path) -> None:
    """HOLD was written and nothing else: the first rung is taken."""
    (tmp_path / "HOLD").touch()
    ladder = make(FILE)
    ladder.resume([Deed(intent("hold"), [outcome("hold", "done")])], 1000.0)
    ladder.advance(1000.0)
    assert (tmp_path / "STOP").exists()


def test_the_run_ended_while_guard_was_away(make: Make, log: FakeLog, start_job: StartJob) -> None:
    """A signal was cut off and the process is gone: its purpose is served, nothing is sent."""
    job = start_job("print()")
    process = RunProcess(job.pid)
    job.wait()
    ladder = make(TERM, process=process)
    ladder.resume([Deed(intent("signal"))], 1000.0)
    assert log.outcomes("signal") == ["accepted"]
    assert log.only(Intent) == []


@pytest.mark.parametrize("outcomes", [[], ["done"]], ids=["cut-off", "waiting"])
def test_a_stop_is_given_up_when_hold_is_taken_away(
    outcomes: list[str], make: Make, log: FakeLog, tmp_path: Path
) -> None:
    """HOLD was written before the first rung. Where it is gone when the next guard comes, somebody
    has mended the run: neither the rung that was cut off nor the next one is done to it."""
    held = Deed(intent("hold"), [outcome("hold", "done")])
    cut = Deed(intent("command"), [outcome("command", o) for o in outcomes])
    ladder = make(command("open('ran', 'w')", wait=1.0), FILE)
    ladder.resume([held, cut], 1000.0)
    ladder.arrived(1100.0)
    ladder.advance(1100.0)
    assert not ladder.active
    assert not ladder.failed
    assert log.records == []
    assert not (tmp_path / "STOP").exists()


# --- showing --------------------------------------------------------------------------------


def test_show_says_everything_and_does_nothing(tmp_path: Path) -> None:
    """Each rung, its waiting time, HOLD and the pins are named; no file appears."""
    settings = Settings(
        snapshots=SnapshotSpec(pattern=("T_{step}.npy",)),
        run=RunSection(pid=4711),
        stop=(FILE, command("print(1)"), TERM),
    )
    text = describe(settings, tmp_path, tmp_path / "growth.jsonl")
    for word in ("STOP", "created", "print(1)", "TERM", "4711", "HOLD", "pins", "30 s"):
        assert word in text
    assert list(tmp_path.iterdir()) == []


def test_show_without_stop(tmp_path: Path) -> None:
    """It says that nothing is configured."""
    settings = Settings(snapshots=SnapshotSpec(pattern=("a.npy",)))
    assert "no [[stop]]" in describe(settings, tmp_path, tmp_path / "growth.jsonl")
