"""Linear waves on a staggered grid, shared by the basin (two dimensions) and the pipe (one).

p_t = -s div u, u_t = -r grad p with p in the cells and u on the faces, first u and then p a step
("forward-backward", the staggered leapfrog). Eliminating u gives
p(k+1) - 2 p(k) + p(k-1) = dt**2 L p(k) with L = s div r grad, which a scaling makes symmetric.
With omega**2 an eigenvalue of -L the factors solve z**2 - (2 - (omega dt)**2) z + 1 = 0: the limit
is dt = 2 / omega_max, and above it the largest mode grows by (f + sqrt(f**2 - 1))**2 a step
(Strikwerda 2004, section 8.2).
"""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import eigsh

from demo_runs.march import Array, any_vector


def gradient(shape: tuple[int, ...], spacing: float, axis: int) -> sp.csr_matrix:
    """Difference over the inner faces along an axis; nothing crosses the walls."""
    n = shape[axis]
    along = sp.diags([-1.0, 1.0], [0, 1], shape=(n - 1, n)) / spacing
    before = sp.identity(int(np.prod(shape[:axis])))
    after = sp.identity(int(np.prod(shape[axis + 1 :])))
    return sp.csr_matrix(sp.kron(sp.kron(before, along), after))


def operator(
    shape: tuple[int, ...], spacing: float, stiffness: Array, mobility: list[Array]
) -> tuple[sp.csr_matrix, Array]:
    """-L made symmetric: (cells, cells), 1/s2, and the scale with p = scale * eigenvector.

    stiffness: s per cell; mobility: r per inner face, by axis.
    """
    root = np.sqrt(stiffness.ravel())
    total = sp.csr_matrix((root.size, root.size))
    for axis, r in enumerate(mobility):
        g = gradient(shape, spacing, axis)
        total = total + g.T @ sp.diags(r.ravel()) @ g
    symmetric = sp.diags(root) @ total @ sp.diags(root)
    return sp.csr_matrix((symmetric + symmetric.T) / 2.0), root


def fastest(matrix: sp.csr_matrix) -> tuple[float, Array]:
    """omega_max and its mode."""
    values, vectors = eigsh(matrix, k=1, which="LM", v0=any_vector(matrix.shape[0]))
    return float(np.sqrt(values[0])), vectors[:, 0]


def slowest(matrix: sp.csr_matrix, count: int) -> tuple[Array, Array]:
    """The `count` slowest modes that move: (omega, vectors). The constant one is left out."""
    shift = -1e-3 * matrix.diagonal().max()
    values, vectors = eigsh(matrix, k=count + 1, sigma=shift, v0=any_vector(matrix.shape[0]))
    order = np.argsort(values)[1:]
    return np.sqrt(values[order]), vectors[:, order]


def leapfrog_factor(half_phase: float) -> float:
    """Largest root modulus for omega dt / 2: one up to the limit."""
    if half_phase <= 1.0:
        return 1.0
    return float((half_phase + np.sqrt(half_phase**2 - 1.0)) ** 2)
