"""On a real pseudo-terminal: the screen, and how it is left."""

from __future__ import annotations

import os
import signal
import statistics
import sys
from collections.abc import Iterator
from pathlib import Path

import psutil
import pytest

from monitor.desk import terminal as module
from monitor.growthlog.write import encode
from tests.monitor.desk.made_runs import Maker, healthy, runaway, write
from tests.monitor.desk.terminal import PATIENCE, Terminal


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A run folder whose log holds an alarm; a guard seems to be there."""
    write(tmp_path / "growth.jsonl", runaway().records)
    (tmp_path / "growth.jsonl.lock").write_text("{}")
    return tmp_path


@pytest.fixture
def desk(folder: Path) -> Iterator[Terminal]:
    with Terminal([str(folder)]) as found:
        found.wait_for("q leave")
        yield found


def test_the_screen_shows_the_verdict_and_q_leaves_cleanly(desk: Terminal) -> None:
    """Condition, countdown and curve are on the emulated screen; then the terminal is as before."""
    text = desk.text()
    assert "RUNAWAY" in text
    assert "ruin in 743 to 813 steps" in text
    assert "ripple 1.0204" in text
    assert "\u28c0" in text or "\u2824" in text
    desk.press("q")
    assert desk.end() == 0
    assert desk.clean()


@pytest.mark.parametrize(
    "number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP, signal.SIGQUIT], ids=str
)
def test_signals_leave_a_clean_terminal(desk: Terminal, number: signal.Signals) -> None:
    """Status 128 + n, alternate screen left, cursor shown, modes restored."""
    desk.signal(number)
    assert desk.end() == 128 + number
    assert desk.clean()


def test_ctrl_c_is_an_interrupt(desk: Terminal) -> None:
    """Typed, it means what the signal means."""
    desk.press("\x03")
    assert desk.end() == 130
    assert desk.clean()


def test_a_line_that_hangs_up_ends_the_desk(desk: Terminal) -> None:
    """Nobody at the other end: the process goes within seconds, without spinning."""
    os.close(desk.master)
    os.close(desk.slave)
    desk.master = desk.slave = -1
    assert desk.process.wait(PATIENCE) == 129


def test_a_hang_up_that_is_ignored_ends_the_desk_too(folder: Path) -> None:
    """Under nohup no signal comes; the terminal itself is seen to be gone."""
    code = (
        "import signal, sys; from monitor.desk import run, terminal; "
        "terminal.LEAVE_ON = (signal.SIGTERM,); signal.signal(signal.SIGHUP, signal.SIG_IGN); "
        "sys.exit(run(sys.argv[1]))"
    )
    with Terminal([str(folder)], command=(sys.executable, "-c", code)) as desk:
        desk.wait_for("q leave")
        os.close(desk.master)
        os.close(desk.slave)
        desk.master = desk.slave = -1
        assert desk.process.wait(PATIENCE) == 129


def test_stopped_and_continued_it_comes_back_whole(desk: Terminal) -> None:
    """Ctrl+z gives a clean terminal; after `fg` everything is painted again."""
    process = psutil.Process(desk.process.pid)
    desk.press("\x1a")
    desk.wait(lambda: process.status() == psutil.STATUS_STOPPED)
    desk.settle()
    assert desk.clean()
    desk.screen.reset()
    desk.signal(signal.SIGCONT)
    desk.wait_for("RUNAWAY")
    desk.wait_for("q leave")
    desk.wait_for("ripple 1.0204")
    desk.press("q")
    assert desk.end() == 0
    assert desk.clean()


def test_a_resized_terminal_is_filled(desk: Terminal) -> None:
    """From 80 x 24 to 120 x 40: the folded parts unfold."""
    assert "levels" not in desk.text()
    desk.resize(120, 40)
    desk.wait(lambda: all(word in desk.text() for word in ("levels", "where", "events", "kept")))


def test_exported_sizes_do_not_freeze_the_screen(folder: Path) -> None:
    """COLUMNS and LINES of the shell are dropped."""
    environment = {"COLUMNS": "60", "LINES": "15"}
    with Terminal([str(folder)], size=(120, 40), environment=environment) as desk:
        desk.wait_for("q leave")
        assert "levels" in desk.text()


def test_without_colours_no_colour_is_sent(folder: Path) -> None:
    """NO_COLOR: no foreground or background code at all, and the map is still readable."""
    with Terminal([str(folder)], size=(120, 40), environment={"NO_COLOR": "1"}) as desk:
        desk.wait_for("q leave")
        desk.settle()
        codes = {
            code
            for part in desk.sent.split(b"\x1b[")[1:]
            if b"m" in part[:24]
            for code in part.partition(b"m")[0].split(b";")
        }
        assert codes <= {b"0", b"", b"1", b"2", b"7", b"22", b"27", b"39", b"49"}
        assert "@@" in desk.text()


def test_sixteen_colours_are_enough(folder: Path) -> None:
    """On a terminal that knows no more, no 24-bit colour is sent."""
    environment = {"TERM": "xterm", "COLORTERM": ""}
    with Terminal([str(folder)], size=(120, 40), environment=environment) as desk:
        desk.wait_for("q leave")
        desk.settle()
        assert b"38;2;" not in desk.sent
        assert b"48;2;" not in desk.sent


@pytest.mark.parametrize(
    ("environment", "words"),
    [({"LANG": "C"}, []), ({"LANG": "en_US.ISO-8859-1"}, []), ({}, ["--ascii"])],
)
def test_plain_characters_where_utf8_is_not_spoken(
    folder: Path, environment: dict[str, str], words: list[str]
) -> None:
    """By itself or on request: not one byte beyond ASCII is sent."""
    with Terminal([str(folder), *words], environment=environment) as desk:
        desk.wait_for("q leave")
        desk.settle()
        assert desk.sent.isascii()
        assert "-/! RUNAWAY" in desk.text()
        assert "*" in desk.text()


@pytest.mark.parametrize("term", ["dumb", ""])
def test_a_dumb_terminal_gets_lines(folder: Path, term: str) -> None:
    """No control sequence, one line per fact; an interrupt ends it with its status."""
    with Terminal([str(folder)], environment={"TERM": term}) as desk:
        desk.wait(lambda: b"guard: stop file STOP" in desk.sent)
        assert b"\x1b" not in desk.sent
        desk.signal(signal.SIGINT)
        assert desk.end() == 130


def test_a_crash_is_one_message_and_a_clean_terminal(folder: Path) -> None:
    """No traceback, no local variables: what happened, and that guard goes on; status 1."""
    code = (
        "import sys; from monitor.desk import run; "
        "from monitor.desk.parts.growth import GrowthPart; "
        "GrowthPart.facts = lambda *a: 1 / 0; "
        "sys.exit(run(sys.argv[1]))"
    )
    with Terminal([str(folder)], command=(sys.executable, "-c", code)) as desk:
        assert desk.end() == 1
        assert desk.clean()
        after = desk.sent.rpartition(b"\x1b[?1049l")[2].decode()
        assert "internal error in the desk: ZeroDivisionError" in after
        assert "Traceback" not in after


def live(folder: Path, first: int) -> tuple[Path, Maker]:
    """A log with the first records of a run; the rest is for the test to append."""
    made = runaway()
    log = write(folder / "growth.jsonl", made.records[:first])
    (folder / "growth.jsonl.lock").write_text("{}")
    return log, made


# As `stepwarden desk`, but a new record is seen at once; {0} is put in before, {1} are arguments.
QUICK = (
    "import sys, monitor.desk.source as s; s.POLL_SECONDS = 0.02; {0}; "
    "from monitor.desk import run; sys.exit(run(sys.argv[1], {1}))"
)


def test_an_update_is_small(tmp_path: Path) -> None:
    """A snapshot costs under a kilobyte in the median with everything shown, and nothing is sent
    while nothing changes."""
    log, made = live(tmp_path, 80)
    code = QUICK.format("pass", "")
    with Terminal([str(tmp_path)], size=(120, 40), command=(sys.executable, "-c", code)) as desk:
        desk.wait_for("q leave")
        desk.settle()
        first_paint = len(desk.sent)
        sizes = []
        for record in made.records[80:89]:
            before = len(desk.sent)
            with log.open("ab") as file:
                file.write(encode(record))
            desk.wait(lambda seen=before: len(desk.sent) > seen)  # type: ignore[misc]
            desk.settle()
            sizes.append(len(desk.sent) - before)
        quiet = desk.settle(1.5)
    assert first_paint < 60_000
    assert statistics.median(sizes) < 1000
    assert max(sizes) < 14_000
    assert quiet == b""


def test_both_ways_of_sending_paint_the_same_screen(tmp_path: Path) -> None:
    """Cut to what changed, and as the screen library sends it: after fourteen updates the emulated
    screens agree in every cell, characters and colours."""
    screens = []
    made = runaway()
    now = made.at + 8.0
    for stock in (False, True):
        folder = tmp_path / str(stock)
        folder.mkdir()
        log, _ = live(folder, 95)
        code = QUICK.format(f"import time; time.time = lambda: {now}", f"stock_driver={stock}")
        with Terminal([str(folder)], size=(120, 40), command=(sys.executable, "-c", code)) as desk:
            desk.wait_for("q leave")
            for record in made.records[95:109]:
                with log.open("ab") as file:
                    file.write(encode(record))
                desk.read(0.1)
            last = [r for r in made.records[:109] if hasattr(r, "index")][-1]
            desk.wait_for(f"step {last.step:,}, time")  # type: ignore[attr-defined]
            desk.settle(0.8)
            screens.append([[desk.screen.buffer[y][x] for x in range(120)] for y in range(40)])
    assert screens[0] == screens[1]


def test_a_long_log_opens_with_progress_and_stays_quick(tmp_path: Path) -> None:
    """Ten thousand snapshots: shown, and a key is answered."""
    write(tmp_path / "growth.jsonl", healthy(10_000).records)
    with Terminal([str(tmp_path)], size=(120, 40)) as desk:
        desk.wait_for("10,000 judged")
        desk.press("s")
        desk.wait_for("snapshots.pattern")


@pytest.mark.parametrize(
    ("environment", "speaks"),
    [
        ({"LANG": "C.UTF-8"}, True),
        ({"LANG": "de_DE.utf8@euro"}, True),
        ({"LC_ALL": "C", "LANG": "en_US.UTF-8"}, False),
        ({"LC_CTYPE": "en_US.UTF-8", "LANG": "C"}, True),
        ({"LANG": "POSIX"}, False),
        ({"LANG": "en_US.ISO-8859-15"}, False),
        ({"LANG": "en_US.nonsense"}, False),
        ({}, False),
    ],
)
def test_the_locale_tells_the_characters(environment: dict[str, str], speaks: bool) -> None:
    """LC_ALL before LC_CTYPE before LANG (POSIX.1-2017, 8.2); without any of them plain ones."""
    assert module.speaks_utf8(environment) is speaks
