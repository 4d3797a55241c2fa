"""What fresh interpreters really load, and how long they take."""

from __future__ import annotations

import json
import subprocess
import sys
import time
from pathlib import Path

import pytest

HEAVY = {"textual", "rich", "scipy", "h5py", "numpy", "watchdog", "psutil", "msgspec"}

_LOADED = "import sys, json; print(json.dumps(sorted({m.partition('.')[0] for m in sys.modules})))"


def loaded(code: str, folder: Path) -> set[str]:
    """Top-level modules that a fresh interpreter has after running `code`."""
    done = subprocess.run(
        [sys.executable, "-P", "-c", f"{code}\n{_LOADED}"],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    return set(json.loads(done.stdout.splitlines()[-1]))


def test_help_loads_no_library(tmp_path: Path) -> None:
    """`stepwarden --help` needs the standard library and the command table only."""
    got = loaded("from monitor.cli import main; assert main(['--help']) == 0", tmp_path)
    assert got & HEAVY == set()


@pytest.mark.parametrize("command", ["guard", "review", "pins", "verify", "scout", "desk", "demo"])
def test_help_of_a_command_loads_no_screen_and_no_science(command: str, tmp_path: Path) -> None:
    """Options are declared without importing what the command will need."""
    code = f"from monitor.cli import main; assert main([{command!r}, '--help']) == 0"
    got = loaded(code, tmp_path)
    assert got & {"textual", "scipy", "h5py", "numpy", "watchdog"} == set()


def test_the_reading_process_loads_neither_screen_nor_scipy(tmp_path: Path) -> None:
    """probes.child is what runs beside the solver: NumPy yes, HDF5 only when such a file is met."""
    assert loaded("import probes.child", tmp_path) & {"textual", "rich", "scipy", "h5py"} == set()


def test_guard_loads_no_screen(tmp_path: Path) -> None:
    """The headless guard runs where no screen library is needed."""
    assert loaded("import monitor.guard", tmp_path) & {"textual", "rich", "h5py"} == set()


def test_help_is_quick(tmp_path: Path) -> None:
    """The console command answers `--help` in under 0.3 s (the best of five on a busy machine)."""
    command = Path(sys.executable).parent / "stepwarden"
    times = []
    for _ in range(5):
        begun = time.perf_counter()
        subprocess.run(
            [str(command), "--help"], cwd=tmp_path, capture_output=True, timeout=30, check=True
        )
        times.append(time.perf_counter() - begun)
    assert min(times) < 0.3
