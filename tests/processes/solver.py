"""A small explicit solver as a process of its own: heat on a plate whose far corner conducts more.

Writes ``T_{step}.npy`` into a folder. With `factor` above one the step is too long for the corner,
by that factor of its limit 1/4 (von Neumann's condition for the five-point scheme), from step
`sick-from` on: until then it is 0.9 of it. `pace` is in real seconds between snapshots. With
`history` the temperature of a cell in that corner is printed into a text file at every step,
`haste` real seconds apart.
"""

from __future__ import annotations

import argparse
import os
import time
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

CELLS = 40


def main(words: Sequence[str] | None = None) -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("out", type=Path)
    parser.add_argument("--factor", type=float, default=0.9)
    parser.add_argument("--sick-from", type=int, default=0)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--last", type=int, default=400)
    parser.add_argument("--every", type=int, default=10)
    parser.add_argument("--pace", type=float, default=0.0)
    parser.add_argument("--stop-file", type=Path)
    parser.add_argument("--names", choices=["step", "two", "one"], default="step")
    parser.add_argument("--in-place", action="store_true")
    parser.add_argument("--cells", type=int, default=CELLS)
    parser.add_argument("--burst-at", type=int, default=-1)
    parser.add_argument("--history", type=Path)
    parser.add_argument("--haste", type=float, default=0.0)
    options = parser.parse_args(words)
    options.out.mkdir(parents=True, exist_ok=True)
    u = initial(options.cells)
    well, sick = conductivity(options.cells, 0.9), conductivity(options.cells, options.factor)
    for step in range(options.last + 1):
        if step == options.burst_at:
            u[-4, -3] = np.inf
        if step >= options.first and step % options.every == 0:
            write(u, options.out / name(options.names, step, options.every), options.in_place)
            if options.stop_file is not None and options.stop_file.exists():
                return
            time.sleep(options.pace)
        if options.history is not None:
            tell(options.history, step, u)
            if options.stop_file is not None and options.stop_file.exists():
                return
            time.sleep(options.haste)
        u = advance(u, well if step < options.sick_from else sick)


def initial(cells: int) -> NDArray[np.float64]:
    """300 K and a hump in the middle."""
    x = np.sin(np.pi * np.linspace(0.0, 1.0, cells))
    return 300.0 + x[:, None] * x[None, :]


def conductivity(cells: int, factor: float) -> NDArray[np.float64]:
    """Diffusion number per cell: 0.15, rising smoothly to `factor` times its limit in a corner."""
    x = (np.arange(cells) - 0.72 * cells) / (0.2 * cells)
    bump = np.exp(-(x[:, None] ** 2) - x[None, :] ** 2)
    return 0.15 + (0.25 * factor - 0.15) * bump


def advance(u: NDArray[np.float64], number: NDArray[np.float64]) -> NDArray[np.float64]:
    """One step of forward Euler with the five-point stencil; the edge is held."""
    change = np.zeros_like(u)
    with np.errstate(all="ignore"):
        change[1:-1, 1:-1] = (
            u[2:, 1:-1] + u[:-2, 1:-1] + u[1:-1, 2:] + u[1:-1, :-2] - 4.0 * u[1:-1, 1:-1]
        )
        return u + number * change


def tell(path: Path, step: int, u: NDArray[np.float64]) -> None:
    """One line as Fortran would write it, headings first."""
    with path.open("a") as file:
        if step == 0:
            file.write(" # plate\n    step      corner\n")
        file.write(f" {step:7d}  {u[-12, -12]:.16e}\n".replace("e", "D"))


def name(names: str, step: int, every: int) -> str:
    """A name of its own, one of two in turn, or always the same."""
    if names == "step":
        return f"T_{step}.npy"
    return f"T_{'ab'[step // every % 2]}.npy" if names == "two" else "T_latest.npy"


def write(u: NDArray[np.float64], path: Path, in_place: bool) -> None:
    """Under a temporary name and renamed, or straight into the file."""
    target = path if in_place else path.with_name(f".{path.name}.tmp")
    with target.open("wb") as file:
        np.save(file, u)
    if not in_place:
        os.replace(target, path)


if __name__ == "__main__":
    main()
