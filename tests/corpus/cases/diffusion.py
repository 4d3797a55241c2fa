"""The diffusive step that several families share, in one to three dimensions."""

from __future__ import annotations

import numpy as np

from tests.corpus.case import Array


def faces(conductivity: Array, periodic: bool) -> list[Array]:
    """Conductivity on the faces across each axis, the mean of the cells on both sides; at the ends
    of a grid that is not periodic that of the cell (n + 1 faces)."""
    out = []
    for axis in range(conductivity.ndim):
        if periodic:
            out.append(0.5 * (conductivity + np.roll(conductivity, -1, axis)))
            continue
        wide = [(0, 0)] * conductivity.ndim
        wide[axis] = (1, 1)
        padded = np.pad(conductivity, wide, mode="edge")
        n = conductivity.shape[axis]
        low, high = np.arange(n + 1), np.arange(1, n + 2)
        out.append(0.5 * (np.take(padded, low, axis) + np.take(padded, high, axis)))
    return out


def spread(u: Array, across: list[Array], periodic: bool, edge: float = 0.0) -> Array:
    """Divergence of conductivity times gradient, in units of the cell size squared.

    across: from `faces`. Outside a grid that is not periodic the value is `edge`.
    """
    out = np.zeros_like(u)
    for axis, k in enumerate(across):
        if periodic:
            flux = k * (np.roll(u, -1, axis) - u)
            out += flux - np.roll(flux, 1, axis)
        else:
            wide = [(0, 0)] * u.ndim
            wide[axis] = (1, 1)
            padded = np.pad(u, wide, constant_values=edge)
            out += np.diff(k * np.diff(padded, axis=axis), axis=axis)
    return out


def bump(shape: tuple[int, ...], rng: np.random.Generator, waves: int = 3) -> Array:
    """A smooth periodic field of a few long waves with random phases, size about one."""
    grid = np.meshgrid(*[np.arange(n) / n for n in shape], indexing="ij")
    out = np.zeros(shape)
    for _ in range(4):
        turns = rng.integers(1, waves + 1, size=len(shape))
        phase = rng.uniform(0.0, 2.0 * np.pi)
        out += np.cos(2.0 * np.pi * sum(t * x for t, x in zip(turns, grid, strict=True)) + phase)
    return out / 2.0


def dome(shape: tuple[int, ...], rng: np.random.Generator) -> Array:
    """A smooth field that vanishes at the edge of the grid, size about one."""
    out = np.ones(shape)
    for axis, n in enumerate(shape):
        x = (np.arange(n) + 1.0) / (n + 1.0)
        profile = np.sin(np.pi * x) * (1.0 + rng.uniform(-0.4, 0.4) * x)
        out *= profile.reshape([-1 if a == axis else 1 for a in range(len(shape))])
    return out


def block(
    shape: tuple[int, ...], rng: np.random.Generator, width: tuple[int, int], least: float = 0.0
) -> tuple[slice, ...]:
    """A box somewhere inside the grid, four cells off its edge and beyond a share `least` of it, as
    wide as `width` allows."""
    cut = []
    for n in shape:
        w = int(rng.integers(width[0], width[1] + 1))
        lo = int(rng.integers(4 + int(least * n), n - w - 3))
        cut.append(slice(lo, lo + w))
    return tuple(cut)
