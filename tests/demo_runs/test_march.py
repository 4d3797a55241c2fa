"""The solvers as processes: their files, their ends, their restarts."""

from __future__ import annotations

import signal
import subprocess
import sys
import time
from pathlib import Path

import h5py
import netCDF4
import numpy as np
import pytest

import demo_runs
from demo_runs.march import energy_box, wavelength
from monitor.config import load
from tests.demo_runs.running import SOLVERS

GROWING = {"channel"}


def words(name: str, out: Path, *more: str) -> list[str]:
    return [sys.executable, "-P", "-m", f"demo_runs.{name}", "--out", str(out), *more]


def run(name: str, out: Path, *more: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        words(name, out, *more), capture_output=True, text=True, timeout=60, check=False
    )


def files(name: str, out: Path) -> list[Path]:
    """The snapshots by the solver's pattern, in step order; nothing else may lie there."""
    found = sorted(out.glob(demo_runs.SOLVERS[name].replace("{step}", "*")))
    assert sorted(out.iterdir()) == found
    return found


def records(name: str, out: Path) -> list[dict[str, np.ndarray]]:
    """Every snapshot's fields, as an independent library reads them (step, time where written)."""
    found = []
    for path in files(name, out):
        if name == "plate":
            found.append({"T": np.load(path, allow_pickle=False)})
        elif name == "basin":
            with np.load(path, allow_pickle=False) as data:
                found.append({key: data[key] for key in data})
        elif name == "pipe":
            with netCDF4.Dataset(path) as data:
                assert data.data_model == "NETCDF3_64BIT_OFFSET"
                fields = {key: np.asarray(data[key][:]) for key in data.variables}
                found.append(fields | {"step": data.step, "time": data.time})
        else:
            with h5py.File(path, "r") as file:
                count = file["step"].shape[0]
                found += [{key: file[key][n] for key in file} for n in range(count)]
    return found


@pytest.mark.parametrize("name", SOLVERS)
def test_its_files_can_be_read(name: str, tmp_path: Path) -> None:
    """Two snapshots and the start, with step and time (but .npy has them in its name only), and no
    temporary file left; NetCDF by the reference library."""
    every = SOLVERS[name].EVERY
    ended = run(name, tmp_path / "out", "--steps", str(2 * every))
    assert ended.returncode == 0, ended.stderr
    found = records(name, tmp_path / "out")
    assert len(found) == 3
    for n, record in enumerate(found):
        assert all(np.isfinite(values).all() for values in record.values())
        if name != "plate":
            assert record["step"] == n * every
            dt = 0.9 * SOLVERS[name].limit_step()
            assert record["time"] == pytest.approx(n * every * dt, rel=1e-12)
    if name not in GROWING:
        steps = [int(path.stem.split("_")[-1]) for path in files(name, tmp_path / "out")]
        assert steps == [0, every, 2 * every]


@pytest.mark.parametrize("name", SOLVERS)
def test_a_restart_goes_on_bit_by_bit(name: str, tmp_path: Path) -> None:
    """Stopped half way and restarted, a run ends in the very numbers of one that was not."""
    every = SOLVERS[name].EVERY
    common = ("--step-factor", "1.02")
    assert run(name, tmp_path / "a", *common, "--steps", str(4 * every)).returncode == 0
    assert run(name, tmp_path / "b", *common, "--steps", str(2 * every)).returncode == 0
    last = files(name, tmp_path / "b")[-1]
    more = ("--steps", str(4 * every), "--restart", str(last))
    assert run(name, tmp_path / "b", *common, *more).returncode == 0
    whole, parts = records(name, tmp_path / "a"), records(name, tmp_path / "b")
    assert len(whole) == len(parts) == 5
    for one, other in zip(whole, parts, strict=True):
        for key, values in one.items():
            np.testing.assert_array_equal(values, other[key])


@pytest.mark.parametrize("name", SOLVERS)
def test_it_overflows_within_its_usual_length(name: str, tmp_path: Path) -> None:
    """At 1.02 the default number of steps ends in numbers that are not finite, in little time."""
    ended = run(name, tmp_path / "out", "--step-factor", "1.02", "--every", "401")
    assert ended.returncode == 0, ended.stderr
    field = SOLVERS[name].growth(1.02).field
    found = records(name, tmp_path / "out")
    assert np.isfinite(found[1][field]).all()
    assert not np.isfinite(found[-1][field]).all()


def start(name: str, out: Path, *more: str) -> subprocess.Popen[str]:
    """A run that would take many minutes, once its second snapshot is there."""
    process = subprocess.Popen(
        words(name, out, "--pace", "0.05", "--steps", "10000000", *more),
        stderr=subprocess.PIPE,
        text=True,
    )
    until = time.monotonic() + 30.0
    while time.monotonic() < until and process.poll() is None:
        if len(list(out.glob("*_*"))) > 1 or (out / "channel.h5").exists():
            return process
        time.sleep(0.02)
    process.kill()
    raise AssertionError(f"no snapshots: {process.communicate()[1]}")


@pytest.mark.parametrize("name", SOLVERS)
@pytest.mark.parametrize("named", [False, True])
def test_a_stop_file_ends_it(name: str, named: bool, tmp_path: Path) -> None:
    """STOP in its folder, or the file named on the command line, ends it with status 0 and says
    so; all its files are whole."""
    out = tmp_path / "out"
    stop = tmp_path / "halt" if named else out / "STOP"
    process = start(name, out, *(["--stop-file", str(stop)] if named else []))
    stop.touch()
    _, said = process.communicate(timeout=30)
    assert process.returncode == 0
    assert f"{stop.name} found" in said
    stop.unlink()
    assert len(records(name, out)) >= 1


@pytest.mark.parametrize("name", SOLVERS)
def test_term_ends_it_in_good_order(name: str, tmp_path: Path) -> None:
    """SIGTERM ends it with status 0 and a message; all its files are whole."""
    process = start(name, tmp_path / "out")
    process.send_signal(signal.SIGTERM)
    _, said = process.communicate(timeout=30)
    assert process.returncode == 0
    assert "SIGTERM" in said
    assert len(records(name, tmp_path / "out")) >= 1


def test_what_it_cannot_do_is_told(tmp_path: Path) -> None:
    """Status 2 and one sentence: a file that is no snapshot, one of another grid, a folder that
    cannot be made, a step of zero, an unknown fault."""
    (tmp_path / "T_0000007.npy").write_bytes(b"not an array")
    np.save(tmp_path / "T_0000008.npy", np.zeros((3, 4)))
    (tmp_path / "file").touch()
    for more, what in (
        (["--restart", str(tmp_path / "T_0000007.npy")], "cannot restart"),
        (["--restart", str(tmp_path / "T_0000008.npy")], "its fields are not"),
        (["--restart", str(tmp_path / "T_0000009.npy")], "cannot restart"),
        (["--out", str(tmp_path / "file" / "below")], "cannot be made"),
        (["--step-factor", "0"], "must be positive"),
        (["--fault", "moonlight"], "invalid choice"),
    ):
        ended = run("plate", tmp_path / "out", *more)
        assert ended.returncode == 2
        assert what in ended.stderr
        assert "Traceback" not in ended.stderr


@pytest.mark.parametrize("name", SOLVERS)
@pytest.mark.parametrize("out", ["out", 'a "quoted" \\ folder'])
def test_its_settings_load(name: str, out: str, tmp_path: Path) -> None:
    """The settings written for a solver are valid, watch its files and its field, stop by file."""
    path = tmp_path / "stepwarden.toml"
    path.write_text(demo_runs.settings_text(name, out), encoding="utf-8")
    settings = load(path)
    assert settings.snapshots.pattern == (f"{out}/{demo_runs.SOLVERS[name]}",)
    assert SOLVERS[name].growth(1.02).field in settings.fields
    assert [(step.do, step.path) for step in settings.stop] == [("file", f"{out}/STOP")]


def test_place_and_wavelength_of_made_modes() -> None:
    """A zigzag has its place and 2 cells; a plane zigzag 2 / sqrt(2), since both axes
    count; a constant is infinitely long."""
    line = np.zeros(60)
    line[40:52] = (-1.0) ** np.arange(12)
    assert energy_box(line, 0.999) == ((40, 52),)
    assert wavelength((-1.0) ** np.arange(200)) == pytest.approx(2.0, rel=0.1)
    plane = np.outer((-1.0) ** np.arange(80), (-1.0) ** np.arange(90))
    assert wavelength(plane) == pytest.approx(np.sqrt(2.0), rel=0.1)
    assert wavelength(np.ones((5, 7))) == np.inf
