"""Which waves are tried: sets of phases per cell that meet the worst one closely enough."""

from __future__ import annotations

from itertools import product

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# Long waves: some limits are reached only as the wavelength goes to infinity (forward-time central
# advection and diffusion), to second order in these angles.
LONGEST = 1e-4
_LONG = (LONGEST, 1e-3, 1e-2)
# Points per axis of the tensor grid over the half space, and along each line through the origin.
_TENSOR = {1: 181, 2: 25, 3: 9}
_LINE = {1: 0, 2: 61, 3: 33}


def candidates(axes: int) -> Array:
    """(axes, waves) for a search: a tensor grid, finer lines along axes and diagonals, and long
    waves in many directions. Real coefficients make opposite waves alike: half of them is enough.
    """
    half = np.linspace(0.0, np.pi, _TENSOR[axes])
    whole = np.concatenate([-half[1:-1][::-1], half])
    grids = [_tensor([half] + [whole] * (axes - 1))]
    directions = [np.array(d, dtype=np.float64) for d in product((0, 1, -1), repeat=axes)]
    directions = [d for d in directions if d.any() and d[d != 0][0] > 0]
    line = np.linspace(0.0, np.pi, _LINE[axes] + 1)[1:]
    grids += [np.outer(d, line) for d in directions]
    grids += [size * _unit(grids[0]) for size in _LONG]
    return np.unique(np.concatenate(grids, axis=1), axis=1)


def few(axes: int) -> Array:
    """(axes, waves) for a map over many cells: 74 in one, 130 in two, 300 in three dimensions."""
    half = np.linspace(0.0, np.pi, {1: 73, 2: 13, 3: 7}[axes])
    coarse = {1: half, 2: half[::2], 3: half[::2]}[axes]
    whole = np.concatenate([-coarse[1:-1][::-1], coarse])
    grids = [_tensor([coarse] + [whole] * (axes - 1))]
    directions = [np.array(d, dtype=np.float64) for d in product((0, 1, -1), repeat=axes)]
    directions = [d for d in directions if d.any() and d[d != 0][0] > 0]
    grids += [np.outer(d, half[1:]) for d in directions]
    grids += [1e-3 * _unit(grids[0])]
    return np.unique(np.round(np.concatenate(grids, axis=1), 12), axis=1)


def around(wave: Array, reach: float) -> Array:
    """The wave (axes,) and its neighbours at +- reach times its own size per axis: (axes, 3**axes).

    Angles stay between -pi and pi, and waves shorter than the longest that is tried.
    """
    size = reach * max(float(np.abs(wave).max()), LONGEST)
    moves = np.array(list(product((0.0, -1.0, 1.0), repeat=wave.size))).T
    near = np.clip(wave[:, None] + size * moves, -np.pi, np.pi)
    return np.asarray(near[:, (np.abs(near).max(axis=0) >= LONGEST) | (size * moves == 0).all(0)])


def _tensor(axes: list[Array]) -> Array:
    return np.array([a.ravel() for a in np.meshgrid(*axes, indexing="ij")])


def _unit(angles: Array) -> Array:
    size = np.sqrt((angles**2).sum(axis=0))
    return np.asarray(angles[:, size > 0.0] / size[size > 0.0])
