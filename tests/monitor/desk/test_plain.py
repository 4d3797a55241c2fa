"""The desk without a screen."""

from __future__ import annotations

import os
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from monitor.desk import run
from monitor.desk.plain import follow
from monitor.growthlog.write import encode
from tests.monitor.desk.made_runs import (
    SEEN,
    Maker,
    healthy,
    hostile,
    runaway,
    stopped,
    write,
)


def test_a_finished_log_is_told_and_left(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Events line by line, then the whole verdict, and status 0."""
    write(tmp_path / "growth.jsonl", stopped().records, junk=b"{torn\n")
    assert run(tmp_path, plain=True) == 0
    lines = capsys.readouterr().out.splitlines()
    assert any("runaway at step 2,240" in line for line in lines)
    assert "cooling plate: runaway, 1.0204 per step in T; since step 2,240" in "\n".join(lines)
    assert any(line.startswith("  act: restart from step 1,800") for line in lines)
    assert lines[-1] == "  log: 1 unreadable lines"


def test_an_empty_log_is_no_error(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Nothing judged and no guard: that is said, and that nobody watches."""
    write(tmp_path / "growth.jsonl", Maker().records)
    assert run(tmp_path, plain=True) == 0
    out = capsys.readouterr().out
    assert "nothing judged yet" in out
    assert "start guard again" in out


def test_nothing_from_the_log_reaches_the_terminal_raw(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Every line is printable text."""
    write(tmp_path / "growth.jsonl", hostile().records)
    run(tmp_path, plain=True)
    assert all(line.isprintable() for line in capsys.readouterr().out.splitlines())


def test_changes_are_told_and_quiet_snapshots_are_not(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """With a guard there, the desk follows: of 24 more snapshots only the changes are told, and it
    ends with guard."""
    made = runaway()
    log = tmp_path / "growth.jsonl"
    known = next(n for n, r in enumerate(made.records) if getattr(r, "index", 0) == SEEN)
    write(log, made.records[:known])
    lock = tmp_path / "growth.jsonl.lock"
    lock.write_text("{}")
    done: list[int] = []
    thread = threading.Thread(target=lambda: done.append(follow(log)))
    thread.start()
    time.sleep(0.1)
    with log.open("ab") as file:
        for record in made.records[known:]:
            file.write(encode(record))
    time.sleep(0.7)
    os.unlink(lock)
    thread.join(20)
    assert done == [0]
    out = capsys.readouterr().out
    assert "swelling at step 2,100" in out
    assert "runaway at step 2,240" in out
    assert "act: wait: guard is stopping the run" in out
    assert "step 2,120" not in out


def test_a_reader_that_goes_away_is_no_traceback(tmp_path: Path) -> None:
    """`desk LOG | head -1`: the pipe breaks, nothing is said about it."""
    write(tmp_path / "growth.jsonl", runaway().records)
    done = subprocess.run(
        ["sh", "-c", '"$0" -m monitor desk "$1" | head -n 1', sys.executable, str(tmp_path)],
        cwd=Path(__file__).parents[3],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert done.stdout.count("\n") == 1
    assert done.stderr == ""


def test_plain_lines_need_no_screen_library(tmp_path: Path) -> None:
    """For small machines and quick answers: textual is not imported."""
    write(tmp_path / "growth.jsonl", stopped().records)
    code = "import sys; from monitor.desk import run; run(sys.argv[1], plain=True); "
    code += "print('textual' in sys.modules)"
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path)],
        cwd=Path(__file__).parents[3],
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    assert done.stdout.splitlines()[-1] == "False"


@pytest.mark.parametrize("name", ["nothing.jsonl", "folder"])
def test_no_log_is_a_clear_error(tmp_path: Path, name: str) -> None:
    """A missing file, or a folder without a log: what, where and what next; status 3."""
    (tmp_path / "folder").mkdir()
    done = subprocess.run(
        [sys.executable, "-m", "monitor", "desk", str(tmp_path / name)],
        cwd=Path(__file__).parents[3],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert done.returncode == 3
    assert name in done.stderr
    assert "Traceback" not in done.stderr


def test_the_log_grows_into_a_verdict(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A log replaced by a new one is told as such (its records are void)."""
    log = write(tmp_path / "growth.jsonl", healthy(60).records)
    lock = tmp_path / "growth.jsonl.lock"
    lock.write_text("{}")
    thread = threading.Thread(target=follow, args=(log,))
    thread.start()
    time.sleep(0.3)
    write(tmp_path / "other", stopped().records)
    os.replace(tmp_path / "other", log)
    thread.join(20)
    assert not thread.is_alive()
    assert "the log begins anew" in capsys.readouterr().out
