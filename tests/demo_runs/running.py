"""Solvers by name, marched in this process."""

from __future__ import annotations

from functools import cache
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
UNUSED = Path("nothing-is-written-here")
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


@cache
def twins(name: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Two runs at 1.02 whose starts differ by a rounding: (steps, rms difference over the field's
    range at every snapshot below 1e-4, the last difference)."""
    solver = SOLVERS[name]
    truth = solver.growth(1.02)
    cast = solver.build(1.02, None, UNUSED)
    rng = np.random.default_rng(33_941)
    one = cast.state
    other = {k: v * (1.0 + 2e-16 * rng.integers(-1, 2, v.shape)) for k, v in one.items()}
    scale = np.ptp(one[truth.field])
    steps, levels = [], []
    off = np.zeros_like(one[truth.field])
    for step in range(1, 2_000):
        one, other = cast.step(one), cast.step(other)
        if step % solver.EVERY == 0:
            latest = one[truth.field] - other[truth.field]
            level = np.sqrt(np.mean(latest**2)) / scale
            if level > 1e-4:
                break
            off = latest
            steps.append(step)
            levels.append(level)
    return np.array(steps), np.array(levels), off
