"""One guard for one log."""

from __future__ import annotations

import errno
import json
import os
import socket
import subprocess
import sys
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import psutil
import pytest

from monitor.growthlog import lock as locking
from monitor.growthlog.lock import Lock
from probes.errors import SettingsError


def lock_file(log: Path) -> Path:
    return log.with_name("growth.jsonl.lock")


def leave_lock(log: Path, age: float = 0.0, **owner: Any) -> None:
    """A lock file as another guard would have left it, last touched `age` seconds ago."""
    given = {"host": "elsewhere", "pid": 17, "start": 1000.0, "token": "aa"} | owner
    lock_file(log).write_text(json.dumps(given))
    touched = lock_file(log).stat().st_mtime - age
    os.utime(lock_file(log), (touched, touched))


def this_host(**changes: Any) -> dict[str, Any]:
    process = psutil.Process()
    host = socket.gethostname()
    return {"host": host, "pid": process.pid, "start": process.create_time()} | changes


def ended_process() -> tuple[int, float]:
    """Number and start time of a process that has ended and was waited for."""
    process = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    start = psutil.Process(process.pid).create_time()
    process.communicate(timeout=30)
    return process.pid, start


def leftovers(log: Path) -> list[str]:
    return sorted(p.name for p in log.parent.iterdir())


def test_the_lock_names_its_owner_and_goes_with_it(log: Path) -> None:
    """While held, the file beside the log says host, process and start time; released, nothing is
    left."""
    lock = Lock.acquire(log)
    assert lock.held()
    named = json.loads(lock_file(log).read_bytes())
    assert {k: named[k] for k in ("host", "pid", "start")} == this_host()
    assert leftovers(log) == ["growth.jsonl.lock"]
    lock.release()
    lock.release()
    assert leftovers(log) == []


def test_a_second_guard_is_refused(log: Path) -> None:
    """Another process that wants the same log is told who has it, and ends; the first goes on."""
    lock = Lock.acquire(log)
    code = (
        "import sys; from pathlib import Path; from monitor.growthlog.lock import Lock\n"
        "from probes.errors import SettingsError\n"
        "try: Lock.acquire(Path(sys.argv[1]))\n"
        "except SettingsError as error: print(error)"
    )
    done = subprocess.run(
        [sys.executable, "-P", "-c", code, str(log)],
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    assert f"another guard writes this log: process {os.getpid()} on" in done.stdout
    assert "--take-over" in done.stdout
    assert lock.held()
    lock.release()


def test_other_names_of_a_log_share_its_lock(log: Path) -> None:
    """A link to the log is the same log."""
    log.touch()
    alias = log.with_name("alias.jsonl")
    alias.symlink_to(log)
    lock = Lock.acquire(log)
    with pytest.raises(SettingsError, match="another guard writes this log"):
        Lock.acquire(alias)
    lock.release()


def test_a_take_over_ends_the_first(log: Path) -> None:
    """On request a live guard's lock is taken at once; the first sees it and leaves it alone."""
    first = Lock.acquire(log)
    second = Lock.acquire(log, take_over=True)
    assert not first.held()
    first.release()
    assert second.held()
    second.release()
    assert leftovers(log) == []


def test_a_dead_guards_lock_is_taken(log: Path) -> None:
    """On the same host a lock counts only while its process lives, however recently touched."""
    pid, start = ended_process()
    leave_lock(log, **this_host(pid=pid, start=start))
    lock = Lock.acquire(log)
    assert lock.held()
    lock.release()


def test_a_zombies_lock_is_taken(log: Path) -> None:
    """A killed guard whose parent has not asked for its status is dead all the same."""
    process = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    known = psutil.Process(process.pid)
    leave_lock(log, **this_host(pid=process.pid, start=known.create_time()))
    process.kill()
    os.waitid(os.P_PID, process.pid, os.WEXITED | os.WNOWAIT)
    assert known.status() == psutil.STATUS_ZOMBIE
    Lock.acquire(log).release()
    process.communicate(timeout=30)


def test_a_number_used_again_is_not_the_guard(log: Path) -> None:
    """The process number is alive, but the process started at another time: it is another one."""
    leave_lock(log, **this_host(start=psutil.Process().create_time() - 3600))
    lock = Lock.acquire(log)
    assert lock.held()
    lock.release()


@pytest.mark.parametrize(("age", "free"), [(0, False), (110, False), (130, True), (-500, False)])
def test_a_lock_of_another_host(log: Path, age: float, free: bool) -> None:
    """From afar a process cannot be seen: its lock is taken after 120 s without a touch."""
    leave_lock(log, age)
    if free:
        Lock.acquire(log).release()
    else:
        with pytest.raises(SettingsError, match="process 17 on 'elsewhere', lock touched"):
            Lock.acquire(log)
        Lock.acquire(log, take_over=True).release()
    assert leftovers(log) == []


@pytest.mark.parametrize("content", [b"", b"{", b"\xff\xfe", b'{"host": 3}', b"[" * 100_000])
def test_a_lock_that_makes_no_sense(log: Path, content: bytes) -> None:
    """One that was just made may be written at this moment; an old one is rubbish."""
    lock_file(log).write_bytes(content)
    with pytest.raises(SettingsError, match="owner unreadable"):
        Lock.acquire(log)
    touched = lock_file(log).stat().st_mtime - 130
    os.utime(lock_file(log), (touched, touched))
    Lock.acquire(log).release()


def test_a_touch_shows_on_the_file(log: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Every 30 s, and not more often, a call of `touch` reaches the file."""
    now = 1000.0
    monkeypatch.setattr(time, "monotonic", lambda: now)
    lock = Lock.acquire(log)
    os.utime(lock_file(log), (50.0, 50.0))
    now += 29.0
    lock.touch()
    assert lock_file(log).stat().st_mtime == 50.0
    now += 2.0
    lock.touch()
    assert lock_file(log).stat().st_mtime > 50.0
    lock.release()


def test_a_removed_lock_file_is_made_again(log: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Cleaning up by hand must not end a guard: the lock is still its own."""
    monkeypatch.setattr(locking, "_PATIENCE", 0.0)
    lock = Lock.acquire(log)
    lock_file(log).unlink()
    assert lock.held()
    with pytest.raises(SettingsError, match="another guard writes this log"):
        Lock.acquire(log)
    lock.release()
    assert leftovers(log) == []


def test_a_mount_in_trouble_does_not_end_a_guard(
    log: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """If the lock cannot be looked at, nobody is known to have taken it."""
    lock = Lock.acquire(log)

    def trouble(path: Path) -> bytes:
        raise OSError(errno.ESTALE, "Stale file handle")

    monkeypatch.setattr(Path, "read_bytes", trouble)
    assert lock.held()
    monkeypatch.undo()
    lock.release()


def test_a_folder_is_made_and_one_that_cannot_be_is_told(tmp_path: Path) -> None:
    """The log's folder comes into being with its lock; a file in its place is an error."""
    Lock.acquire(tmp_path / "new" / "growth.jsonl").release()
    (tmp_path / "file").touch()
    with pytest.raises(SettingsError, match="cannot be locked"):
        Lock.acquire(tmp_path / "file" / "growth.jsonl")


def test_what_killed_guards_left_is_swept(log: Path) -> None:
    """Drafts of guards that were killed while they took the lock go after a while; nothing else
    that begins alike does."""
    old = log.with_name("growth.jsonl.lock.0123456789abcdef")
    young = log.with_name("growth.jsonl.lock.0123456789abcde0")
    foreign = log.with_name("growth.jsonl.lock.keep")
    for path in (old, young, foreign):
        path.touch()
    for path in (old, foreign):
        os.utime(path, (1000.0, 1000.0))
    Lock.acquire(log).release()
    assert leftovers(log) == sorted([young.name, foreign.name])


def test_a_link_that_was_made_and_denied(log: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A network mount repeats a request and answers that the name exists: it is our own."""
    link = os.link

    def repeated(source: Path, target: Path) -> None:
        link(source, target)
        raise FileExistsError(errno.EEXIST, "File exists")

    monkeypatch.setattr(os, "link", repeated)
    lock = Lock.acquire(log)
    assert lock.held()
    lock.release()
    assert leftovers(log) == []


def test_without_hard_links(log: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Some file systems have none; exclusive creation does there."""

    def no_links(*args: object) -> None:
        raise OSError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(os, "link", no_links)
    lock = Lock.acquire(log)
    assert lock.held()
    with pytest.raises(SettingsError, match="another guard writes this log"):
        Lock.acquire(log)
    second = Lock.acquire(log, take_over=True)
    assert (lock.held(), second.held()) == (False, True)
    second.release()
    assert leftovers(log) == []


def test_of_many_that_find_a_dead_lock_one_gets_it(log: Path) -> None:
    """Eight at once, a hundred times: exactly one has the lock, the others are refused, and
    nothing is left lying about."""
    pid, start = ended_process()
    barrier = threading.Barrier(8)

    def attempt(_: int) -> Lock | None:
        barrier.wait(timeout=60)
        try:
            return Lock.acquire(log)
        except SettingsError:
            return None

    with ThreadPoolExecutor(8) as pool:
        for _ in range(100):
            leave_lock(log, **this_host(pid=pid, start=start))
            got = [lock for lock in pool.map(attempt, range(8)) if lock is not None]
            assert [lock.held() for lock in got].count(True) == 1
            for lock in got:
                lock.release()
            assert leftovers(log) == []


def test_who_takes_the_wrong_lock_puts_it_back(log: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Between judging a lock dead and taking it away, another guard was quicker: its new lock is
    given back, and the slow one is refused."""
    pid, start = ended_process()
    leave_lock(log, **this_host(pid=pid, start=start))
    judge = locking._lives
    quicker: list[Lock] = []

    def slow(holder: locking.Owner | None, age: float) -> bool:
        verdict = judge(holder, age)
        if not quicker:
            with monkeypatch.context() as patch:
                patch.setattr(locking, "_lives", judge)
                quicker.append(Lock.acquire(log))
        return verdict

    monkeypatch.setattr(locking, "_lives", slow)
    with pytest.raises(SettingsError, match="another guard writes this log"):
        Lock.acquire(log)
    assert quicker[0].held()
    quicker[0].release()
    assert leftovers(log) == []
