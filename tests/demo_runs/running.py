"""Solvers by name, marched in this process."""

from __future__ import annotations

from pathlib import Path
from types import ModuleType

import numpy as np

from demo_runs import basin, channel, pipe, plate
from demo_runs.march import Array, State

SOLVERS: dict[str, ModuleType] = {
    "plate": plate,
    "basin": basin,
    "channel": channel,
    "pipe": pipe,
}
FAULTS = [(name, fault) for name, solver in SOLVERS.items() for fault in solver.FAULTS]


def flat(state: State) -> Array:
    """All fields of a state in one row."""
    return np.concatenate([values.ravel() for values in state.values()])


def shaped(values: Array, like: State) -> State:
    """The inverse of `flat`."""
    out, at = {}, 0
    for name, old in like.items():
        out[name] = values[at : at + old.size].reshape(old.shape)
        at += old.size
    return out


def measured(name: str, step_factor: float, fault: str, folder: Path, steps: int) -> float:
    """Growth per step of a small disturbance over the last quarter of so many steps."""
    cast = SOLVERS[name].build(step_factor, fault, folder)
    base = {field: np.zeros_like(values) for field, values in cast.state.items()}
    if name == "plate":
        base["T"] += plate.WALL  # stays as it is
    rng = np.random.default_rng(60_913)
    rest = flat(base)
    off = rng.standard_normal(rest.size)
    total = 0.0
    for step in range(steps):
        off = flat(cast.step(shaped(rest + off, base))) - rest
        size = float(np.linalg.norm(off))
        off *= 1e3 / size
        if step >= steps - steps // 4:
            total += np.log(size / 1e3)
    return float(np.exp(total / (steps // 4)))
