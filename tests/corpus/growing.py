"""The growing part of a solver's state: by its unstable eigenvectors, or by a cleaner twin.

A linear step A splits the state into an unstable and a stable part. The unstable part is the
oblique projection V (W* V)^-1 W* of the state, where the columns of V and W span the right and left
invariant subspaces of the eigenvalues outside the unit circle (Golub and Van Loan, Matrix
Computations, section 7.6 in the fourth edition, from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import scipy.linalg
import scipy.sparse.linalg

from tests.corpus.assembly import State, Step, matrix_of, symbol_of

# Eigenvalues at most this far outside the circle count as on it.
CIRCLE = 1e-7
# Only what grows at least this share as fast as the fastest counts: upwind differences above their
# limit amplify every wave, also those that the run is about, by next to nothing.
_FAST = 0.25
# Matrices up to this size are decomposed whole.
_DENSE = 700


class WaveNumbers:
    """Growing part of a step with constant coefficients on a periodic grid, wave by wave.

    factor: largest modulus over the waves that fit on the grid. longest: waves that are longer, in
    cells along every axis, do not count: they grow by their physics.
    """

    def __init__(
        self, step: Step, shapes: Sequence[tuple[int, ...]], longest: float = math.inf
    ) -> None:
        symbol = symbol_of(step, shapes)
        if math.isfinite(longest):
            symbol[_long(shapes[0], longest)] = 0.0
        self._grid, self._m = symbol.shape[:-2], symbol.shape[-1]
        self._shape = shapes[0]
        flat = symbol.reshape(-1, self._m, self._m)
        values, vectors = np.linalg.eig(flat)
        self.factor = float(np.abs(values).max())
        growing = np.abs(values) > circle(self.factor)
        self.where = np.flatnonzero(growing.any(axis=1))
        v = vectors[self.where]
        self._projections = (v * growing[self.where][:, None, :]) @ np.linalg.inv(v)

    def part(self, state: State) -> State:
        waves = np.array([np.fft.rfftn(np.asarray(a, dtype=np.float64)) for a in state])
        flat = waves.reshape(self._m, -1)
        kept = np.zeros_like(flat)
        kept[:, self.where] = np.einsum("kij,jk->ik", self._projections, flat[:, self.where])
        axes = tuple(range(len(self._shape)))
        return [np.fft.irfftn(k.reshape(self._grid), self._shape, axes=axes) for k in kept]


def _long(shape: tuple[int, ...], longest: float) -> np.ndarray:
    """Where, on the grid of rfftn, a wave is longer than so many cells along every axis."""
    *others, last = shape
    turns = [np.abs(np.fft.fftfreq(n)) for n in others] + [np.fft.rfftfreq(last)]
    grid = np.meshgrid(*turns, indexing="ij")
    return np.max(grid, axis=0) < 1.0 / longest


class Subspace:
    """Growing part of a linear (or affine) step by the invariant subspaces of its matrix.

    reach: cells that the step reaches along an axis. symmetric: whether the matrix is. most: of
    unstable eigenvalues looked for in matrices that are too large to be decomposed whole; raises
    ValueError where they are more.
    """

    def __init__(
        self,
        step: Step,
        shapes: Sequence[tuple[int, ...]],
        reach: int = 1,
        periodic: bool = False,
        symmetric: bool = False,
        most: int = 40,
    ) -> None:
        self._shapes = list(shapes)
        matrix = matrix_of(step, shapes, reach, periodic)
        if matrix.shape[0] <= _DENSE:
            self.factor, v, w = _whole(matrix.toarray())
        else:
            self.factor, v, w = _leading(matrix, most, symmetric)
        self.unstable = v.shape[1]
        self._right = v @ np.linalg.inv(w.conj().T @ v) if self.unstable else v
        self._left = w.conj().T

    def part(self, state: State) -> State:
        flat = np.concatenate([np.asarray(a, dtype=np.float64).ravel() for a in state])
        grown = (self._right @ (self._left @ flat)).real
        cuts = np.cumsum([math.prod(s) for s in self._shapes])[:-1]
        return [g.reshape(s) for g, s in zip(np.split(grown, cuts), self._shapes, strict=True)]


def circle(factor: float) -> float:
    """Modulus above which an eigenvalue belongs to the growing part, given the largest one."""
    return max(1.0 + CIRCLE, factor**_FAST)


def _whole(a: np.ndarray) -> tuple[float, np.ndarray, np.ndarray]:
    """Bases from ordered Schur forms, which stay accurate where eigenvectors nearly coincide."""
    factor = float(np.abs(scipy.linalg.eigvals(a)).max())
    edge = circle(factor)

    def outside(x: float, y: float = 0.0) -> bool:
        return bool(np.hypot(x, y) > edge)

    _, v, count = scipy.linalg.schur(a, output="real", sort=outside)
    w = scipy.linalg.schur(a.T, output="real", sort=outside)[1]
    return factor, v[:, :count], w[:, :count]


def _leading(
    a: scipy.sparse.csr_matrix, most: int, symmetric: bool
) -> tuple[float, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(7)
    start = rng.standard_normal(a.shape[0])
    if symmetric:
        values, v = scipy.sparse.linalg.eigsh(a, k=most, which="SA", v0=start, tol=1e-12)
        others, w = values, v
    else:
        values, v = scipy.sparse.linalg.eigs(a, k=most, which="LM", v0=start, tol=1e-12)
        # x with A^T x = l x has x^T A = l x^T: the rows wanted are x^T, not its conjugate.
        others, w = scipy.sparse.linalg.eigs(a.T, k=most, which="LM", v0=start, tol=1e-12)
        w = w.conj()
    factor = float(np.abs(values).max())
    if (np.abs(values) > circle(factor)).all():
        raise ValueError(f"more than {most} growing modes")
    return factor, v[:, np.abs(values) > circle(factor)], w[:, np.abs(others) > circle(factor)]


class Swings:
    """Growing part of new = 2 now - old + L now on levels (old, now) with a symmetric L, whose
    eigenvalues below -4 grow: the roots of z + 1/z = 2 + l come in pairs z, 1/z, and each
    eigenvector's share of the growing one is (z now - old) / (z - 1/z)."""

    def __init__(
        self,
        operator: Step,
        shape: tuple[int, ...],
        reach: int = 1,
        periodic: bool = False,
        most: int = 40,
    ) -> None:
        self._shape = shape
        matrix = matrix_of(operator, [shape], reach, periodic)
        start = np.random.default_rng(7).standard_normal(matrix.shape[0])
        values, vectors = scipy.sparse.linalg.eigsh(matrix, k=most, which="SA", v0=start, tol=1e-12)
        half = np.minimum(1.0 + 0.5 * values, -1.0)
        roots = half - np.sqrt(half * half - 1.0)
        self.factor = float(np.abs(roots).max())
        growing = np.abs(roots) > circle(self.factor)
        if growing.all():
            raise ValueError(f"more than {most} growing modes")
        self._roots, self._vectors = roots[growing], vectors[:, growing]

    def part(self, state: State) -> State:
        old, now = (self._vectors.T @ np.asarray(a, dtype=np.float64).ravel() for a in state)
        z = self._roots
        share = (z * now - old) / (z - 1.0 / z)
        return [(self._vectors @ s).reshape(self._shape) for s in (share / z, share)]


class Twin:
    """Growing part as the difference to a twin: the same steps in extended precision, whose
    rounding errors are two thousand times smaller, or another step that is stable."""

    def __init__(self, state: State, dtype: type = np.longdouble) -> None:
        self.state = [np.asarray(a, dtype=dtype) for a in state]

    def step(self, step: Step) -> None:
        self.state = step(self.state)

    def part(self, state: State) -> State:
        return [np.asarray(a - b, dtype=np.float64) for a, b in zip(state, self.state, strict=True)]
