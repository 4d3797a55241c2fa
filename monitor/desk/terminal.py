"""What the terminal can do, and how to leave it clean. Needs no screen library."""

from __future__ import annotations

import codecs
import contextlib
import locale
import os
import select
import signal
import sys
import termios
import threading
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

# Signals on which the desk leaves as if asked to, with status 128 + n.
LEAVE_ON = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP, signal.SIGQUIT)
# Others whose handlers a screen changes.
_TOUCHED = (*LEAVE_ON, signal.SIGTSTP, signal.SIGCONT, signal.SIGWINCH)

# How long leaving may take: a line that is gone or held never takes the last bytes.
PATIENCE_SECONDS = 2.0

# Leave the alternate screen, show the cursor, wrap lines, end pasting and focus reports.
_RESET = b"\x1b[?1049l\x1b[?25h\x1b[?7h\x1b[?2004l\x1b[?1004l\x1b[0m"


def can_show_a_screen(environment: Mapping[str, str]) -> bool:
    """Input, output and error output are terminals, of a kind that can place its cursor."""
    if environment.get("TERM", "") in ("", "dumb", "unknown"):
        return False
    return all(stream is not None and stream.isatty() for stream in _streams())


def _streams() -> tuple[Any, ...]:
    return sys.__stdin__, sys.__stdout__, sys.__stderr__


def given_environment() -> Mapping[str, str]:
    """The environment that the process was started with.

    In the C locale Python sets LC_CTYPE to UTF-8 for itself (PEP 538), which says nothing of the
    terminal; the kernel still has what was there before.
    """
    try:
        block = Path("/proc/self/environ").read_bytes()
    except OSError:
        return os.environ
    pairs = (os.fsdecode(entry).partition("=") for entry in block.split(b"\0") if entry)
    return {name: value for name, _, value in pairs}


def speaks_utf8(environment: Mapping[str, str]) -> bool:
    """The locale says that the terminal shows UTF-8."""
    names = ("LC_ALL", "LC_CTYPE", "LANG")
    value = next((environment[name] for name in names if environment.get(name)), "C")
    encoding = value.partition(".")[2].partition("@")[0]
    if not encoding and value not in ("C", "POSIX"):
        # "de_DE": the system knows which encoding that means.
        encoding = locale.getpreferredencoding(False)
    try:
        return codecs.lookup(encoding or "ascii").name == "utf-8"
    except LookupError:
        return False


def prepare_environment() -> None:
    """Before the screen library is imported."""
    # An exported size would freeze the screen at it.
    for name in ("COLUMNS", "LINES"):
        os.environ.pop(name, None)
    # Drawing needs no threads, and starting them costs a fifth of the start.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    # A special keyboard protocol would stay switched on if the desk were killed.
    os.environ.setdefault("TEXTUAL_DISABLE_KITTY_KEY", "1")


def hung_up() -> bool:
    """Nobody is at the other end of the terminal any more."""
    poll = select.poll()
    poll.register(0, 0)
    return any(event & (select.POLLHUP | select.POLLERR) for _, event in poll.poll(0))


@contextlib.contextmanager
def kept_as_it_was() -> Iterator[None]:
    """Terminal modes and signal handlers are put back on leaving, whatever happened."""
    handlers = {number: signal.getsignal(number) for number in _TOUCHED}
    modes = _modes()
    try:
        yield
    finally:
        _restore(modes)
        for number, handler in handlers.items():
            signal.signal(number, handler if handler is not None else signal.SIG_DFL)


def leave_in_time(status: int) -> threading.Timer:
    """End the process by force unless it ends (or this is cancelled) within `PATIENCE_SECONDS`."""
    timer = threading.Timer(PATIENCE_SECONDS, _force, (status, _modes_at_start))
    timer.daemon = True
    timer.start()
    return timer


def _modes() -> list[Any] | None:
    global _modes_at_start
    with contextlib.suppress(termios.error, OSError):
        _modes_at_start = termios.tcgetattr(0)
        return _modes_at_start
    return None


_modes_at_start: list[Any] | None = None


def _restore(modes: list[Any] | None) -> None:
    if modes is not None:
        with contextlib.suppress(termios.error, OSError):
            termios.tcsetattr(0, termios.TCSANOW, modes)


def _force(status: int, modes: list[Any] | None) -> None:
    with contextlib.suppress(OSError):
        os.set_blocking(2, False)
        os.write(2, _RESET)
    _restore(modes)
    os._exit(status)
