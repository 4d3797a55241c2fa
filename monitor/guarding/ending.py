"""When does a run count as ended? By what the settings name, never by a guess."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from monitor.actions.bounded import BoundedCommand
from monitor.actions.runprocess import RunProcess
from monitor.config import RunSection
from monitor.guarding.limits import seconds_for
from monitor.wording import duration_text
from probes.errors import ChildError
from probes.wire import Done, Reply, Request, StopFile

# Seconds between two looks at a file or runs of a command, and the command's time limit.
FILE_EVERY = 2.0
COMMAND_EVERY = 5.0
COMMAND_LIMIT = 20.0


class Ending:
    """Asks the sources that ``[run]`` names, none more often than it should be."""

    def __init__(
        self,
        run: RunSection,
        folder: Path,
        process: RunProcess | None,
        ask: Callable[[Request, float], Reply],
    ) -> None:
        self._run, self._folder, self._process, self._ask = run, folder, process, ask
        self._file_due = self._command_due = 0.0
        self._command: BoundedCommand | None = None

    @property
    def declared(self) -> bool:
        """Whether the settings name any end at all."""
        run = self._run
        return bool(
            run.pid or run.last_step or run.end_file or run.end_command or run.idle_seconds > 0.0
        )

    def reached(self, now: float, step: int | None, quiet_s: float) -> str:
        """Why the run has ended, "" while it has not. step: of the last snapshot; quiet_s: since
        it came."""
        run = self._run
        if self._process is not None and not self._process.alive():
            if self._process.identity is None:
                return f"there is no process {run.pid} on this host: ended, or elsewhere"
            return f"process {run.pid} has ended"
        if run.last_step and step is not None and step >= run.last_step:
            return f"step {step} is the last one"
        if run.end_file and now >= self._file_due:
            self._file_due = now + FILE_EVERY
            if self._file_exists():
                return f"{run.end_file} is there"
        if run.end_command and self._command_says_so(now):
            return f"{run.end_command[0]} says so"
        if run.idle_seconds > 0.0 and quiet_s >= run.idle_seconds:
            return f"no snapshot for {duration_text(quiet_s)}"
        return ""

    def close(self) -> None:
        if self._command is not None:
            self._command.end("guard ends")

    def _file_exists(self) -> bool:
        request = StopFile(path=str(self._folder / self._run.end_file), action="exists")
        try:
            reply = self._ask(request, seconds_for(0))
        except ChildError:
            return False
        return isinstance(reply, Done) and reply.exists

    def _command_says_so(self, now: float) -> bool:
        if self._command is None:
            if now < self._command_due:
                return False
            self._command = BoundedCommand(self._run.end_command, COMMAND_LIMIT, self._folder)
        ended = self._command.poll()
        if ended is None:
            return False
        self._command, self._command_due = None, now + COMMAND_EVERY
        return ended.good
