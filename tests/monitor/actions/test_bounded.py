"""Commands that must not block guard."""

from __future__ import annotations

import sys
import time
from pathlib import Path

from monitor.actions.bounded import KEPT, BoundedCommand


def python(code: str, folder: Path, limit: float = 20.0, **more: object) -> BoundedCommand:
    return BoundedCommand([sys.executable, "-c", code], limit, folder, **more)  # type: ignore[arg-type]


def test_status_and_last_words(tmp_path: Path) -> None:
    """The exit status, and both streams as one printable line."""
    code = "import sys; print('first'); print('\\x1b[31msecond', file=sys.stderr); sys.exit(3)"
    ended = python(code, tmp_path).wait(20.0)
    assert ended is not None
    assert (ended.status, ended.good) == (3, False)
    assert "first" in ended.text
    assert "\\x1b[31msecond" in ended.text


def test_what_is_given_and_then_the_end(tmp_path: Path) -> None:
    """Standard input holds the bytes and ends; the environment has the extra words."""
    code = "import os, sys; print(len(sys.stdin.read()), os.environ['WORD'])"
    ended = python(code, tmp_path, given=b"x" * 200_000, extra={"WORD": "yes"}).wait(20.0)
    assert ended is not None
    assert ended.good
    assert ended.text.endswith("200000 yes")


def test_without_input_it_reads_nothing(tmp_path: Path) -> None:
    """A command that asks a question gets an end of file, not the terminal."""
    ended = python("import sys; print(repr(sys.stdin.read()))", tmp_path).wait(20.0)
    assert ended is not None
    assert ended.text.endswith("''")


def test_time_limit_ends_it_with_its_children(tmp_path: Path) -> None:
    """After the limit the whole group is gone, also a child that would go on."""
    code = (
        "import subprocess, sys, time\n"
        "p = subprocess.Popen([sys.executable, '-c', 'import time; time.sleep(60)'])\n"
        "open('pid', 'w').write(str(p.pid)); time.sleep(60)"
    )
    command = python(code, tmp_path, limit=1.0)
    ended = command.wait(20.0)
    assert ended is not None
    assert ended.status is None
    assert "still running" in ended.text
    pid = int((tmp_path / "pid").read_text())
    deadline = time.monotonic() + 10.0
    while _runs(pid) and time.monotonic() < deadline:
        time.sleep(0.02)
    assert not _runs(pid)


def _runs(pid: int) -> bool:
    try:
        return "Z" not in Path(f"/proc/{pid}/stat").read_text().split()[2]
    except OSError:
        return False


def test_polling_returns_at_once(tmp_path: Path) -> None:
    """Neither the start nor a look waits for the command."""
    before = time.monotonic()
    command = python("import time; time.sleep(30)", tmp_path)
    assert command.poll() is None
    assert time.monotonic() - before < 5.0
    command.end("enough")
    assert command.poll() is not None


def test_endless_output_is_cut(tmp_path: Path) -> None:
    """Only the end of what it writes is kept, and a full pipe does not stop it."""
    ended = python("print('a' * 3_000_000); print('end')", tmp_path).wait(30.0)
    assert ended is not None
    assert ended.good
    assert len(ended.text) <= KEPT + 100
    assert ended.text.endswith("end")


def test_what_does_not_exist(tmp_path: Path) -> None:
    """An error in words, no exception."""
    ended = BoundedCommand(["./no-such-program"], 5.0, tmp_path).poll()
    assert ended is not None
    assert "cannot be started" in ended.text


def test_no_shell(tmp_path: Path) -> None:
    """Words reach the program as they are."""
    words = [sys.executable, "-c", "import sys; print(sys.argv[1])", "$HOME; echo no"]
    ended = BoundedCommand(words, 20.0, tmp_path).wait(20.0)
    assert ended is not None
    assert ended.text.endswith("$HOME; echo no")


def test_a_session_of_its_own(tmp_path: Path) -> None:
    """Ctrl+c and hang-up of guard's terminal do not reach it."""
    ended = python("import os; print(os.getsid(0) == os.getpid())", tmp_path).wait(20.0)
    assert ended is not None
    assert ended.text.endswith("True")


def test_let_go_leaves_it_running(tmp_path: Path) -> None:
    """Guard ends, the command goes on by itself."""
    code = "import time; time.sleep(0.2); open('done', 'w')"
    command = python(code, tmp_path)
    command.let_go()
    deadline = time.monotonic() + 20.0
    while not (tmp_path / "done").exists() and time.monotonic() < deadline:
        time.sleep(0.02)
    assert (tmp_path / "done").exists()
