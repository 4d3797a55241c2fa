"""Waves in a harbour basin with a dredged corner.

The invented harbour of Skerrow is shallow but for a turning basin in one corner, where waves are
fastest. The basin sloshes in its slowest modes. Staggered scheme of `waves`; the limit is set by
the deep corner.

Fault "wrong-way-out": along the first column, the mouth, a radiation condition looks the wrong way.
Waves that leave there obey h_t = c h_x; it takes h_t = -c h_x. No step cures that.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray
from scipy.sparse.linalg import eigs

from demo_runs import waves
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

SHAPE = (56, 72)
SPACING = 10.0  # m
GRAVITY = 9.81  # m/s2
SHALLOW, DEEP = 4.0, 16.0  # m
CORNER, SLOPE = (38.0, 52.0), 3.0  # first row, column of the corner; width of its slopes; cells
EVERY = 3
FAULTS = ("wrong-way-out",)


def depth() -> Array:
    """Still water depth per cell, m."""
    y, x = np.indices(SHAPE)
    inside = [
        (1.0 + np.tanh((at - edge) / SLOPE)) / 2.0 for at, edge in zip((y, x), CORNER, strict=True)
    ]
    return np.asarray(SHALLOW + (DEEP - SHALLOW) * inside[0] * inside[1])


def face_depths() -> list[Array]:
    """Depth on the inner faces by axis, m."""
    d = depth()
    return [(d[1:] + d[:-1]) / 2.0, (d[:, 1:] + d[:, :-1]) / 2.0]


@cache
def _matrix() -> tuple[sp.csr_matrix, Array]:
    mobility = [GRAVITY * d for d in face_depths()]
    return waves.operator(SHAPE, SPACING, np.ones(SHAPE), mobility)


@cache
def limit_step() -> float:
    """Largest stable time step of the healthy scheme, s."""
    return settled(2.0 / waves.fastest(_matrix()[0])[0])


def _mouth(fault: str | None, dt: float) -> float:
    """What the first column takes of its difference to the second, every step."""
    return dt * float(np.sqrt(GRAVITY * SHALLOW)) / SPACING if fault == "wrong-way-out" else 0.0


def step_matrix(step_factor: float, fault: str | None = None) -> sp.csr_matrix:
    """The step on (h, u along axis 0, u along axis 1), all flattened."""
    dt = step_factor * limit_step()
    g = [waves.gradient(SHAPE, SPACING, axis) for axis in (0, 1)]
    move = [-dt * GRAVITY * x for x in g]
    spread = [dt * x.T @ sp.diags(d.ravel()) for x, d in zip(g, face_depths(), strict=True)]
    top = sp.identity(g[0].shape[1]) + spread[0] @ move[0] + spread[1] @ move[1]
    first = np.zeros(SHAPE)
    first[:, 0] = _mouth(fault, dt)
    # The mouth looks at the levels of before: minus the difference to the next column.
    inward = sp.kron(sp.identity(SHAPE[0]), sp.eye(SHAPE[1], k=1), format="csr")
    top = top + sp.diags(first.ravel()) @ (sp.identity(first.size) - inward)
    one, other = (sp.identity(m.shape[0]) for m in move)
    return sp.csr_matrix(
        sp.bmat([[top, spread[0], spread[1]], [move[0], one, None], [move[1], None, other]])
    )


@cache
def growth(step_factor: float, fault: str | None = None) -> Truth:
    """What a run at this step does. Raises KeyError for an unknown fault."""
    check_fault(fault, FAULTS)
    if fault is None:
        _omega, mode = waves.fastest(_matrix()[0])
        factor = waves.leapfrog_factor(step_factor)
        grid: NDArray[np.inexact[Any]] = mode.reshape(SHAPE)
        how = "largest eigenvalue of the symmetric operator, roots of the leapfrog polynomial"
    else:
        matrix = step_matrix(step_factor, fault)
        start = any_vector(matrix.shape[0])
        values, vectors = eigs(matrix, k=6, which="LM", v0=start, tol=1e-11)
        at = int(np.argmax(np.abs(values)))
        factor = float(np.abs(values[at]))
        grid = vectors[: SHAPE[0] * SHAPE[1], at].reshape(SHAPE)
        how = "sparse eigenvalues of the step's matrix"
    return Truth(factor, energy_box(grid), wavelength(grid), "h", how)


class BasinFiles(Output):
    """One ``basin_{step}.npz`` a snapshot: h, u, v (on their faces), step, time."""

    def write(self, state: State, step: int, time: float) -> None:
        def save(path: Path) -> None:
            with open(path, "wb") as file:
                values: dict[str, Any] = {"step": np.int64(step), "time": np.float64(time), **state}
                np.savez(file, **values)

        into_place(self.folder / f"basin_{step:07d}.npz", save)

    @staticmethod
    def read(path: Path) -> tuple[State, int, float]:
        with np.load(path, allow_pickle=False) as data:
            state = {name: data[name] for name in ("h", "u", "v")}
            return state, int(data["step"]), float(data["time"])


def build(step_factor: float, fault: str | None, folder: Path) -> Cast:
    """The basin at a step relative to its limit, half a metre of slosh."""
    check_fault(fault, FAULTS)
    dt = step_factor * limit_step()
    deep, mouth = face_depths(), _mouth(fault, dt)
    _, modes = waves.slowest(_matrix()[0], 3)
    modes = modes * np.sign(modes[np.abs(modes).argmax(axis=0), range(3)])
    mix = modes @ np.array([1.0, 0.5, 0.3])
    h = 0.5 * (mix / np.abs(mix).max()).reshape(SHAPE)
    start = {
        "h": h,
        # Velocities stand half a step behind the levels; at the top of the slosh they are small.
        "u": 0.5 * dt * GRAVITY * np.diff(h, axis=0) / SPACING,
        "v": 0.5 * dt * GRAVITY * np.diff(h, axis=1) / SPACING,
    }

    def step(state: State) -> State:
        h = state["h"]
        u = state["u"] - dt * GRAVITY * np.diff(h, axis=0) / SPACING
        v = state["v"] - dt * GRAVITY * np.diff(h, axis=1) / SPACING
        out = h.copy()
        flow = dt / SPACING * deep[0] * u
        out[:-1] -= flow
        out[1:] += flow
        flow = dt / SPACING * deep[1] * v
        out[:, :-1] -= flow
        out[:, 1:] += flow
        if mouth:
            out[:, 0] += mouth * (h[:, 0] - h[:, 1])
        return {"h": out, "u": u, "v": v}

    return Cast(dt, start, step, BasinFiles(folder))


SOLVER = Solver("basin", "waves in a harbour basin", build, EVERY, 2_400, FAULTS)

if __name__ == "__main__":
    raise SystemExit(march_main(SOLVER))
