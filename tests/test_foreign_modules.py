"""Folders of runs may hold files that are called like Python modules; none is ever imported."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

NAMES = ("monitor", "probes", "numpy", "json", "argparse", "msgspec", "demo_runs", "typing")


@pytest.fixture
def run_folder(tmp_path: Path) -> Path:
    """Snapshots beside modules that leave a mark when imported, and then break."""
    for name in NAMES:
        mark = f"open({str(tmp_path / 'imported')!r}, 'a').write({name!r})"
        (tmp_path / f"{name}.py").write_text(f"{mark}\nraise SystemExit(99)\n")
    rng = np.random.default_rng(730811)
    for step in range(0, 60, 10):
        np.save(tmp_path / f"h_{step:04d}.npy", rng.normal(size=(24, 24)))
    return tmp_path


STEPWARDEN = str(Path(sys.executable).parent / "stepwarden")


@pytest.mark.parametrize(
    "command",
    [
        [STEPWARDEN, "--help"],
        [sys.executable, "-P", "-m", "monitor", "--help"],
        [STEPWARDEN, "scout", "."],
        [STEPWARDEN, "guard", "--snapshots", "h_{step}.npy", "--catch-up", "--no-actions"],
    ],
    ids=["help", "module", "scout", "guard"],
)
def test_nothing_in_the_runs_folder_is_imported(command: list[str], run_folder: Path) -> None:
    """Each way to start works there, its child processes included, and leaves no mark."""
    done = subprocess.run(
        command,
        cwd=run_folder,
        capture_output=True,
        text=True,
        timeout=120,
        stdin=subprocess.DEVNULL,
    )
    assert not (run_folder / "imported").exists()
    assert done.returncode == 0, done.stderr


def test_the_trap_works(run_folder: Path) -> None:
    """Without -P the folder's module is imported, so the tests above can fail."""
    done = subprocess.run(
        [sys.executable, "-m", "monitor"], cwd=run_folder, capture_output=True, timeout=60
    )
    assert done.returncode == 99
    assert (run_folder / "imported").exists()
