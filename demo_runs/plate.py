"""Heat in a cooling plate with a well-conducting insert near one corner.

At the invented Skerrow works a cast plate cools between walls held at 290 K. Its steel conducts
poorly, a copper insert conducts well. The plate has been cooling for long: it starts from its
slowest modes.

u_t = div(k grad u), forward Euler, central differences in flux form, harmonic means of k on the
faces. The operator L is symmetric, so the step's matrix I + dt L has the factors 1 + dt mu for its
eigenvalues mu < 0, and the limit is dt = 2 / |mu|max (LeVeque 2007, section 9.3). At f times the
limit the largest mode grows by 2 f - 1 a step, inside the insert, where k is largest.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import eigsh

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
    into_place,
    settled,
    wavelength,
)
from demo_runs.march import main as march_main

SHAPE = (64, 96)
SPACING = 0.01  # m
STEEL, COPPER = 2.0e-5, 1.1e-4  # m2/s
INSERT = ((8, 26), (10, 30))
WALL = 290.0  # K
EVERY = 35
FAULTS = ("reversed-edge",)


def conductivity() -> Array:
    """Diffusivity per cell, m2/s."""
    k = np.full(SHAPE, STEEL)
    k[tuple(slice(a, b) for a, b in INSERT)] = COPPER
    return k


def faces(axis: int, fault: str | None) -> Array:
    """Exchange rate over each face along an axis, 1/s, the walls' faces first and last."""
    k = np.moveaxis(conductivity(), axis, 0)
    inner = 2.0 * k[1:] * k[:-1] / (k[1:] + k[:-1])
    walls = np.concatenate([k[:1], inner, k[-1:]]) / SPACING**2
    if fault == "reversed-edge" and axis == 0:
        # The flux through the last wall has its sign wrong: the hotter, the more heat comes in.
        walls[-1] *= -1.0
    return np.moveaxis(walls, 0, axis)


@cache
def operator(fault: str | None = None) -> sp.csr_matrix:
    """L, 1/s: (cells, cells), symmetric."""
    n, m = SHAPE
    number = np.arange(n * m).reshape(SHAPE)
    rows, columns, values = [], [], []
    diagonal = np.zeros(SHAPE)
    for axis in (0, 1):
        rate = np.moveaxis(faces(axis, fault), axis, 0)
        at = np.moveaxis(number, axis, 0)
        total = np.moveaxis(diagonal, axis, 0)
        total -= rate[1:] + rate[:-1]
        inner = rate[1:-1].ravel()
        rows += [at[1:].ravel(), at[:-1].ravel()]
        columns += [at[:-1].ravel(), at[1:].ravel()]
        values += [inner, inner]
    rows.append(number.ravel())
    columns.append(number.ravel())
    values.append(diagonal.ravel())
    entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    return sp.csr_matrix(sp.coo_matrix(entries, shape=(n * m, n * m)))


@cache
def limit_step() -> float:
    """Largest stable time step of the healthy scheme, s."""
    values, _ = eigsh(operator(), k=1, which="LM", v0=any_vector(SHAPE[0] * SHAPE[1]))
    return settled(float(2.0 / abs(values[0])))


@cache
def growth(step_factor: float, fault: str | None = None) -> Truth:
    """What a run at this step does. Raises KeyError for an unknown fault."""
    check_fault(fault, FAULTS)
    dt = step_factor * limit_step()
    start = any_vector(SHAPE[0] * SHAPE[1])
    low, low_mode = eigsh(operator(fault), k=1, which="SA", v0=start)
    high, high_mode = eigsh(operator(fault), k=1, which="LA", v0=start)
    candidates = [(abs(1 + dt * low[0]), low_mode), (abs(1 + dt * high[0]), high_mode)]
    factor, mode = max(candidates, key=lambda c: c[0])
    grid = mode[:, 0].reshape(SHAPE)
    return Truth(
        float(factor),
        energy_box(grid),
        wavelength(grid),
        "T",
        "extreme eigenvalues of the symmetric operator",
    )


@cache
def _slowest() -> Array:
    """Start: 40 K in the slowest mode and a little of the next two, above the walls."""
    values, vectors = eigsh(operator(), k=3, sigma=0.0, v0=any_vector(SHAPE[0] * SHAPE[1]))
    vectors = vectors[:, np.argsort(-values)]
    vectors = vectors * np.sign(vectors[np.abs(vectors).argmax(axis=0), range(3)])
    mix = vectors @ np.array([1.0, 0.3, 0.2])
    return np.asarray(WALL + 40.0 * (mix / np.abs(mix).max()).reshape(SHAPE))


class PlateFiles(Output):
    """One ``T_{step}.npy`` a snapshot, cells in rows."""

    def write(self, state: State, step: int, time: float) -> None:
        def save(path: Path) -> None:
            with open(path, "wb") as file:
                np.save(file, state["T"])

        into_place(self.folder / f"T_{step:07d}.npy", save)

    @staticmethod
    def read(path: Path) -> tuple[State, int, float]:
        return {"T": np.load(path, allow_pickle=False)}, int(path.stem.split("_")[-1]), 0.0


def build(step_factor: float, fault: str | None, folder: Path) -> Cast:
    """The plate at a step relative to its limit."""
    check_fault(fault, FAULTS)
    dt = step_factor * limit_step()
    across, along = dt * faces(0, fault), dt * faces(1, fault)
    padded = np.full((SHAPE[0] + 2, SHAPE[1] + 2), WALL)

    def step(state: State) -> State:
        padded[1:-1, 1:-1] = state["T"]
        flux = across * np.diff(padded[:, 1:-1], axis=0)
        out = state["T"] + np.diff(flux, axis=0)
        out += np.diff(along * np.diff(padded[1:-1], axis=1), axis=1)
        return {"T": out}

    return Cast(dt, {"T": _slowest().copy()}, step, PlateFiles(folder))


SOLVER = Solver("plate", "heat in a cooling plate", build, EVERY, 20_000, FAULTS)

if __name__ == "__main__":
    raise SystemExit(march_main(SOLVER))
