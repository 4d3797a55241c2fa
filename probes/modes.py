"""Rayleigh-Ritz on difference sketches: what multiplies the differences from one to the next.

For a linear scheme the differences d(k) of successive snapshots obey d(k+1) = B d(k), B the
amplification over one stride. The last differences span a Krylov space; restricted to it, B is a
small matrix whose eigenvalues (Ritz values) approach the outer eigenvalues of B (Saad 2011,
chapter 6; Schmid 2010 for the snapshot form). A random projection keeps them (Brunton, Proctor and
Kutz 2015). Noise biases plain least squares towards decay; the total-least-squares form used here
does not (Hemati, Rowley, Deem and Cattafesta 2017).

A small residual says that the growth can go on for about ln(1 / residual) / ln|mu| snapshots, not
that B is unstable: a non-normal B gives tiny residuals for transient growth (Trefethen and Embree
2005, chapter 26).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class RitzPair:
    """One Ritz value (per snapshot) with its vector as combination of the difference sketches.

    value: mu; residual: |B v - mu v| / |v| as far as the window can tell.
    weights: (differences,) complex: the Ritz vector is D @ weights, scaled so that it (with its
        conjugate, for a complex pair) is its part in the *last* difference.
    size: norm of that part. share: of the last difference's norm.
    """

    value: complex
    residual: float
    weights: Complex
    size: float
    share: float

    def vectors(self, differences: Array) -> Array:
        """Real basis of the pair's plane: (n, 1) for a real value, (n, 2) for a complex pair."""
        v = differences @ self.weights
        if abs(self.value.imag) <= 1e-9 * abs(self.value):
            return v.real[:, None]
        return np.column_stack([v.real, v.imag])


def ritz_pairs(differences: Array, noise: float = 0.0) -> list[RitzPair]:
    """Ritz pairs of the map between the columns of `differences` (n, r + 1), r >= 1, equal strides.

    noise: expected norm of rounding noise in one column; directions below it are dropped.
    Returns pairs by decreasing size, one of each complex conjugate pair. An empty list means that
    nothing stands above the noise or that values are not finite.
    """
    scale = float(np.abs(differences).max(initial=0.0))
    if scale == 0.0 or not math.isfinite(scale):
        return []
    r = np.asarray(np.linalg.qr(differences / scale, mode="r"))
    steps = r.shape[1] - 1
    before, after = r[:, :-1], r[:, 1:]
    sizes, right = np.linalg.svd(np.vstack([before, after]))[1:]
    keep = int((sizes > max(2.0 * noise / scale, 1e-11 * sizes[0])).sum())
    keep = min(keep, steps)
    if keep == 0:
        return []
    basis = right[:keep].T
    x, y = before @ basis, after @ basis
    u, s, vt = np.linalg.svd(x, full_matrices=False)
    rank = int((s > 1e-12 * s[0]).sum()) if s[0] > 0 else 0
    if rank == 0:
        return []
    u, s, vt = u[:, :rank], s[:rank], vt[:rank]
    back = vt.T / s
    values, vectors = np.linalg.eig(u.T @ y @ back)
    ritz = u @ vectors
    moved = y @ back @ vectors
    with np.errstate(over="ignore", invalid="ignore"):
        # Growth by more than 1e154 between two snapshots leaves no residual to be told.
        residuals = np.linalg.norm(moved - values * ritz, axis=0) / np.linalg.norm(ritz, axis=0)
    part = np.linalg.lstsq(ritz, r[:, -1].astype(complex), rcond=None)[0]
    whole = float(np.linalg.norm(r[:, -1]))
    combine = basis @ back @ vectors
    out = []
    for j, mu in enumerate(values):
        if mu.imag < 0.0 or not math.isfinite(residuals[j]):
            continue
        pair = 2.0 if mu.imag > 0.0 else 1.0
        vector = pair * part[j] * ritz[:, j]
        size = float(np.linalg.norm(vector.real))
        weights = np.append(pair * part[j] * combine[:, j], 0.0)
        out.append(
            RitzPair(
                complex(mu),
                float(residuals[j]),
                weights,
                size * scale,
                size / whole if whole else 0.0,
            )
        )
    return sorted(out, key=lambda p: -p.size)


def likeness(one: Array, other: Array) -> float:
    """Mean squared cosine of the canonical angles between two column spaces, 0 to 1.

    one, other: (n, k) with k of 1 or 2. For single vectors the squared cosine of their angle.
    0 where either has no direction.
    """
    if min(np.abs(one).max(initial=0.0), np.abs(other).max(initial=0.0)) == 0.0:
        return 0.0
    a = np.linalg.qr(one / np.abs(one).max())[0]
    b = np.linalg.qr(other / np.abs(other).max())[0]
    cosines = np.linalg.svd(a.T @ b, compute_uv=False)
    return float((cosines**2).sum() / min(a.shape[1], b.shape[1]))


def size_in_field(size: float, value: complex, doubt: float) -> float | None:
    """Size of a mode in the field from its size in the last difference: |mu| / |mu - 1| times it.

    With u = ... + c mu**k v the difference is c mu**(k-1) (mu - 1) v. None where |mu - 1| is within
    `doubt`, the uncertainty of mu.
    """
    gap = abs(value - 1.0)
    return size * abs(value) / gap if gap > doubt else None
