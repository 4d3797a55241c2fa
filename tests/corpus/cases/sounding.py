"""Acoustic steps: second order in time, and pressure and velocity on staggered grids.

Both have the roots of z + 1/z = 2 - 4 s**2 with s = share of the limit (Courant number times the
root of the number of axes) times the root of the mean of sin(theta / 2)**2 over the axes, so that
at a share s > 1 the factor is (s + sqrt(s**2 - 1))**2 (LeVeque 2007, section 10.2.2, leapfrog).
"""

from __future__ import annotations

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Array
from tests.corpus.cases.diffusion import spread


def second_order(state: State, across: list[Array], r: float, periodic: bool) -> State:
    """Two levels (old, now): new = 2 now - old + r times the divergence of stiffness gradient."""
    old, now = state
    return [now, 2.0 * now - old + r * spread(now, across, periodic)]


def staggered(state: State, r: float, stiff: Array | float = 1.0) -> State:
    """Pressure in the cells and a velocity on the faces across each axis, periodic: velocities
    first, then the pressure with them. r: Courant number where `stiff` is one."""
    p = state[0]
    moved = [u - r * (np.roll(p, -1, a) - p) for a, u in enumerate(state[1:])]
    flow = sum(u - np.roll(u, 1, a) for a, u in enumerate(moved))
    return [p - r * stiff * flow, *moved]


def ring(shape: tuple[int, ...], centre: list[float], radius: float, width: float) -> Array:
    """A hump along a circle (sphere) about `centre`, on a periodic grid."""
    square = np.zeros(shape)
    for a, n in enumerate(shape):
        x = np.arange(n) - centre[a]
        x -= n * np.round(x / n)
        square = square + (x**2).reshape([-1 if b == a else 1 for b in range(len(shape))])
    return np.exp(-0.5 * ((np.sqrt(square) - radius) / width) ** 2)


def flat_top(shape: tuple[int, ...], centre: list[float], radius: float) -> Array:
    """One near `centre`, smoothly falling to zero at about `radius` cells."""
    square = np.zeros(shape)
    for a, n in enumerate(shape):
        x = np.arange(n) - centre[a]
        square = square + (x**2).reshape([-1 if b == a else 1 for b in range(len(shape))])
    return np.exp(-((square / radius**2) ** 2))


def ricker(n: int, centre: float, width: float) -> float:
    """A short pulse in time: second derivative of a bell, size one, switched on at five widths."""
    x = (n - centre) / width
    return float((1.0 - x * x) * np.exp(-0.5 * x * x)) if abs(x) < 5.0 else 0.0
