"""The demo: a small solver that goes unstable, guard beside it, and the desk (or lines) in front.

Solver and guard are processes of their own, as they would be on a cluster; this one only starts
them, looks at the growth log, and cleans up.
"""

from __future__ import annotations

import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import FrameType

from monitor.growthlog.follow import Follower
from monitor.growthlog.read import LogContents, read_log
from monitor.growthlog.records import AnyRecord, Outcome, PinRecord, Remark, Snapshot
from monitor.logfinding import LOG_NAME, SETTINGS_NAME
from monitor.review import summarise
from monitor.wording import clean, snapshot_line
from probes.errors import SettingsError

STOP_NAME = "STOP"

# Acts of the stop ladder, and outcomes that mean that the solver reacted.
_STOPPING = ("stop-file", "command", "signal", "kill")
_REACTED = ("accepted", "found-done")

# From round-off to the alarm a demo takes about a minute; guard is given time to end after it.
LONGEST_SECONDS = 270.0
ENDING_SECONDS = 30.0
LOOK_SECONDS = 0.2


@dataclass(frozen=True, slots=True)
class Scene:
    """What a demo solver writes: its files' pattern and what the settings say of its fields."""

    about: str
    pattern: str
    settings: str = ""


SCENES = {
    "plate": Scene("heat in a cooling plate with a well-conducting insert", "out/T_{step}.npy"),
}


@dataclass(frozen=True, slots=True)
class Plan:
    """One showing. step_factor: time step relative to the solver's own limit; pace: seconds per
    snapshot; fault: a named trouble that no step cures, "" for none."""

    scene: str
    folder: Path
    step_factor: float = 1.02
    pace: float = 0.25
    fault: str = ""

    @property
    def unstable(self) -> bool:
        """An alarm is expected."""
        return self.step_factor > 1.0 or bool(self.fault)


def fresh_folder(wanted: Path | None) -> Path:
    """An empty folder: the wanted one (made if needed), else a new temporary one.

    Raises SettingsError where the wanted folder holds something.
    """
    if wanted is None:
        return Path(tempfile.mkdtemp(prefix="stepwarden-demo-"))
    wanted.mkdir(parents=True, exist_ok=True)
    if any(wanted.iterdir()):
        raise SettingsError("the demo needs an empty folder", str(wanted), "name a new one")
    return wanted.resolve()


def settings_text(plan: Plan) -> str:
    """The ``stepwarden.toml`` of a showing: pins on, a stop file and then TERM for the solver."""
    scene = SCENES[plan.scene]
    return f"""\
[run]
name = "demo: {scene.about}"

[snapshots]
pattern = "{scene.pattern}"
{scene.settings}
[[stop]]
do = "file"
path = "{STOP_NAME}"
wait_seconds = 15

[[stop]]
do = "signal"
signal = "TERM"
wait_seconds = 15
"""


def show_plain(plan: Plan) -> LogContents:
    """Run the demo to its end, printing a line per snapshot and event; returns its log."""
    log = plan.folder / LOG_NAME
    with _cast(plan) as guard:
        _follow(log, guard)
    return read_log(log)


def show_on_screen(plan: Plan, *, ascii_only: bool) -> tuple[int, LogContents]:
    """Run the demo behind the desk until that is left; returns the desk's status and the log."""
    from monitor.desk import run as desk

    log = plan.folder / LOG_NAME
    with _cast(plan) as guard:
        _await_log(log, guard)
        status = desk(str(log), ascii=ascii_only)
    return status, read_log(log)


def shortcomings(plan: Plan, contents: LogContents) -> list[str]:
    """What did not happen that a demo must show; empty when all went well.

    An unstable solver must be alarmed, a clean checkpoint pinned and verified, and the solver
    stopped before its field was ruined; a stable one must stay quiet.
    """
    review = summarise(contents)
    if not plan.unstable:
        return ["an alarm on a stable solver"] if review.alarmed else []
    out = []
    if not review.alarmed:
        out.append("no alarm came")
    kept = {pin.step for pin in review.pins if pin.state == "kept" and pin.verified}
    if review.clean is None or not review.clean.pinned or review.clean.step not in kept:
        out.append("no clean checkpoint was pinned and verified")
    if not any(d.act in _STOPPING and d.outcome in _REACTED for d in review.deeds):
        out.append("the solver was not stopped")
    snapshots = [r for r in contents.records if isinstance(r, Snapshot)]
    if review.overflowed or (snapshots and _ruined(snapshots[-1])):
        out.append("the field was ruined before the solver stopped")
    return out


def _ruined(snapshot: Snapshot) -> bool:
    """The growing part is as large as the field somewhere."""
    share = snapshot.evidence.local
    value = share.value if share is not None else None
    return value is not None and (isinstance(value, str) or value >= 1.0)


@contextmanager
def _cast(plan: Plan) -> Iterator[subprocess.Popen[bytes]]:
    """Solver and guard as processes in the demo's folder; yields guard, ends both on leaving.

    TERM and HUP leave like an interrupt does, so that nothing is left running.
    """
    (plan.folder / SETTINGS_NAME).write_text(settings_text(plan), encoding="utf-8")
    solver_words = ["--out", "out", "--step-factor", str(plan.step_factor)]
    solver_words += ["--pace", str(plan.pace), "--stop-file", STOP_NAME]
    if plan.fault:
        solver_words += ["--fault", plan.fault]
    started: list[subprocess.Popen[bytes]] = []
    before = {number: signal.signal(number, _leave) for number in (signal.SIGTERM, signal.SIGHUP)}
    try:
        solver = _start(plan.folder, "solver.txt", [f"demo_runs.{plan.scene}", *solver_words])
        started.append(solver)
        guard_words = ["monitor", "guard", SETTINGS_NAME, "--pid", str(solver.pid)]
        guard = _start(plan.folder, "guard.txt", guard_words)
        started.append(guard)
        yield guard
    finally:
        for process in reversed(started):
            _end(process)
        for number, handler in before.items():
            signal.signal(number, handler)


def _leave(number: int, frame: FrameType | None) -> None:
    raise SystemExit(128 + number)


def _start(folder: Path, said: str, words: Sequence[str]) -> subprocess.Popen[bytes]:
    """A module as a process of its own in `folder`; what it says goes to the file `said`."""
    with open(folder / said, "wb") as output:
        return subprocess.Popen(
            [sys.executable, "-P", "-m", *words],
            cwd=folder,
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=subprocess.STDOUT,
        )


def _end(process: subprocess.Popen[bytes]) -> None:
    """Ask a process of ours to end, then force it."""
    if process.poll() is None:
        process.terminate()
        try:
            process.wait(ENDING_SECONDS)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def _await_log(log: Path, guard: subprocess.Popen[bytes]) -> None:
    """Wait until guard has begun its log. Raises SettingsError with what guard said if it ended."""
    until = time.monotonic() + ENDING_SECONDS
    while not log.exists():
        if guard.poll() is not None or time.monotonic() > until:
            said = (log.parent / "guard.txt").read_text(encoding="utf-8", errors="replace")
            raise SettingsError("guard did not begin its log", str(log), said.strip()[-400:])
        time.sleep(LOOK_SECONDS)


def _follow(log: Path, guard: subprocess.Popen[bytes]) -> None:
    """Print the log's news until guard ends or the demo's time is over."""
    _await_log(log, guard)
    follower = Follower(log)
    until = time.monotonic() + LONGEST_SECONDS
    running = True
    while running and time.monotonic() < until:
        running = guard.poll() is None
        for record in follower.poll():
            line = _line(record)
            if line:
                print(clean(line), flush=True)
        if running:
            time.sleep(LOOK_SECONDS)


def _line(record: AnyRecord) -> str:
    """What a plain showing prints of a record, "" for nothing."""
    if isinstance(record, Snapshot):
        return snapshot_line(record, "demo")
    if isinstance(record, PinRecord) and record.state == "kept":
        proof = "verified" if record.verified else "not verified"
        return f"kept: checkpoint of step {record.step} by {record.method}, {proof}"
    if isinstance(record, Outcome):
        return f"{record.act}: {record.outcome} {record.detail}".rstrip()
    if isinstance(record, Remark):
        return f"{record.level}: {record.text}"
    return ""
