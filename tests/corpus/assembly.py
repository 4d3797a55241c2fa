"""Matrices and symbols of solvers, found by applying their own step to unit vectors.

So the truth rests on what the solver does, not on what its author believes that it does; that the
symbols are those of the textbooks is tested.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterator, Sequence

import numpy as np
import scipy.sparse

from tests.corpus.case import Array

State = list[Array]
Step = Callable[[State], State]


def symbol_of(step: Step, shapes: Sequence[tuple[int, ...]]) -> np.ndarray:
    """Amplification matrices of a linear step with constant coefficients on a periodic grid.

    shapes: of the state's arrays, all equal. Returns (*rfft grid, m, m) complex for m arrays.
    """
    shape, m = shapes[0], len(shapes)
    rows = []
    for j in range(m):
        state = [np.zeros(shape) for _ in range(m)]
        state[j][(0,) * len(shape)] = 1.0
        rows.append([np.fft.rfftn(a) for a in step(state)])
    # rows[j][i] is what array j puts into array i.
    return np.moveaxis(np.array(rows), (0, 1), (-1, -2))


def matrix_of(
    step: Step, shapes: Sequence[tuple[int, ...]], reach: int, periodic: bool
) -> scipy.sparse.csr_matrix:
    """Matrix of a linear or affine step whose stencil reaches `reach` cells along each axis.

    Unit vectors whose stencils do not meet are applied together (Curtis, Powell and Reid 1974).
    """
    shape = shapes[0]
    sizes = [math.prod(s) for s in shapes]
    starts = np.concatenate([[0], np.cumsum(sizes)])
    constant = step([np.zeros(s) for s in shapes])
    rows, columns, values = [], [], []
    for j, own in enumerate(shapes):
        for comb in _combs(own, reach, periodic):
            state = [np.zeros(s) for s in shapes]
            state[j][comb] = 1.0
            nearest = _nearest(comb, own, shape, reach, periodic)
            for i, (after, before) in enumerate(zip(step(state), constant, strict=True)):
                change = after - before
                where = np.nonzero(change)
                source = nearest[where] if change.shape == nearest.shape else None
                if source is None:
                    source = _nearest(comb, own, change.shape, reach, periodic)[where]
                rows.append(starts[i] + np.ravel_multi_index(where, change.shape))
                columns.append(starts[j] + source)
                values.append(change[where])
    size = int(starts[-1])
    entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    return scipy.sparse.csr_matrix(entries, shape=(size, size))


def _combs(shape: tuple[int, ...], reach: int, periodic: bool) -> Iterator[tuple[np.ndarray, ...]]:
    """Index grids of unit vectors that may be applied together."""
    apart = 2 * reach + 2
    teeth = []
    for n in shape:
        whole = n // apart * apart if periodic else n
        along = [np.arange(first, whole, apart) for first in range(min(apart, n))]
        along += [np.array([k]) for k in range(whole, n)]
        teeth.append([t for t in along if t.size])
    for choice in itertools.product(*teeth):
        yield np.ix_(*choice)


def _nearest(
    comb: tuple[np.ndarray, ...],
    own: tuple[int, ...],
    shape: tuple[int, ...],
    reach: int,
    periodic: bool,
) -> np.ndarray:
    """For every cell of `shape`, the flat index (in `own`) of the comb's nearest tooth."""
    along = []
    for axis, teeth in enumerate(comb):
        tooth = teeth.ravel()
        cells = np.arange(shape[axis])
        distance = np.abs(cells[:, None] - tooth[None, :])
        if periodic:
            distance = np.minimum(distance, own[axis] - distance)
        along.append(tooth[np.argmin(distance, axis=1)])
    return np.ravel_multi_index(np.ix_(*along), own)
