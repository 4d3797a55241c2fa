"""Smooth states to start from in extended precision.

A twin that starts from numbers rounded to double precision would share the seed of what grows, and
both would grow it.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Array

PI = 4.0 * np.arctan(np.longdouble(1.0))


def places(shape: tuple[int, ...]) -> list[Array]:
    """Coordinates in [0, 1) of a periodic grid, along each axis, as arrays of the grid."""
    along = [np.arange(n, dtype=np.longdouble) / n for n in shape]
    return list(np.meshgrid(*along, indexing="ij"))


def waves(shape: tuple[int, ...], rng: np.random.Generator, most: int = 3, terms: int = 4) -> Array:
    """A few long waves with random directions and phases, size about one."""
    x = places(shape)
    out = np.zeros(shape, dtype=np.longdouble)
    for _ in range(terms):
        turns = rng.integers(1, most + 1, size=len(shape))
        phase = rng.uniform(0.0, 6.0)
        out += np.cos(2.0 * PI * sum(int(t) * a for t, a in zip(turns, x, strict=True)) + phase)
    return out * 2.0 / terms


def hump(shape: tuple[int, ...], centre: Sequence[float], width: float) -> Array:
    """A smooth periodic hump: exp of a cosine along each axis; centre and width in cells."""
    out = np.zeros(shape, dtype=np.longdouble)
    for a, n, c in zip(places(shape), shape, centre, strict=True):
        sharp = (n / (2.0 * PI * width)) ** 2
        out += sharp * (np.cos(2.0 * PI * (a - c / n)) - 1.0)
    return np.exp(out)


def double(state: State) -> State:
    """The same in double precision: where the run itself starts."""
    return [a.astype(np.float64) for a in state]
