"""Guard: arrivals -> measure -> record -> decide -> act, until the run ends.

This file opens and closes: the lock, the log, what an earlier guard left, the exit status. The loop
in between is `monitor.guarding.session`.
"""

from __future__ import annotations

import os
import platform
import socket
import time
from collections.abc import Callable
from contextlib import ExitStack, closing
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import msgspec

from monitor.actions.runprocess import RunProcess
from monitor.childkeeper import ChildKeeper
from monitor.config import Settings, watch_spec
from monitor.exits import Exit
from monitor.growthlog.lock import Lock, LockLost
from monitor.growthlog.read import each_record
from monitor.growthlog.records import Opened
from monitor.growthlog.window import Window
from monitor.growthlog.write import LogWriter
from monitor.guarding.heartbeat import Heartbeat
from monitor.guarding.journal import Journal
from monitor.guarding.judging import Judge
from monitor.guarding.resume import Resumed, resume
from monitor.guarding.session import Asking, Mode, Session
from monitor.guarding.signals import Signals
from monitor.guarding.telling import Teller

_PACKAGES = ("stepwarden", "numpy", "scipy", "h5py", "msgspec")


class Guard:
    """Guards one run. Made once, run once.

    folder: where relative patterns start. actions: False only records. catch_up: take what is there
    and end. clock: wall-clock seconds since the epoch.
    """

    def __init__(
        self,
        settings: Settings,
        folder: Path,
        log_path: Path,
        *,
        actions: bool = True,
        catch_up: bool = False,
        take_over: bool = False,
        quiet: bool = False,
        clock: Callable[[], float] = time.time,
    ) -> None:
        self._settings, self._clock = settings, clock
        self._folder, self._log = Path(os.path.abspath(folder)), Path(os.path.abspath(log_path))
        self._take_over = take_over
        self._mode = Mode(settings.run.name or self._folder.name, actions, catch_up)
        self._teller = Teller(self._mode.run, quiet=quiet, bar=catch_up)

    def run(self) -> int:
        """Guard to the end; returns the exit status.

        Raises SettingsError where another guard holds the log or it cannot be written, ReadError
        where it cannot be read.
        """
        lock = Lock.acquire(self._log, self._take_over)
        try:
            return self._guard(lock)
        except LockLost as error:
            self._teller.news(str(error))
            return Exit.USAGE
        finally:
            lock.release()

    def _guard(self, lock: Lock) -> int:
        with ExitStack() as stack:
            signals = stack.enter_context(Signals())
            heart = stack.enter_context(Heartbeat(lock))
            resumed = resume(each_record(self._log)) if self._log.exists() else Resumed()
            window = Window(self._log.parent / "growth.window")
            if resumed.empty:
                window.clear()
            log = stack.enter_context(closing(LogWriter(self._log, lock)))
            journal = Journal(log, self._clock, self._teller.news)
            judge = Judge(self._settings, self._folder, journal, window, resumed)
            process = self._process(stack)
            self._open(journal, judge, resumed, process)
            watch = watch_spec(self._settings, self._folder)
            keeper = stack.enter_context(closing(ChildKeeper(watch, resumed.known)))
            session = Session(
                self._settings,
                self._folder,
                self._log,
                self._mode,
                Asking(keeper, signals, heart, lock),
                journal,
                judge,
                process,
                self._teller,
                self._clock,
                resumed,
            )
            return session.run()

    def _process(self, stack: ExitStack) -> RunProcess | None:
        if not self._settings.run.pid:
            return None
        return stack.enter_context(closing(RunProcess(self._settings.run.pid)))

    def _open(
        self, journal: Journal, judge: Judge, resumed: Resumed, process: RunProcess | None
    ) -> None:
        """The record that says who guards what, and whether it goes on without a gap."""
        note = judge.take_up(resumed)
        who = process.identity if process is not None else None
        journal.write(
            Opened,
            sync=True,
            run=self._mode.run,
            settings=msgspec.to_builtins(self._settings),
            versions=_versions(),
            host=socket.gethostname(),
            pid=os.getpid(),
            continues=resumed.last is not None and not note,
            note=note,
            process=(who.pid, who.start, who.owner) if who is not None else None,
        )
        if note:
            self._teller.news(f"{note}: growth is judged afresh from here on")


def _versions() -> dict[str, str]:
    """Of what has a say in the numbers."""
    out = {"python": platform.python_version()}
    for name in _PACKAGES:
        try:
            out[name] = version(name)
        except PackageNotFoundError:
            continue  # run from a source tree
    return out
