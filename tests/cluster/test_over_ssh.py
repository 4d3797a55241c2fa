"""The desk and the review of a run on another machine, through a real SSH server."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import psutil
import pytest

from tests.cluster.services.processes import quietly, wait_until
from tests.cluster.services.sshd import Sshd
from tests.monitor.desk.made_runs import runaway, write
from tests.monitor.desk.terminal import Terminal

pytestmark = pytest.mark.cluster


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A run folder whose log holds an alarm."""
    write(tmp_path / "growth.jsonl", runaway().records)
    return tmp_path


def desks(folder: Path) -> list[psutil.Process]:
    """Desk processes that look at this folder."""
    return [
        p
        for p in psutil.process_iter(["cmdline"])
        if str(folder) in (p.info["cmdline"] or ()) and "ssh" not in (p.info["cmdline"] or [""])[0]
    ]


@pytest.mark.parametrize("size", [(80, 24), (120, 40)], ids=["80x24", "120x40"])
def test_a_desk_inside_ssh(sshd: Sshd, folder: Path, size: tuple[int, int]) -> None:
    """The verdict is on the screen, q leaves, and the terminal is as it was met."""
    words = sshd.ssh("stepwarden", "desk", str(folder), tty=True)
    with Terminal([], command=words, size=size) as terminal:
        terminal.wait_for("RUNAWAY")
        terminal.wait_for("q leave")
        assert len(desks(folder)) == 1
        terminal.press("q")
        assert terminal.end() == 0
        assert terminal.clean()
    wait_until(lambda: not desks(folder), 5, "no desk is left")


def test_a_line_that_drops_leaves_no_desk_behind(sshd: Sshd, folder: Path) -> None:
    """The client is killed: the far side hangs up and the desk ends there too."""
    words = sshd.ssh("stepwarden", "desk", str(folder), tty=True)
    with Terminal([], command=words) as terminal:
        terminal.wait_for("q leave")
        terminal.process.kill()
        terminal.process.wait()
        wait_until(lambda: not desks(folder), 10, "no desk is left")


def test_a_review_through_a_pipe(sshd: Sshd, folder: Path) -> None:
    """Without a terminal the standard output holds one JSON object and nothing else; the exit
    status comes through."""
    ran = quietly(sshd.ssh("stepwarden", "review", str(folder), "--json"))
    assert ran.returncode == 10
    assert json.loads(ran.stdout)["alarmed"] is True
    assert "\x1b" not in ran.stdout + ran.stderr


def test_a_plain_desk_through_a_pipe(sshd: Sshd, folder: Path) -> None:
    """Lines of text with the condition in them and no control sequence; when the line drops the
    desk ends on the far side too."""
    words = sshd.ssh("stepwarden", "desk", "--plain", str(folder))
    with subprocess.Popen(words, stdin=subprocess.DEVNULL, stdout=subprocess.PIPE) as process:
        assert process.stdout is not None
        line = ""
        while "runaway" not in line:
            line = process.stdout.readline().decode()
            assert line.endswith("\n")
            assert line[:-1].isprintable()
        assert len(desks(folder)) == 1
        process.kill()
    wait_until(lambda: not desks(folder), 15, "no desk is left")


def test_this_python_is_the_one_that_runs_there(sshd: Sshd) -> None:
    """The tests above are of this installation."""
    ran = quietly(sshd.ssh("which", "stepwarden"))
    assert Path(ran.stdout.strip()).parent == Path(sys.executable).parent
