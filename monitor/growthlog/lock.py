"""One guard at a time for one log: a small file beside it says who.

Kernel locks (fcntl, flock) are not used: some cluster file systems refuse them, some grant them on
each node separately, and on others a dead node's lock stays. What every mount does atomically is to
make a name (link, or exclusive creation) and to rename. So whoever makes the name first has the
lock, and a lock is taken from somebody only by renaming it away first: of several that try, one
gets it, and who got the wrong one puts it back.

The lock counts as held by a live guard
* on the same host: while a process with its number and start time exists;
* on another host: until it was not touched for 120 s by the clock of the file system (guard
  touches it every 30 s).
A guard finds out that its lock was taken when it next looks (`held`), which it does before each
record.
"""

from __future__ import annotations

import contextlib
import errno
import glob
import os
import secrets
import socket
import time
from pathlib import Path

import msgspec
import psutil

from probes.errors import SettingsError, StepwardenError

TOUCH_SECONDS = 30.0
STALE_SECONDS = 120.0

# While a lock is being taken its name is missing for a moment.
_PATIENCE = 0.5
_ATTEMPTS = 5
# Start times come from the kernel's boot time, which moves a little when the clock is set.
_SAME_START = 2.0
_TOKEN = 16  # hexadecimal digits
_NO_LINKS = (errno.EPERM, errno.ENOTSUP, errno.EOPNOTSUPP, errno.ENOSYS, errno.EMLINK, errno.EXDEV)


class LockLost(StepwardenError):
    """Another guard has taken the log over."""

    @classmethod
    def of(cls, log: Path) -> LockLost:
        return cls(
            "another guard has taken this log over", str(log), "this one ends without acting"
        )


class Owner(msgspec.Struct, frozen=True):
    """Contents of a lock file. start: of the process, seconds since the epoch; token: random."""

    host: str
    pid: int
    start: float
    token: str


class Lock:
    """A lock that this process holds, until `release` or until somebody takes it over."""

    def __init__(self, path: Path, owner: Owner) -> None:
        self.path = path
        self._owner = owner
        self._touched = time.monotonic()

    @classmethod
    def acquire(cls, log_path: Path, take_over: bool = False) -> Lock:
        """Lock the log at `log_path` (its folder is made if it is missing).

        take_over: take the lock at once from whoever holds it. Raises SettingsError if a live guard
        holds it, or if no lock file can be written.
        """
        try:
            return _acquire(log_path, take_over)
        except OSError as error:
            raise SettingsError(
                f"the growth log cannot be locked ({error.strerror or error})",
                str(log_path),
                "check that its folder can be written, or choose another log",
            ) from error

    def held(self) -> bool:
        """Whether this process still holds the lock. A lock file that was merely removed is made
        again."""
        deadline = time.monotonic() + _PATIENCE
        while True:
            try:
                return _read(self.path) == self._owner
            except FileNotFoundError:
                if time.monotonic() < deadline:
                    time.sleep(0.02)
                    continue
            except OSError:
                return True  # The mount is in trouble; that is no sign of another guard.
            try:
                draft = _draft(self.path, self._owner)
                try:
                    _claim(draft, self.path, self._owner)
                finally:
                    _remove(draft)
            except OSError:
                return True

    def touch(self) -> None:
        """Tell other hosts that this guard lives. Call it often; it acts every 30 s."""
        now = time.monotonic()
        if now - self._touched < TOUCH_SECONDS:
            return
        with contextlib.suppress(OSError):
            os.utime(self.path)
            self._touched = now

    def release(self) -> None:
        """Give the lock up, if it is still this one's. May be called twice."""
        with contextlib.suppress(OSError):
            if _read(self.path) == self._owner:
                _take_away(self.path, self._owner)


def _acquire(log_path: Path, take_over: bool) -> Lock:
    log_path = log_path.resolve()
    log_path.parent.mkdir(parents=True, exist_ok=True)
    path = log_path.with_name(log_path.name + ".lock")
    process = psutil.Process()
    owner = Owner(
        socket.gethostname(), process.pid, process.create_time(), secrets.token_hex(_TOKEN // 2)
    )
    draft = _draft(path, owner)
    try:
        for _ in range(_ATTEMPTS):
            os.utime(draft)
            if _claim(draft, path, owner):
                _sweep(path, draft)
                return Lock(path, owner)
            try:
                holder, touched = _read(path), path.stat().st_mtime
            except FileNotFoundError:
                continue
            age = draft.stat().st_mtime - touched
            if not take_over and _lives(holder, age):
                raise SettingsError(
                    f"another guard writes this log: {_describe(holder, age)}",
                    str(log_path),
                    "end that one, choose another log, or use --take-over",
                )
            _take_away(path, holder)
    finally:
        _remove(draft)
    raise SettingsError(
        "several guards are trying to take this log at once", str(log_path), "start only one"
    )


def _lives(holder: Owner | None, age: float) -> bool:
    if holder is None or holder.host != socket.gethostname():
        return age < STALE_SECONDS
    try:
        process = psutil.Process(holder.pid)
        if abs(process.create_time() - holder.start) >= _SAME_START:
            return False
        # A zombie is dead; its parent has just not asked yet.
        return bool(process.status() != psutil.STATUS_ZOMBIE)
    except psutil.NoSuchProcess:
        return False
    except psutil.AccessDenied:
        return True


def _describe(holder: Owner | None, age: float) -> str:
    who = f"process {holder.pid} on {holder.host!r}" if holder is not None else "owner unreadable"
    return f"{who}, lock touched {max(0.0, age):.0f} s ago"


def _draft(path: Path, owner: Owner) -> Path:
    """The lock file under a name of its own, ready to be linked to the real one."""
    draft = path.with_name(f"{path.name}.{owner.token}")
    file = os.open(draft, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
    try:
        os.write(file, msgspec.json.encode(owner) + b"\n")
    finally:
        os.close(file)
    return draft


def _claim(draft: Path, path: Path, owner: Owner) -> bool:
    """Give the draft the lock's name; False where the name is taken."""
    try:
        os.link(draft, path)
    except FileExistsError:
        # A network mount may say so of a link that it has just made for a repeated request.
        return _read_or_none(path) == owner
    except OSError as error:
        if error.errno not in _NO_LINKS:
            raise
        return _create(path, owner)
    return True


def _create(path: Path, owner: Owner) -> bool:
    """The same without hard links: for a moment the lock has a name and no contents, which others
    read as a lock whose owner is unknown and young."""
    try:
        file = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o644)
    except FileExistsError:
        return False
    try:
        os.write(file, msgspec.json.encode(owner) + b"\n")
    finally:
        os.close(file)
    return True


def _read(path: Path) -> Owner | None:
    """Who holds the lock; None where the file makes no sense."""
    try:
        return msgspec.json.decode(path.read_bytes(), type=Owner)
    except (msgspec.MsgspecError, UnicodeDecodeError):
        return None


def _read_or_none(path: Path) -> Owner | None:
    try:
        return _read(path)
    except FileNotFoundError:
        return None


def _take_away(path: Path, judged: Owner | None) -> None:
    """Remove the lock of the owner that was judged dead, and no other."""
    aside = path.with_name(f"{path.name}.{secrets.token_hex(_TOKEN // 2)}")
    try:
        os.rename(path, aside)
    except FileNotFoundError:
        return
    if _read(aside) != judged:
        # Somebody else was quicker, and this is the new lock: give the name back. If the name has
        # been taken in between, its new holder is the one that counts.
        try:
            os.link(aside, path)
        except FileExistsError:
            pass
        except OSError:
            if not path.exists():
                os.rename(aside, path)
    _remove(aside)


def _sweep(path: Path, draft: Path) -> None:
    """Remove what guards left that were killed while they took or gave up the lock."""
    now = draft.stat().st_mtime
    for other in path.parent.glob(glob.escape(path.name) + "." + "[0-9a-f]" * _TOKEN):
        with contextlib.suppress(OSError):
            if now - other.stat().st_mtime > STALE_SECONDS:
                other.unlink()


def _remove(path: Path) -> None:
    with contextlib.suppress(OSError):
        os.unlink(path)
