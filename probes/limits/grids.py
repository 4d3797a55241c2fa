"""Difference matrices on a box of cells with boundaries.

Boundaries per axis and end: "periodic", "dirichlet" (a node of value zero one cell beyond the last
one; wider stencils see the field mirrored there with the opposite sign) or "neumann" (no flux; the
field is mirrored at the cell's face).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import scipy.linalg
import scipy.sparse as sp
from numpy.typing import NDArray

from probes.errors import SettingsError
from probes.limits.stencils import First, Second

Array = NDArray[np.float64]
Indices = NDArray[np.intp]
Ends = tuple[str, str]
Boundary = Literal["periodic", "dirichlet", "neumann"]

BOUNDARIES: tuple[Boundary, ...] = ("periodic", "dirichlet", "neumann")
# Compact and spectral derivatives couple all cells of a line.
_DENSE_LINE = 1024


@dataclass(frozen=True)
class Box:
    """shape: cells per axis. ends: boundary at both ends of each axis."""

    shape: tuple[int, ...]
    ends: tuple[Ends, ...]

    def __post_init__(self) -> None:
        for axis, pair in enumerate(self.ends):
            for end in pair:
                if end not in BOUNDARIES:
                    known = ", ".join(BOUNDARIES)
                    raise SettingsError(
                        f"is {end!r}", f"boundary of axis {axis}", f"known are {known}"
                    )
            if (pair[0] == "periodic") != (pair[1] == "periodic"):
                raise SettingsError("one end cannot be periodic alone", f"boundary of axis {axis}")

    @property
    def size(self) -> int:
        return int(np.prod(self.shape))

    @property
    def periodic(self) -> bool:
        return all(pair[0] == "periodic" for pair in self.ends)


def shift(n: int, by: int, ends: Ends) -> sp.csr_array:
    """(E u)(j) = u(j + by): (n, n), with the boundaries' rules beyond the ends."""
    target = np.arange(n) + by
    sign = np.ones(n)
    if ends[0] == "periodic":
        target %= n
    while ((target < 0) | (target >= n)).any():
        low, high = target < 0, target >= n
        for out, end, node, mirror in (
            (low, ends[0], -1, -2),
            (high, ends[1], n, 2 * n),
        ):
            if end == "dirichlet":
                sign[out & (target == node)] = 0.0
                target[out & (target == node)] = 0 if node < 0 else n - 1
                beyond = out & ((target < node) | (target > node)) & ((target < 0) | (target >= n))
                sign[beyond] *= -1.0
                target[beyond] = mirror - target[beyond]
            else:
                mirrored = -1 if node < 0 else 2 * n - 1
                target[out] = mirrored - target[out]
    matrix = sp.csr_array((sign, (np.arange(n), target)), shape=(n, n))
    matrix.eliminate_zeros()
    return matrix


def first_derivative(stencil: First, n: int, ends: Ends) -> sp.csr_array:
    """On unit spacing, without the upwind part."""
    if stencil.spectral or stencil.implicit:
        return sp.csr_array(_line(stencil, n, ends))
    total = sp.csr_array((n, n))
    for k, weight in enumerate(stencil.odd, 1):
        total = total + weight * (shift(n, k, ends) - shift(n, -k, ends))
    return sp.csr_array(total)


def upwind_part(stencil: First, n: int, ends: Ends) -> sp.csr_array:
    """What |a| is multiplied by, on unit spacing."""
    order, weight = stencil.damping
    return -weight * _even(order, n, ends) if order else sp.csr_array((n, n))


def second_derivative(stencil: Second, n: int, ends: Ends) -> sp.csr_array:
    """On unit spacing."""
    if stencil.spectral:
        return sp.csr_array(_spectral_line(n, ends, 2))
    total = sp.csr_array((n, n))
    for order, weight in enumerate(stencil.even, 1):
        total = total - weight * _even(order, n, ends)
    return sp.csr_array(total)


def along(matrix: sp.csr_array, box: Box, axis: int) -> sp.csr_array:
    """A matrix of one axis, applied along it on the whole box."""
    before = sp.eye_array(int(np.prod(box.shape[:axis])))
    after = sp.eye_array(int(np.prod(box.shape[axis + 1 :])))
    return sp.csr_array(sp.kron(sp.kron(before, matrix), after))


def faces(box: Box, axis: int) -> tuple[Indices, Indices]:
    """Cells before and after every face along an axis, -1 where a fixed end lies beyond it. Faces
    of ends without flux are left out."""
    number = np.moveaxis(np.arange(box.size).reshape(box.shape), axis, 0)
    beyond = np.full_like(number[:1], -1)
    low, high = [number[:-1]], [number[1:]]
    if box.ends[axis][0] == "periodic":
        low.append(number[-1:])
        high.append(number[:1])
    if box.ends[axis][0] == "dirichlet":
        low.insert(0, beyond)
        high.insert(0, number[:1])
    if box.ends[axis][1] == "dirichlet":
        low.append(number[-1:])
        high.append(beyond)
    # Faces are numbered like cells, the last axis fastest.
    one, other = (np.moveaxis(np.concatenate(part), 0, axis) for part in (low, high))
    return one.ravel(), other.ravel()


def face_difference(box: Box, axis: int) -> sp.csr_array:
    """u after minus u before each face: (faces, cells)."""
    low, high = faces(box, axis)
    rows = np.arange(low.size)
    entries = [(rows[c >= 0], c[c >= 0], s) for c, s in ((low, -1.0), (high, 1.0))]
    data = np.concatenate([np.full(r.size, s) for r, _, s in entries])
    row = np.concatenate([r for r, _, _ in entries])
    column = np.concatenate([c for _, c, _ in entries])
    return sp.csr_array((data, (row, column)), shape=(low.size, box.size))


def on_faces(values: Array, box: Box, axis: int, mean: str) -> Array:
    """Values of cells (cells,) averaged to the faces; at fixed ends the inner cell's own."""
    low, high = faces(box, axis)
    one = values[np.where(low >= 0, low, high)]
    other = values[np.where(high >= 0, high, low)]
    if mean == "arithmetic":
        return np.asarray(0.5 * (one + other))
    total = one + other
    return np.divide(2.0 * one * other, total, out=np.zeros_like(total), where=total != 0.0)


def _even(order: int, n: int, ends: Ends) -> sp.csr_array:
    """(minus the second difference) to the power `order`, as one stencil."""
    weights: Sequence[float] = [1.0]
    for _ in range(order):
        weights = np.convolve(weights, [-1.0, 2.0, -1.0]).tolist()
    total = sp.csr_array((n, n))
    for k, weight in enumerate(weights):
        total = total + weight * shift(n, k - order, ends)
    return sp.csr_array(total)


def _line(stencil: First, n: int, ends: Ends) -> Array:
    if stencil.spectral:
        return _spectral_line(n, ends, 1)
    _check_line(n)
    right = First("", stencil.odd)
    left = sp.eye_array(n) + stencil.implicit * (shift(n, 1, ends) + shift(n, -1, ends))
    return np.asarray(np.linalg.solve(left.toarray(), first_derivative(right, n, ends).toarray()))


def _spectral_line(n: int, ends: Ends, order: int) -> Array:
    """Exact derivative of all waves the periodic line holds; the first one of the shortest wave is
    taken as zero (Trefethen 2000, chapter 3)."""
    if ends[0] != "periodic":
        raise SettingsError(
            "spectral derivatives need periodic ends", "boundary", "or choose another stencil"
        )
    _check_line(n)
    theta = 2.0 * np.pi * np.fft.fftfreq(n)
    symbol = (1j * theta) ** order
    if order % 2 and n % 2 == 0:
        symbol[n // 2] = 0.0
    return np.asarray(scipy.linalg.circulant(np.fft.ifft(symbol).real))


def _check_line(n: int) -> None:
    if n > _DENSE_LINE:
        raise SettingsError(
            f"{n} cells in a line are too many to assemble this stencil",
            "cells",
            f"take at most {_DENSE_LINE}: its symbol does not depend on their number",
        )
