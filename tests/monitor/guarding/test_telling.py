"""Lines on standard error, a bar on a terminal, silence when nobody is there."""

from __future__ import annotations

import io

from monitor.guarding.telling import Teller
from tests.monitor.actions.fakes import snapshot


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


class Gone(io.StringIO):
    """A terminal that was hung up."""

    def write(self, text: str) -> int:
        raise OSError(5, "Input/output error")


def test_a_line_per_snapshot() -> None:
    """With the run's name, the step and the condition."""
    out = io.StringIO()
    Teller("plate", quiet=False, stream=out).snapshot(snapshot(3, 60))
    (line,) = out.getvalue().splitlines()
    for word in ("plate", "60", "quiet"):
        assert word in line


def test_quiet_says_only_news() -> None:
    """--quiet is for lines per snapshot, not for trouble."""
    out = io.StringIO()
    teller = Teller("plate", quiet=True, stream=out)
    teller.snapshot(snapshot(3, 60))
    assert out.getvalue() == ""
    teller.news("disk \x1b[2Jfull")
    assert out.getvalue() == "plate  disk \\x1b[2Jfull\n"


def test_a_bar_on_a_terminal_only() -> None:
    """One line that is drawn over; elsewhere lines per snapshot."""
    out, plain = Terminal(), io.StringIO()
    for stream in (out, plain):
        teller = Teller("plate", quiet=False, bar=True, stream=stream)
        teller.snapshot(snapshot(3, 60))
        teller.progress(1, 4)
        teller.progress(4, 4)
        teller.finish()
    assert out.getvalue().count("\n") == 1
    assert "4 of 4 snapshots" in out.getvalue().rsplit("\r", 1)[1]
    assert "\r" not in plain.getvalue()
    assert plain.getvalue().count("\n") == 1


def test_a_terminal_that_is_gone_is_no_trouble() -> None:
    """Nothing is raised, and nothing is tried again."""
    teller = Teller("plate", quiet=False, stream=Gone())
    teller.snapshot(snapshot(3, 60))
    teller.news("still here")
