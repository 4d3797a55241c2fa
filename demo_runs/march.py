"""What the four solvers share: command line, march, its end, and files that appear whole."""

from __future__ import annotations

import argparse
import os
import signal
import sys
import time
from abc import ABC, abstractmethod
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
State = dict[str, Array]
Box = tuple[tuple[int, int], ...]


@dataclass(frozen=True)
class Truth:
    """What is known of a run beforehand.

    factor: growth per step of the largest mode, the spectral radius of the step's matrix (at most
    one: nothing grows). box: index box of 95 % of that mode's energy along every axis. cells: its
    wavelength, 2 pi over the modulus of its wave vector. field: that shows it first. how: where
    the factor comes from.
    """

    factor: float
    box: Box
    cells: float
    field: str
    how: str


@dataclass(frozen=True)
class Cast:
    """A solver ready to march: dt in seconds, the first state, one step, and its output."""

    dt: float
    state: State
    step: Callable[[State], State]
    output: Output


class Output(ABC):
    """Writes snapshots of one run into an existing folder and reads them back for a restart."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    @abstractmethod
    def write(self, state: State, step: int, time: float) -> None:
        """Add one snapshot, so that a reader never finds half of one."""

    @staticmethod
    @abstractmethod
    def read(path: Path) -> tuple[State, int, float]:
        """State, step and time of a snapshot (of the last one in a growing file)."""


def into_place(path: Path, write: Callable[[Path], None]) -> None:
    """Write under another name in the same folder, sync, and rename."""
    making = path.with_name(path.name + ".tmp")
    write(making)
    handle = os.open(making, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
    os.replace(making, path)


@dataclass(frozen=True)
class Solver:
    """How a module presents itself to the command line.

    build: (step_factor, fault, folder) to a cast. every, steps: defaults. faults: names.
    """

    name: str
    about: str
    build: Callable[[float, str | None, Path], Cast]
    every: int
    steps: int
    faults: tuple[str, ...]


def options(solver: Solver, words: Sequence[str] | None) -> argparse.Namespace:
    """The command line; ends the process with status 2 on words that it does not know."""
    parser = argparse.ArgumentParser(
        prog=f"python -m demo_runs.{solver.name}", description=solver.about
    )
    parser.add_argument("--out", type=Path, required=True, help="folder of the snapshots")
    parser.add_argument(
        "--step-factor",
        type=float,
        default=0.9,
        metavar="F",
        help="time step relative to the scheme's limit (default 0.9)",
    )
    parser.add_argument("--fault", choices=solver.faults, help="a trouble that no step cures")
    parser.add_argument("--steps", type=int, default=solver.steps, metavar="N")
    parser.add_argument(
        "--every", type=int, default=solver.every, metavar="N", help="steps between snapshots"
    )
    parser.add_argument(
        "--stop-file",
        type=Path,
        metavar="NAME",
        help="end when this file appears (default: STOP in the snapshots' folder)",
    )
    parser.add_argument(
        "--pace",
        type=float,
        default=0.0,
        metavar="S",
        help="seconds to wait at every snapshot, to be watched",
    )
    parser.add_argument("--restart", type=Path, metavar="FILE", help="go on from this snapshot")
    chosen = parser.parse_args(words)
    for name in ("step_factor", "steps", "every"):
        if getattr(chosen, name) <= 0:
            parser.error(f"--{name.replace('_', '-')} must be positive")
    return chosen


def _restarted(cast: Cast, path: Path) -> tuple[State, int, float]:
    """State, step and time of a snapshot. Raises ValueError for a snapshot of something else."""
    state, step, now = cast.output.read(path)
    shapes = {name: values.shape for name, values in cast.state.items()}
    if {name: values.shape for name, values in state.items()} != shapes:
        raise ValueError(f"its fields are not {shapes}")
    return state, step, now


def main(solver: Solver, words: Sequence[str] | None = None) -> int:
    """March to the last step, a stop file or SIGTERM; returns the exit status."""
    chosen = options(solver, words)
    cast = solver.build(chosen.step_factor, chosen.fault, chosen.out)
    state, step, now = cast.state, 0, 0.0
    if chosen.restart is not None:
        try:
            state, step, now = _restarted(cast, chosen.restart)
        except (OSError, ValueError, KeyError) as error:
            print(f"{chosen.restart}: cannot restart from it ({error})", file=sys.stderr)
            return 2
    try:
        chosen.out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        print(f"{chosen.out}: cannot be made ({error.strerror})", file=sys.stderr)
        return 2
    stop = chosen.stop_file or chosen.out / "STOP"
    told: list[int] = []
    signal.signal(signal.SIGTERM, lambda number, frame: told.append(number))
    print(f"{solver.name}: step {cast.dt:.6g} s from step {step}", file=sys.stderr, flush=True)
    if chosen.restart is None:
        cast.output.write(state, step, now)
    why = "last step"
    # Growing beyond the number type is what a demo is for: no warnings.
    with np.errstate(all="ignore"):
        while step < chosen.steps:
            state = cast.step(state)
            step += 1
            now += cast.dt
            if step % chosen.every == 0:
                cast.output.write(state, step, now)
                time.sleep(chosen.pace)
            if told or (step % chosen.every == 0 and stop.exists()):
                why = "SIGTERM" if told else f"{stop.name} found"
                break
    print(f"{solver.name}: ended at step {step} ({why})", file=sys.stderr, flush=True)
    return 0


def check_fault(fault: str | None, known: tuple[str, ...]) -> None:
    """Raises KeyError for a fault that a solver does not have."""
    if fault is not None and fault not in known:
        raise KeyError(fault)


def any_vector(size: int) -> Array:
    """A start for iterative eigenvalue solvers, always the same, so that runs can be repeated bit
    by bit."""
    return np.random.default_rng(70_607).standard_normal(size)


def settled(step: float) -> float:
    """A time step to 12 digits: the last ones depend on the machine's linear algebra, and a restart
    elsewhere is to go on with the same step."""
    return float(f"{step:.12g}")


def energy_box(mode: NDArray[np.inexact[Any]], share: float = 0.95) -> Box:
    """Index box that holds `share` of the squared values along every axis."""
    energy = np.abs(mode) ** 2
    tail = (1.0 - share) / 2.0
    box = []
    for axis in range(energy.ndim):
        along = energy.sum(axis=tuple(a for a in range(energy.ndim) if a != axis))
        filled = np.cumsum(along) / along.sum()
        box.append((int(np.searchsorted(filled, tail)), int(np.searchsorted(filled, 1 - tail)) + 1))
    return tuple(box)


def wavelength(mode: NDArray[np.inexact[Any]]) -> float:
    """2 pi / |theta| with sin(theta / 2)**2 along each axis from the Rayleigh quotient of the
    second difference, over the cells where the mode lives; infinite for a constant."""
    inside = mode[tuple(slice(max(0, a - 1), b + 1) for a, b in energy_box(mode))]
    total = 0.0
    for axis in range(inside.ndim):
        if inside.shape[axis] < 2:
            continue
        first = np.diff(inside, axis=axis)
        sine = min(1.0, float((np.abs(first) ** 2).sum() / (np.abs(inside) ** 2).sum()) / 4.0)
        total += (2.0 * np.arcsin(np.sqrt(sine))) ** 2
    return float(2.0 * np.pi / np.sqrt(total)) if total > 0.0 else float("inf")
