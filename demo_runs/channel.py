"""Dye in a channel with a mixer at one bank.

In the outfall channel of the Skerrow works a stirrer near one bank mixes strongly; the stream
carries the dye along, round and round (periodic along, walls across).

c_t + u c_x = div(D grad c), forward Euler, central differences; the step's matrix I + dt L is not
symmetric, its largest eigenvalues come from a sparse eigenvalue solver. The limit is set by the
diffusion number in the mixer: 1 + dt mu >= -1 there (LeVeque 2007, section 9.3; for the two terms
together Hirsch 2007, section 8.3).

Fault "wrong-side": in a flood the stream's difference is taken from downstream, which takes mixing
away instead of adding it (LeVeque 2007, section 10.4); no step cures that.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import h5py
import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray
from scipy.sparse.linalg import eigs, spsolve

from demo_runs.march import (
    Array,
    Cast,
    Output,
    Solver,
    State,
    Truth,
    any_vector,
    check_fault,
    energy_box,
    settled,
    wavelength,
)
from demo_runs.march import main as march_main

Indices = NDArray[np.int64]

SHAPE = (32, 80)
SPACING = 0.5  # m
STREAM = 0.05  # m/s in the middle
FLOOD = 2.0  # times the stream
MIXING, STIRRED = 0.02, 0.12  # m2/s
MIXER, REACH = (8.0, 58.0), 5.0  # middle and reach of the stirrer, in cells
EVERY = 35
FAULTS = ("wrong-side",)


def diffusivity() -> Array:
    """Per cell, m2/s."""
    y, x = np.indices(SHAPE)
    distance = np.hypot(y - MIXER[0], x - MIXER[1]) / REACH
    return np.asarray(MIXING + (STIRRED - MIXING) * np.exp(-(distance**2)))


def stream() -> Array:
    """Velocity along the channel by row, m/s: a parabola, at rest at the banks."""
    y = (np.arange(SHAPE[0]) + 0.5) / SHAPE[0]
    return STREAM * 4.0 * y * (1.0 - y)


@cache
def operator(fault: str | None = None) -> sp.csr_matrix:
    """L, 1/s: (cells, cells)."""
    n, m = SHAPE
    number = np.arange(n * m).reshape(SHAPE)
    d, h = diffusivity(), SPACING
    rows: list[Indices] = []
    columns: list[Indices] = []
    values: list[Array] = []

    def add(row: Indices, column: Indices, value: Array) -> None:
        rows.append(row.ravel())
        columns.append(column.ravel())
        values.append(np.broadcast_to(value, row.shape).ravel())

    across = 2.0 * d[1:] * d[:-1] / (d[1:] + d[:-1]) / h**2
    beside = np.roll(d, -1, axis=1)
    along = 2.0 * d * beside / (d + beside) / h**2
    for rate, one, other in (
        (across, number[:-1], number[1:]),
        (along, number, np.roll(number, -1, axis=1)),
    ):
        add(one, other, rate)
        add(other, one, rate)
        add(one, one, -rate)
        add(other, other, -rate)
    speed = np.repeat(stream()[:, None], m, axis=1)
    down, up = np.roll(number, -1, axis=1), np.roll(number, 1, axis=1)
    if fault == "wrong-side":
        # u h / 2 of mixing is taken away by the wrong side: in a flood that is more than there is.
        add(number, down, -FLOOD * speed / h)
        add(number, number, FLOOD * speed / h)
    else:
        add(number, down, -speed / (2.0 * h))
        add(number, up, speed / (2.0 * h))
    entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    return sp.csr_matrix(sp.coo_matrix(entries, shape=(n * m, n * m)))


Eigenpairs = tuple[NDArray[np.complex128], NDArray[np.complex128]]


def _stiffest(matrix: sp.csr_matrix) -> Eigenpairs:
    """The eigenvalues of largest modulus, 1/s, and their vectors."""
    return eigs(matrix, k=8, which="LM", v0=any_vector(matrix.shape[0]), tol=1e-11, maxiter=20_000)


def _rightmost(matrix: sp.csr_matrix) -> Eigenpairs:
    """The eigenvalues of largest real part, 1/s, and their vectors.

    They are crowded: a large Krylov space tells them apart.
    """
    return eigs(
        matrix, k=8, which="LR", ncv=160, v0=any_vector(matrix.shape[0]), tol=1e-11, maxiter=2_000
    )


@cache
def limit_step() -> float:
    """Largest stable time step of the healthy scheme, s: |1 + dt mu| <= 1 for the eigenvalues mu of
    largest modulus (those near zero allow more: see the tests)."""
    values, _ = _stiffest(operator())
    return settled(float(np.min(-2.0 * values.real / np.abs(values) ** 2)))


@cache
def growth(step_factor: float, fault: str | None = None) -> Truth:
    """What a run at this step does. Raises KeyError for an unknown fault."""
    check_fault(fault, FAULTS)
    dt = step_factor * limit_step()
    found = [_stiffest(operator(fault)), _rightmost(operator(fault))]
    values = np.concatenate([v for v, _ in found])
    vectors = np.concatenate([x for _, x in found], axis=1)
    factors = np.abs(1.0 + dt * values)
    at = int(np.argmax(factors))
    grid = vectors[:, at].reshape(SHAPE)
    return Truth(
        float(factors[at]),
        energy_box(grid),
        wavelength(grid),
        "dye",
        "sparse eigenvalues of the operator",
    )


@cache
def _start() -> Array:
    """Dye that has spread for long: a smooth cloud after implicit steps much longer than ours."""
    y, x = np.indices(SHAPE)
    cloud = np.exp(-(((x - 20.0) / 6.0) ** 2) - ((y - 14.0) / 5.0) ** 2).ravel()
    matrix = sp.csc_matrix(sp.identity(cloud.size) - 40.0 * limit_step() * operator())
    for _ in range(6):
        cloud = spsolve(matrix, cloud)
    return np.asarray(cloud / cloud.max()).reshape(SHAPE)


class ChannelFile(Output):
    """One growing file ``channel.h5``: dye (record, y, x), step and time by record.

    Opened anew for every record and closed again, as codes do that must not lose data.
    """

    @property
    def _path(self) -> Path:
        return self.folder / "channel.h5"

    def write(self, state: State, step: int, time: float) -> None:
        dye = state["dye"]
        going_on = step > 0 and self._path.exists()
        with h5py.File(self._path, "r+" if going_on else "w") as file:
            if not going_on:
                file.create_dataset(
                    "dye",
                    (0, *dye.shape),
                    "f8",
                    maxshape=(None, *dye.shape),
                    chunks=(1, *dye.shape),
                )
                file.create_dataset("step", (0,), "i8", maxshape=(None,), chunks=(1024,))
                file.create_dataset("time", (0,), "f8", maxshape=(None,), chunks=(1024,))
            n = file["step"].shape[0]
            # The numbers first, their count last: a reader never counts a record without them.
            for name, value in (("dye", dye), ("time", time), ("step", step)):
                file[name].resize(n + 1, axis=0)
                file[name][n] = value

    @staticmethod
    def read(path: Path) -> tuple[State, int, float]:
        with h5py.File(path, "r", locking=False) as file:
            return {"dye": file["dye"][-1]}, int(file["step"][-1]), float(file["time"][-1])


def build(step_factor: float, fault: str | None, folder: Path) -> Cast:
    """The channel at a step relative to its limit."""
    check_fault(fault, FAULTS)
    dt = step_factor * limit_step()
    matrix = sp.csr_matrix(dt * operator(fault))

    def step(state: State) -> State:
        dye = state["dye"]
        return {"dye": dye + (matrix @ dye.ravel()).reshape(SHAPE)}

    return Cast(dt, {"dye": _start().copy()}, step, ChannelFile(folder))


SOLVER = Solver("channel", "dye in a channel", build, EVERY, 20_000, FAULTS)

if __name__ == "__main__":
    raise SystemExit(march_main(SOLVER))
