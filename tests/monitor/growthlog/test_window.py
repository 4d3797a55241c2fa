"""The state beside the log that a killed guard leaves to the next one."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from monitor.growthlog.window import Window


@settings(deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.dictionaries(st.text(max_size=10), st.binary(max_size=100), max_size=5))
def test_what_was_saved_comes_back(tmp_path: Path, payload: dict[str, bytes]) -> None:
    """Any bytes under any names."""
    Window(tmp_path).save(3, payload)
    assert Window(tmp_path).load(3) == payload


def test_the_last_two_are_kept(tmp_path: Path) -> None:
    """A guard killed between a save and its record still finds the one before."""
    window = Window(tmp_path / "growth.window")
    for seq in (4, 9, 10, 25):
        window.save(seq, {"state": b"%d" % seq})
    assert window.failing == ""
    assert sorted(os.listdir(tmp_path / "growth.window")) == ["10.win", "25.win"]
    assert [window.load(n) for n in (9, 10, 25)] == [None, {"state": b"10"}, {"state": b"25"}]


def test_saves_of_a_log_that_is_gone_are_forgotten(tmp_path: Path) -> None:
    """A log begun again counts from 1: higher numbers belong to the old one. `clear` forgets all,
    and leaves files that are not its own."""
    window = Window(tmp_path)
    window.save(500, {})
    window.save(3, {"state": b"new"})
    (tmp_path / "notes.txt").touch()
    assert sorted(os.listdir(tmp_path)) == ["3.win", "notes.txt"]
    window.clear()
    assert os.listdir(tmp_path) == ["notes.txt"]


def test_a_damaged_save_is_none(tmp_path: Path) -> None:
    """Torn at any byte, or with any one byte changed, a save is not used."""
    window = Window(tmp_path)
    window.save(7, {"sketch": b"0123456789", "state": b"{}"})
    path = tmp_path / "7.win"
    data = path.read_bytes()
    for cut in range(len(data)):
        path.write_bytes(data[:cut])
        assert window.load(7) is None
    for at in range(len(data)):
        path.write_bytes(data[:at] + bytes([data[at] ^ 0x10]) + data[at + 1 :])
        assert window.load(7) is None


def test_a_folder_that_cannot_be_written(tmp_path: Path) -> None:
    """Guarding goes on; `failing` says why a restart would begin afresh, until a save succeeds."""
    (tmp_path / "growth.window").touch()
    window = Window(tmp_path / "growth.window")
    window.save(1, {"state": b""})
    assert "cannot be written" in window.failing
    assert window.load(1) is None
    (tmp_path / "growth.window").unlink()
    window.save(2, {"state": b""})
    assert window.failing == ""


_ENDLESS = """
import sys
from pathlib import Path
from monitor.growthlog.window import Window
window, seq = Window(Path(sys.argv[1])), 0
while True:
    seq += 1
    window.save(seq, {"sketch": bytes([seq % 256]) * 100_000})
"""


@pytest.mark.parametrize("delay", [0.0, 0.003, 0.011])
def test_killed_while_saving_the_newest_name_is_whole(tmp_path: Path, delay: float) -> None:
    """Killed with signal 9 in the midst of saving, every save that has its final name is whole."""
    process = subprocess.Popen([sys.executable, "-P", "-c", _ENDLESS, str(tmp_path)])
    try:
        deadline = time.monotonic() + 30
        while not any(p.suffix == ".win" for p in tmp_path.iterdir()):
            assert process.poll() is None
            assert time.monotonic() < deadline
        until = time.monotonic() + delay
        while time.monotonic() < until:
            pass
    finally:
        process.kill()
        process.wait(timeout=30)
    saved = [int(p.stem) for p in tmp_path.iterdir() if p.suffix == ".win"]
    assert 1 <= len(saved) <= 3
    for seq in saved:
        assert Window(tmp_path).load(seq) == {"sketch": bytes([seq % 256]) * 100_000}
