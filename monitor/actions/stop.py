"""Have the run stopped: the rungs of ``[[stop]]`` in order, the next only if it does not react.

Each rung is an `Intent` on the disk, the act, an `Outcome` "done" or "failed", and after waiting
another one, "accepted" or "no-reaction". So after a kill of guard the log tells how far it came,
and nothing is done twice without need: an intent without outcome was cut off within the act, and
the effect is looked for first.

Nothing here blocks: `advance` is called again and again with the time.
"""

from __future__ import annotations

import secrets
import signal
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from shlex import join
from typing import Literal

from monitor.actions.bounded import BoundedCommand
from monitor.actions.hold import HOLD_NAME, hold_text, write_hold
from monitor.actions.runprocess import NotSignalled, RunProcess
from monitor.config import Settings, StopStep
from monitor.growthlog.records import Intent, Outcome
from monitor.guarding.journal import Journal, Result
from monitor.wording import clean, duration_text
from probes.errors import ChildError
from probes.wire import Done, Failed, Reply, Request, StopFile

Ask = Callable[[Request, float], Reply]

ACTS = ("stop-file", "command", "signal", "kill")
REQUEST_VARIABLE = "STEPWARDEN_REQUEST"

# A stop file is made or looked at within this time, or the file system counts as hanging.
FILE_SECONDS = 30.0
# A stop file is looked at so often while the run's reaction is awaited.
LOOK_SECONDS = 1.0
ATTEMPTS = 2


def act_of(rung: StopStep) -> str:
    """The name of a rung's act in the log."""
    if rung.do == "file":
        return "stop-file"
    if rung.do == "command":
        return "command"
    return "kill" if rung.signal.removeprefix("SIG") == "KILL" else "signal"


@dataclass
class Deed:
    """One act in the log: its last intent, and its outcomes in order."""

    intent: Intent
    outcomes: list[Outcome] = field(default_factory=list)

    @property
    def last(self) -> Outcome | None:
        return self.outcomes[-1] if self.outcomes else None


class Ladder:
    """Stops one run once. Made for one segment; `resume` takes up what an earlier guard began.

    active: begun and not over. failed: all rungs were tried and the run did not react.
    """

    def __init__(
        self,
        rungs: Sequence[StopStep],
        ask: Ask,
        journal: Journal,
        process: RunProcess | None,
        folder: Path,
        log_folder: Path,
        spacing: Callable[[], float],
    ) -> None:
        self._rungs, self._ask, self._journal = tuple(rungs), ask, journal
        self._process, self._folder, self._log_folder = process, folder, log_folder
        self._spacing = spacing
        self._state: Literal["idle", "ready", "running", "waiting", "over"] = "idle"
        self._rung = 0
        self._request = ""
        self._attempt = 1
        self._command: BoundedCommand | None = None
        self._acted = 0.0
        self._arrival = 0.0
        self._looked = 0.0
        self.failed = False

    @property
    def begun(self) -> bool:
        return self._state != "idle"

    @property
    def active(self) -> bool:
        return self._state not in ("idle", "over")

    def begin(self, now: float, why: str) -> None:
        """Start with the first rung. `HOLD` comes first: the run's own script may resubmit it as
        soon as it ends."""
        if self.begun or not self._rungs:
            return
        self._state = "ready"
        self._arrival = now
        self._hold(now, why)

    def resume(self, deeds: Sequence[Deed], now: float) -> None:
        """Go on where the deeds of this segment in the log end. If `HOLD` was written and is gone,
        somebody has dealt with it, and what runs now is not the run that was to be stopped."""
        ours = [d for d in deeds if d.intent.act in ACTS]
        if self._hold_removed(deeds):
            self._state = "over"
            return
        if not ours:
            if any(d.intent.act == "hold" for d in deeds) and self._rungs:
                self._state = "ready"
                self._arrival = now
            return
        self._rung = len(ours) - 1
        self._arrival = now
        deed = ours[-1]
        if self._rung >= len(self._rungs) or act_of(self._rungs[self._rung]) != deed.intent.act:
            self._state = "over"  # the settings have changed since: what was done stands
            return
        self._request, self._attempt = deed.intent.id, deed.intent.attempt
        last = deed.last
        if last is None:
            self._state = "running"
            self._look_for_effect(now)
        elif last.outcome == "accepted":
            self._state = "over"
        elif last.outcome in ("done", "found-done"):
            self._state, self._acted = "waiting", last.at
        elif self._rung + 1 < len(self._rungs):
            self._next(now)
        else:
            self._state, self.failed = "over", True

    def arrived(self, written: float) -> None:
        """A new snapshot has come, last changed at `written`."""
        self._arrival = max(self._arrival, written)

    def ended(self, why: str) -> None:
        """The run has ended."""
        if self._state == "waiting":
            self._outcome("accepted", why)
        elif self._state == "running" and self._command is not None:
            self._command.let_go()
            self._outcome("accepted", f"{why} while the command ran")
        elif self._state == "ready" and self._rung == 0:
            self._journal.note(f"nothing was done to stop the run: {why}")
        if self.active:
            self._state = "over"

    def advance(self, now: float) -> None:
        """Do what is due."""
        if not self.active:
            return
        if self._process is not None and not self._process.alive():
            self.ended("the run's process ended")
        elif self._state == "ready":
            self._act(now)
        elif self._state == "running":
            self._poll_command(now)
        elif self._state == "waiting":
            self._wait(now)

    def let_go(self) -> None:
        """Guard ends while the ladder is at work: a command goes on by itself."""
        if self._command is not None:
            self._command.let_go()

    # --- acting -------------------------------------------------------------------------

    def _act(self, now: float) -> None:
        rung = self._rungs[self._rung]
        if not self._request:
            self._request = f"stop-{secrets.token_hex(4)}"
        self._journal.intend(act_of(rung), self._request, self._target(rung), self._attempt)
        self._acted = now
        if rung.do == "file":
            self._act_on_file(rung, now)
        elif rung.do == "signal":
            self._act_by_signal(rung, now)
        else:
            self._state = "running"
            self._command = BoundedCommand(
                rung.command,
                rung.wait_seconds,
                self._folder,
                extra={REQUEST_VARIABLE: self._request},
            )

    def _act_on_file(self, rung: StopStep, now: float) -> None:
        request = StopFile(path=self._file(rung), action=rung.action, text=rung.text)
        reply = self._ask_file(request)
        if isinstance(reply, Done):
            verb = {"create": "created", "write": "written", "remove": "removed"}[rung.action]
            self._outcome("done", verb)
            self._state = "waiting"
        else:
            self._fail(reply, now)

    def _act_by_signal(self, rung: StopStep, now: float) -> None:
        if self._process is None:
            self._fail("no process is known: give its number as pid", now)
            return
        number = signal.Signals[f"SIG{rung.signal.removeprefix('SIG')}"]
        try:
            self._process.send(number)
        except NotSignalled as error:
            self._fail(str(error), now)
            return
        self._outcome("done", f"sent to {self._process.identity}")
        self._state = "waiting"

    def _poll_command(self, now: float) -> None:
        ended = self._command.poll() if self._command is not None else None
        if ended is None:
            return
        self._command = None
        if ended.good:
            self._outcome("done", ended.text)
            self._state, self._acted = "waiting", now
        else:
            self._fail(ended.text, now)

    # --- waiting ------------------------------------------------------------------------

    def _wait(self, now: float) -> None:
        rung = self._rungs[self._rung]
        if rung.do == "file" and now - self._looked >= LOOK_SECONDS:
            self._looked = now
            if self._consumed(rung):
                self._outcome("accepted", "the run took the stop file away")
                self._state = "over"
                return
        patience = rung.wait_seconds
        if self._process is not None:
            if now - self._acted >= patience:
                self._outcome("no-reaction", f"it still runs after {duration_text(patience)}")
                self._next(now)
            return
        quiet = max(patience, 3.0 * self._spacing())
        if self._arrival > self._acted + patience:
            self._outcome("no-reaction", f"snapshots still come after {duration_text(patience)}")
            self._next(now)
        elif now - max(self._arrival, self._acted) >= quiet:
            self._outcome("accepted", f"no snapshot for {duration_text(quiet)}")
            self._state = "over"

    def _consumed(self, rung: StopStep) -> bool:
        if rung.action == "remove":
            return False
        reply = self._ask_file(StopFile(path=self._file(rung), action="exists"))
        return isinstance(reply, Done) and not reply.exists

    def _next(self, now: float) -> None:
        self._rung, self._request, self._attempt = self._rung + 1, "", 1
        self._looked = 0.0
        self._acted = now
        self._state = "ready"
        if self._rung >= len(self._rungs):
            self._state, self.failed = "over", True
            self._journal.trouble("the run did not react to any of the ways to stop it")

    def _fail(self, why: str, now: float) -> None:
        self._outcome("failed", why)
        self._next(now)

    # --- after a restart ----------------------------------------------------------------

    def _look_for_effect(self, now: float) -> None:
        """An intent without outcome: was it done?"""
        rung = self._rungs[self._rung]
        if self._process is not None and not self._process.alive():
            # Whatever was cut off, its purpose is served.
            self._outcome("accepted", "the run's process had ended when guard came back")
            self._state = "over"
            return
        if rung.do == "file":
            reply = self._ask_file(StopFile(path=self._file(rung), action="exists"))
            if isinstance(reply, Done) and reply.exists == (rung.action != "remove"):
                self._outcome("found-done", "found after a restart of guard")
                self._state, self._acted = "waiting", now
                return
        if self._attempt >= ATTEMPTS:
            self._fail(f"cut off {ATTEMPTS} times, and its effect is not to be seen", now)
            return
        self._attempt += 1
        self._state = "ready"

    # --- the rest -----------------------------------------------------------------------

    def _hold(self, now: float, why: str) -> None:
        path = self._log_folder / HOLD_NAME
        request = f"hold-{secrets.token_hex(4)}"
        self._journal.intend("hold", request, str(path))
        outcome, detail = write_hold(path, hold_text(now, why))
        self._journal.outcome("hold", request, outcome, detail)
        self.failed |= outcome == "failed"

    def _outcome(self, outcome: Result, detail: str) -> None:
        self._journal.outcome(act_of(self._rungs[self._rung]), self._request, outcome, detail)

    def _ask_file(self, request: StopFile) -> Done | str:
        try:
            reply = self._ask(request, FILE_SECONDS)
        except ChildError as error:
            return str(error)
        if isinstance(reply, Failed):
            return reply.what
        return reply if isinstance(reply, Done) else "not understood by the reading process"

    def _hold_removed(self, deeds: Sequence[Deed]) -> bool:
        written = any(
            d.intent.act == "hold" and d.last is not None and d.last.outcome != "failed"
            for d in deeds
        )
        return written and not (self._log_folder / HOLD_NAME).exists()

    def _file(self, rung: StopStep) -> str:
        return str(self._folder / rung.path)

    def _target(self, rung: StopStep) -> str:
        if rung.do == "file":
            return self._file(rung)
        if rung.do == "command":
            return join(rung.command)
        who = self._process.identity if self._process is not None else None
        return f"{rung.signal} to {who or 'no known process'}"


def describe(settings: Settings, folder: Path, log: Path) -> str:
    """What a stop would do, for `guard --show-stop`; nothing is tried."""
    if not settings.stop:
        return "nothing would be stopped: there is no [[stop]] section"
    lines = [
        "at an alarm for numerical growth, or at an overflow, once per segment:",
        f"  first: clean checkpoints are kept in {log.parent / settings.pins.folder}"
        if settings.pins.enabled
        else "  first: no checkpoint is kept, since [pins] enabled = false",
        f"  then: {log.parent / HOLD_NAME} is written, for the job's script to look for",
    ]
    pid = settings.run.pid
    reaction = f"process {pid} has ended" if pid else "no snapshot comes any more"
    for number, rung in enumerate(settings.stop, 1):
        lines += [
            f"  {number}. {_deed(rung, folder, pid)}",
            f"     then up to {duration_text(rung.wait_seconds)} of waiting until {reaction}",
        ]
    return "\n".join(clean(line) for line in lines)


def _deed(rung: StopStep, folder: Path, pid: int) -> str:
    if rung.do == "file":
        path = folder / rung.path
        if rung.action == "write":
            return f"{rung.text!r} is written to {path}"
        return f"{path} is {rung.action}d"
    if rung.do == "command":
        return f"{join(rung.command)} is run in {folder}"
    return (
        f"the signal {rung.signal} is sent to process {pid}"
        if pid
        else (f"the signal {rung.signal} cannot be sent: no process is known (pid)")
    )
