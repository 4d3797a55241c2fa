"""Pressure in a closed pipe with a stiff section.

A water main of the Skerrow works: an elastic pipe with a short length of steel in it, where sound
is faster. Staggered scheme of `waves`; the steel sets the limit.

Fault "bad-closure": the last cell's pressure follows its neighbour's change from the wrong side, as
if the sound came from outside; no step cures that.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.io import netcdf_file

from demo_runs import waves
from demo_runs.march import (
    Array,
    Cast,
    Output,
    Solver,
    State,
    Truth,
    check_fault,
    energy_box,
    into_place,
    settled,
    wavelength,
)
from demo_runs.march import main as march_main

CELLS = 400
SPACING = 0.5  # m
DENSITY = 1000.0  # kg/m3
SLOW, FAST = 400.0, 1200.0  # m/s
STEEL = (250, 276)
EVERY = 3
FAULTS = ("bad-closure",)


def stiffness() -> Array:
    """Bulk modulus per cell, Pa: density times the square of the speed of sound."""
    c = np.full(CELLS, SLOW)
    c[slice(*STEEL)] = FAST
    return DENSITY * c**2


@cache
def _matrix() -> tuple[sp.csr_matrix, Array]:
    return waves.operator((CELLS,), SPACING, stiffness(), [np.full(CELLS - 1, 1.0 / DENSITY)])


@cache
def limit_step() -> float:
    """Largest stable time step of the healthy scheme, s."""
    return settled(2.0 / waves.fastest(_matrix()[0])[0])


def _closure(fault: str | None, dt: float) -> float:
    """What the last cell takes of its difference to the neighbour, every step."""
    return dt * SLOW / SPACING if fault == "bad-closure" else 0.0


def step_matrix(step_factor: float, fault: str | None = None) -> Array:
    """The step on (p, u): (2 CELLS - 1, 2 CELLS - 1), dense."""
    dt = step_factor * limit_step()
    g = waves.gradient((CELLS,), SPACING, 0).toarray()
    move = -dt / DENSITY * g
    spread = dt * stiffness()[:, None] * g.T
    matrix = np.block([[np.eye(CELLS) + spread @ move, spread], [move, np.eye(CELLS - 1)]])
    share = _closure(fault, dt)
    if share:
        last = np.zeros((1, matrix.shape[1]))
        last[0, CELLS - 1], last[0, CELLS - 2] = share, -share
        matrix[CELLS - 1] += last[0]
    return matrix


@cache
def growth(step_factor: float, fault: str | None = None) -> Truth:
    """What a run at this step does. Raises KeyError for an unknown fault."""
    check_fault(fault, FAULTS)
    if fault is None:
        _, mode = waves.fastest(_matrix()[0])
        mode = mode * _matrix()[1]
        factor = waves.leapfrog_factor(step_factor)
        how = "largest eigenvalue of the symmetric operator, roots of the leapfrog polynomial"
    else:
        values, vectors = np.linalg.eig(step_matrix(step_factor, fault))
        at = int(np.argmax(np.abs(values)))
        factor, mode = float(np.abs(values[at])), vectors[:CELLS, at]
        how = "dense eigenvalues of the step's matrix"
    return Truth(factor, energy_box(mode), wavelength(mode), "p", how)


class PipeFiles(Output):
    """One classic NetCDF file ``pipe_{step}.nc`` a snapshot: p (x), u (face)."""

    def write(self, state: State, step: int, time: float) -> None:
        def save(path: Path) -> None:
            with netcdf_file(str(path), "w", version=2) as file:
                attributes: Any = file
                attributes.step, attributes.time = np.int32(step), np.float64(time)
                for name, axis in (("p", "cell"), ("u", "face")):
                    file.createDimension(axis, state[name].size)
                    file.createVariable(name, "f8", (axis,))[:] = state[name]

        into_place(self.folder / f"pipe_{step:07d}.nc", save)

    @staticmethod
    def read(path: Path) -> tuple[State, int, float]:
        with netcdf_file(str(path), "r", mmap=False) as file:
            state = {n: np.array(file.variables[n][:], dtype=np.float64) for n in ("p", "u")}
            attributes: Any = file
            return state, int(attributes.step), float(attributes.time)


def build(step_factor: float, fault: str | None, folder: Path) -> Cast:
    """The pipe at a step relative to its limit, one bar of surge on ten."""
    check_fault(fault, FAULTS)
    dt = step_factor * limit_step()
    modulus, share = stiffness(), _closure(fault, dt)
    matrix, root = _matrix()
    _, modes = waves.slowest(matrix, 3)
    modes = modes * root[:, None]
    modes = modes * np.sign(modes[np.abs(modes).argmax(axis=0), range(3)])
    mix = modes @ np.array([1.0, 0.4, 0.2])
    p = 1e5 * mix / np.abs(mix).max()
    u = 0.5 * dt / DENSITY * np.diff(p) / SPACING
    start = {"p": 1e6 + p, "u": u}

    def step(state: State) -> State:
        p = state["p"]
        u = state["u"] - dt / DENSITY * np.diff(p) / SPACING
        flow = dt / SPACING * u
        out = p.copy()
        out[:-1] -= modulus[:-1] * flow
        out[1:] += modulus[1:] * flow
        out[-1] += share * (p[-1] - p[-2])
        return {"p": out, "u": u}

    return Cast(dt, start, step, PipeFiles(folder))


SOLVER = Solver("pipe", "pressure in a pipe", build, EVERY, 2_400, FAULTS)

if __name__ == "__main__":
    raise SystemExit(march_main(SOLVER))
