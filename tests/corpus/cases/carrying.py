"""Advection steps on periodic grids, nu being velocity times step over cell size per axis.

Symbols are in LeVeque 2007, chapter 10; they are tested against these steps.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from tests.corpus.assembly import State, Step, symbol_of
from tests.corpus.case import Array

Nu = float | Array


def shifted(u: Array, cells: int, axis: int = 0) -> Array:
    """Value `cells` to the right along an axis, periodic."""
    return np.roll(u, -cells, axis)


def upwind(u: Array, nus: Sequence[Nu]) -> Array:
    """First order, looking to the left along every axis whatever the sign of nu."""
    return u - sum(nu * (u - shifted(u, -1, a)) for a, nu in enumerate(nus))


def upwind_either_side(u: Array, nus: Sequence[Nu]) -> Array:
    """First order, looking to where the flow comes from."""
    out = u.copy()
    for a, nu in enumerate(nus):
        out -= np.maximum(nu, 0.0) * (u - shifted(u, -1, a))
        out -= np.minimum(nu, 0.0) * (shifted(u, 1, a) - u)
    return out


def central(u: Array, nu: Nu, r: float = 0.0) -> Array:
    """Forward Euler and central differences in one dimension; r: diffusion number."""
    left, right = shifted(u, -1), shifted(u, 1)
    return u - 0.5 * nu * (right - left) + r * (right - 2.0 * u + left)


def lax_wendroff(u: Array, nu: Nu) -> Array:
    """Second order in one dimension (constant nu, or slowly varying)."""
    left, right = shifted(u, -1), shifted(u, 1)
    return u - 0.5 * nu * (right - left) + 0.5 * nu * nu * (right - 2.0 * u + left)


def third_order(u: Array, nu: float) -> Array:
    """Third-order upwind-biased differences, three Runge-Kutta stages of the third order."""

    def slope(v: Array) -> Array:
        return -nu / 6.0 * (2.0 * shifted(v, 1) + 3.0 * v - 6.0 * shifted(v, -1) + shifted(v, -2))

    one = slope(u)
    two = slope(u + 0.5 * one)
    three = slope(u - one + 2.0 * two)
    return u + (one + 4.0 * two + three) / 6.0


def leapfrog(state: State, nu: float, r: float) -> State:
    """Two levels (old, now); the diffusion stands at the middle time, where it is unstable."""
    old, now = state
    left, right = shifted(now, -1), shifted(now, 1)
    return [now, old - nu * (right - left) + 2.0 * r * (right - 2.0 * now + left)]


def limit_of(step: Callable[[float], Step], low: float, high: float, cells: int = 96) -> float:
    """Largest nu in [low, high] up to which no wave on a grid grows, by bisection."""
    for _ in range(40):
        middle = 0.5 * (low + high)
        factor = float(np.abs(np.linalg.eigvals(symbol_of(step(middle), [(cells,)]))).max())
        low, high = (middle, high) if factor <= 1.0 + 1e-9 else (low, middle)
    return low


def packet(n: int, centre: float, width: float, theta: float) -> Array:
    """A wave packet: carrier of `theta` radians per cell under a bell of `width` cells."""
    x = np.arange(n, dtype=float)
    return np.exp(-0.5 * ((x - centre) / width) ** 2) * np.cos(theta * (x - centre))


def bell(shape: tuple[int, ...], centre: Sequence[float], width: float) -> Array:
    """A smooth hump, size one, periodic."""
    out = np.zeros(shape)
    for a, n in enumerate(shape):
        x = np.arange(n) - centre[a]
        x -= n * np.round(x / n)
        out = out + (0.5 * (x / width) ** 2).reshape(
            [-1 if b == a else 1 for b in range(len(shape))]
        )
    return np.exp(-out)
