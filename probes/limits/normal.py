"""Steps of normal matrices: everything follows from the eigenvalues.

Where L is symmetric or antisymmetric in the scaled state, one method's step falls apart into a
small matrix P(z) for each eigenvalue z of dt L: its norms and powers are the largest of theirs.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.sparse as sp
from numpy.typing import NDArray

from probes.limits.integrators import Integrator

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_DENSE = 900
_SAMPLES = 4001
_SEED = 73_611
_LANCZOS = 200


@dataclass(frozen=True)
class Spectrum:
    """z: (values,) eigenvalues of dt L, all of them or samples between the outermost. edge: values
    that the outermost may reach at worst. all: whether z holds all of them.
    """

    z: Complex
    edge: Complex
    all: bool


def spectrum(matrix: sp.csr_array, sign: int) -> Spectrum:
    """Of a symmetric (sign 1) or antisymmetric (sign -1) dt L."""
    n = matrix.shape[0]
    turn = 1.0 if sign > 0 else 1.0j
    if n <= _DENSE:
        values = np.linalg.eigvalsh(matrix.toarray() / turn) * turn
        return Spectrum(values.astype(np.complex128), values.astype(np.complex128), True)
    if sign < 0:
        _, reach = lanczos(sp.csr_array(-(matrix @ matrix)))
        inside, outside = (np.sqrt(max(0.0, r)) for r in reach)
        z = np.asarray(1j * np.linspace(0.0, inside, _SAMPLES), dtype=np.complex128)
        return Spectrum(z, np.array([1j * outside], dtype=np.complex128), False)
    low, high = lanczos(matrix)
    z = np.linspace(low[0], high[0], _SAMPLES).astype(np.complex128)
    return Spectrum(z, np.array([low[1], high[1]], dtype=np.complex128), False)


def lanczos(matrix: sp.csr_array) -> tuple[tuple[float, float], tuple[float, float]]:
    """Both ends of a symmetric matrix's spectrum: (inside, outside) for the lowest and the highest.

    Inside are values that the quotients of vectors reach, so that the true ends lie beyond;
    outside the row sums' bounds (Gershgorin) or the residual's, whichever is closer.
    """
    n = matrix.shape[0]
    (low, low_residual), (high, high_residual) = lanczos_ends(n, matrix.__matmul__)
    ones = np.full(n, 1.0 / np.sqrt(n))
    smooth = float(ones @ (matrix @ ones))
    low, high = min(low, smooth), max(high, smooth)
    middle = matrix.diagonal()
    spread = np.asarray(abs(matrix).sum(axis=1)).ravel() - np.abs(middle)
    return (
        (low, max(float((middle - spread).min()), low - low_residual)),
        (high, min(float((middle + spread).max()), high + high_residual)),
    )


def lanczos_ends(
    n: int, apply: Callable[[Array], Array]
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Lowest and highest Ritz value of a symmetric map of (n,), each with its residual.

    Plain Lanczos iteration: without reorthogonalisation ends appear twice but stay right (Paige
    1980). The residual of a Ritz value is the last off-diagonal times its vector's last component.
    """
    v = np.random.default_rng(_SEED).standard_normal(n)
    v /= np.linalg.norm(v)
    before, beta = np.zeros(n), 0.0
    diagonal, off = [], []
    for _ in range(min(n, _LANCZOS)):
        w = apply(v)
        w = w - beta * before
        alpha = float(w @ v)
        w -= alpha * v
        beta = float(np.linalg.norm(w))
        diagonal.append(alpha)
        off.append(beta)
        if beta <= 1e-14 * abs(alpha):
            break
        before, v = v, w / beta
    values, vectors = scipy.linalg.eigh_tridiagonal(diagonal, off[:-1])
    residuals = off[-1] * np.abs(vectors[-1])
    return (float(values[0]), float(residuals[0])), (float(values[-1]), float(residuals[-1]))


def blocks(integrator: Integrator, z: Complex) -> Complex:
    """P(z): (values, levels, levels)."""
    out = np.empty((z.size, integrator.levels, integrator.levels), dtype=np.complex128)
    for i, row in enumerate(integrator.blocks):
        for j, entry in enumerate(row):
            out[:, i, j] = entry.at(z)
    return out


def powers(matrices: Complex, steps: int) -> tuple[float, int]:
    """max over values and k of the norm of P(z)**k, and its k: up to `steps`."""
    if matrices.shape[1] == 1:
        top = float(np.abs(matrices).max())
        if top <= 1.0:
            return 1.0, 0
        return float(np.exp(min(709.0, steps * np.log(top)))), steps
    best, at = 1.0, 0
    now = matrices
    for k in range(1, steps + 1):
        size = float(np.linalg.norm(now, 2, axis=(1, 2)).max())
        if size > best * (1.0 + 1e-9):
            best, at = size, k
        if best > 1e250:
            break
        now = now @ matrices
    return best, at
