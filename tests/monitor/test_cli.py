"""The command line: which status and which words come out of what happens."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from argparse import Namespace
from collections.abc import Sequence
from pathlib import Path

import pytest

import monitor.commands.pins
from monitor.cli import main
from monitor.commands import COMMANDS
from monitor.exits import Exit
from monitor.growthlog.records import AnyRecord, PinRecord
from monitor.growthlog.write import encode
from probes.errors import (
    ArrivalError,
    ChildError,
    NotYet,
    ReadError,
    Refused,
    SettingsError,
    StepwardenError,
)
from tests.monitor.made_log import alarmed_run, opened, segment, snap


def write_log(path: Path, records: Sequence[AnyRecord]) -> Path:
    path.write_bytes(b"".join(encode(record) for record in records))
    return path


@pytest.fixture
def alarmed_log(tmp_path: Path) -> Path:
    return write_log(tmp_path / "growth.jsonl", alarmed_run())


def failing_with(error: BaseException, monkeypatch: pytest.MonkeyPatch) -> int:
    """Status of `stepwarden pins x` when the command raises `error`."""

    def run(options: Namespace) -> int:
        raise error

    monkeypatch.setattr(monitor.commands.pins, "run", run)
    return main(["pins", "x"])


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (SettingsError("no"), 2),
        (ReadError("no"), 3),
        (NotYet("no"), 3),
        (Refused("no"), 3),
        (ArrivalError("no"), 3),
        (ChildError("no"), 3),
        (StepwardenError("no"), 1),
        (KeyboardInterrupt(), 130),
        (RuntimeError("no"), 1),
    ],
)
def test_each_error_has_its_status(
    error: BaseException, status: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The table of exit statuses in the README holds for every kind of error."""
    assert failing_with(error, monkeypatch) == status


def test_an_error_is_one_message_on_stderr(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Fact, place and remedy in one line; control characters of a file's name are escaped; standard
    output stays clean."""
    error = ReadError("is cut short", "run\x1b[31m/h.npy", "copy it again")
    failing_with(error, monkeypatch)
    out, err = capsys.readouterr()
    assert out == ""
    assert err == "stepwarden: run\\x1b[31m/h.npy: is cut short; copy it again\n"


def test_a_fault_of_ours_is_said_without_a_traceback(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """The message names the exception and how to see more; with STEPWARDEN_TRACE it is raised."""
    failing_with(ZeroDivisionError("by nought"), monkeypatch)
    err = capsys.readouterr().err
    assert "Traceback" not in err
    assert "internal error: ZeroDivisionError: by nought" in err
    monkeypatch.setenv("STEPWARDEN_TRACE", "1")
    with pytest.raises(ZeroDivisionError):
        failing_with(ZeroDivisionError("by nought"), monkeypatch)


def test_help_lists_every_command(capsys: pytest.CaptureFixture[str]) -> None:
    """--help is data: it goes to standard output with status 0."""
    assert main(["--help"]) == Exit.GOOD
    out = capsys.readouterr().out
    for name, line in COMMANDS.items():
        assert name in out
        assert line in out


def test_every_listed_command_has_its_module() -> None:
    """A module with a docstring, `declare` and `run` for each, and none that is not listed."""
    folder = Path(monitor.commands.__file__).parent
    assert {p.stem for p in folder.glob("*.py")} - {"__init__"} == set(COMMANDS)


@pytest.mark.parametrize("name", COMMANDS)
def test_each_command_explains_itself(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    """`stepwarden NAME --help` prints the module's description."""
    assert main([name, "--help"]) == Exit.GOOD
    assert len(capsys.readouterr().out.splitlines()) > 5


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ([], "usage"),
        (["revew"], "did you mean 'review'?"),
        (["xyzzy"], "known are demo"),
        (["review"], "LOG"),
        (["review", "a", "--jso"], "--jso"),
        (["--verbose"], "--verbose"),
    ],
)
def test_wrong_usage(words: list[str], said: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Status 2, a hint on standard error, nothing on standard output; options are not guessed from
    their beginnings."""
    assert main(words) == Exit.USAGE
    out, err = capsys.readouterr()
    assert out == ""
    assert said in err


def test_the_version_is_the_installed_one(capsys: pytest.CaptureFixture[str]) -> None:
    """One line with the distribution's version."""
    from importlib.metadata import version

    assert main(["--version"]) == Exit.GOOD
    assert capsys.readouterr().out == f"stepwarden {version('stepwarden')}\n"


def test_review_prints_one_object(alarmed_log: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """--json prints the object alone, status 10 for an alarm."""
    assert main(["review", str(alarmed_log), "--json"]) == Exit.ALARM
    out, err = capsys.readouterr()
    assert json.loads(out)["alarm_step"] == 660
    assert err == ""


def test_review_takes_the_runs_folder(
    alarmed_log: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A folder stands for the log in it, and the text names the alarm."""
    assert main(["review", str(alarmed_log.parent)]) == Exit.ALARM
    assert "alarm at step 660" in capsys.readouterr().out


def test_the_settings_in_a_folder_say_where_its_log_is(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """stepwarden.toml may put the log elsewhere."""
    (tmp_path / "logs").mkdir()
    write_log(tmp_path / "logs" / "g.jsonl", [opened(), segment(2), snap(3)])
    (tmp_path / "stepwarden.toml").write_text(
        '[run]\nlog = "logs/g.jsonl"\n[snapshots]\npattern = "h_{step}.npy"\n'
    )
    assert main(["review", str(tmp_path)]) == Exit.GOOD
    assert "1 snapshot(s)" in capsys.readouterr().out


def test_review_of_an_overflow_and_of_a_quiet_run(tmp_path: Path) -> None:
    """Status 11 and 0."""
    quiet = [opened(), segment(2), snap(3)]
    path = tmp_path / "growth.jsonl"
    assert main(["review", str(write_log(path, quiet))]) == Exit.GOOD
    assert main(["review", str(write_log(path, [*quiet, snap(4, "overflowed")]))]) == 11


@pytest.mark.parametrize("command", ["review", "pins"])
def test_a_missing_log_is_unreadable(
    command: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Neither a file nor a folder with a log: status 3 and the path."""
    assert main([command, str(tmp_path / "none.jsonl")]) == Exit.UNREADABLE
    assert main([command, str(tmp_path)]) == Exit.UNREADABLE
    assert str(tmp_path) in capsys.readouterr().err


def test_pins_are_listed_in_step_order(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Step, state, proof and files of every pin still held."""
    pins = [
        PinRecord(
            seq=seq,
            at=1.0,
            pin=f"p{step}",
            state="kept",
            folder=f"pins/p{step}",
            files=("h.npy",),
            step=step,
            verified=step == 40,
            method="copy",
            bytes=2_000_000,
        )
        for seq, step in ((3, 80), (4, 40))
    ]
    path = write_log(tmp_path / "growth.jsonl", [opened(), segment(2), *pins])
    assert main(["pins", str(path)]) == Exit.GOOD
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith("step 40  kept  verified  2 MB by copy")
    assert lines[3].startswith("step 80  kept  not verified")


def test_a_reader_that_goes_away_is_no_fault(alarmed_log: Path) -> None:
    """Output into a closed pipe: no traceback, the status of a process ended by SIGPIPE."""
    read, write = os.pipe()
    os.close(read)
    try:
        done = subprocess.run(
            [sys.executable, "-P", "-m", "monitor", "review", str(alarmed_log)],
            stdout=write,
            stderr=subprocess.PIPE,
            text=True,
            timeout=60,
        )
    finally:
        os.close(write)
    assert done.stderr == ""
    assert done.returncode == 128 + signal.SIGPIPE
