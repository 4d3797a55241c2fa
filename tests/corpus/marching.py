"""How cases march: which steps are stored, and the loop from snapshot to snapshot."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from typing import Protocol

import numpy as np

from tests.corpus.assembly import State, Step
from tests.corpus.case import Fields
from tests.corpus.growing import Twin
from tests.corpus.recording import Recorder
from tests.corpus.storing import spacing

MOST_SNAPSHOTS = 400
# A case takes about two seconds at most: so many cells are advanced in that time.
_MOST_STEPS = 60_000


class Splits(Protocol):
    """What tells the growing part of a state."""

    def part(self, state: State) -> State: ...


def uniform(rng: np.random.Generator, low: float, high: float) -> float:
    return float(rng.uniform(low, high))


def pick(rng: np.random.Generator, low: int, high: int) -> int:
    """An integer from low to high, both included."""
    return int(rng.integers(low, high + 1))


def cadence(rng: np.random.Generator, factor: float, store: str = "f8", views: int = 40) -> int:
    """Steps between snapshots so that about `views` of them lie between the rounding of the stored
    numbers and a thousandth of the field, 1 to 100."""
    folds = max(3.0, math.log(1e-3 / max(spacing(store), 1e-14)))
    wanted = folds / (math.log(factor) * views * uniform(rng, 0.8, 1.25))
    return max(1, min(100, round(wanted)))


def even(stride: int, count: int, first: int = 0) -> list[int]:
    """Steps of `count` snapshots, `stride` apart."""
    return [first + k * stride for k in range(min(count, MOST_SNAPSHOTS))]


def uneven(rng: np.random.Generator, stride: int, count: int, spread: float = 0.5) -> list[int]:
    """Steps of snapshots that are written by the clock on the wall: gaps vary by `spread`."""
    gaps = np.rint(stride * rng.uniform(1.0 - spread, 1.0 + spread, size=count - 1))
    return [0, *np.cumsum(np.maximum(1, gaps)).astype(int).tolist()]


def march(
    recorder: Recorder,
    state: State,
    step: Callable[[State, int], State],
    steps: Iterable[int],
    names: Sequence[str | None],
    dt: float | Callable[[int], float] = 1.0,
    growing: Splits | None = None,
    since: int = 0,
    twin_step: Callable[[State, int], State] | None = None,
    view: Callable[[State], Fields] | None = None,
    judged: Sequence[str] | None = None,
) -> State:
    """Advance `state` and store it at the given steps; returns the last state.

    step(state, n): from step n to n + 1. names: of the state's arrays in the files (None: not
    stored). growing: splits the state, from step `since` on; a `Twin` is advanced along, by
    `twin_step` if given. view: makes the stored fields, where they are not the arrays themselves.
    judged: fields whose growing part counts (default: all that are stored).
    """

    def named(of: State) -> Fields:
        return {n: a for n, a in zip(names, of, strict=True) if n is not None}

    n, time = 0, 0.0
    with np.errstate(all="ignore"):
        for wanted in steps:
            while n < wanted:
                state = step(state, n)
                if isinstance(growing, Twin):
                    growing.state = (twin_step or step)(growing.state, n)
                time += dt(n) if callable(dt) else dt
                n += 1
            part = None
            if growing is not None and n >= since:
                part = named(growing.part(state))
                part = {k: v for k, v in part.items() if judged is None or k in judged}
            if not recorder.take(n, time, view(state) if view else named(state), part):
                break
    return state


def frozen(step: Step) -> Callable[[State, int], State]:
    """A step that does not change from one to the next."""
    return lambda state, n: step(state)
