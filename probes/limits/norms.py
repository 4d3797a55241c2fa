"""Norms of one step: two-norm, numerical radius, and Kreiss's constant.

The two-norm at most 1: no state ever grows in it. The numerical radius w <= 1: powers stay below 2
(Berger's theorem; Horn and Johnson 1991, section 1.7). Kreiss's constant K: some power reaches at
least K (Trefethen and Embree 2005, chapter 18). Chapters from memory.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray
from scipy.optimize import minimize, minimize_scalar

from probes.limits.normal import lanczos_ends
from probes.limits.records import Found
from probes.limits.stepping import Step, dense

Array = NDArray[np.float64]

_DENSE = 900
_RANGE = 300  # unknowns up to which the numerical radius and Kreiss's constant are computed
_ANGLES = 64
_EPS = float(np.finfo(np.float64).eps)


def two_norm(step: Step) -> Found:
    """Largest singular value."""
    if step.size <= _DENSE:
        value = float(np.linalg.norm(dense(step), 2))
        return Found.exactly(value, 8.0 * _EPS * value)

    def square(v: Array) -> Array:
        return step.back(step.forward(v))

    try:
        _, (value, residual) = lanczos_ends(step.size, square)
    except NotImplementedError:
        return Found.none("needs the step's transpose, which a step function does not give")
    root = float(np.sqrt(value))
    return Found(root, root, float(np.sqrt(value + residual)))


def numerical_radius(matrix: Array) -> Found:
    """max over |x| = 1 of |x^H A x|: the largest eigenvalue of the Hermitian part of
    exp(i angle) A over all angles (Horn and Johnson 1991, section 1.5)."""
    n = matrix.shape[0]
    if n > _RANGE:
        return Found.none(f"computed up to {_RANGE} unknowns only")

    def reach(angle: float) -> float:
        turned = np.exp(1j * angle) * matrix
        part = 0.5 * (turned + turned.conj().T)
        return float(scipy.linalg.eigvalsh(part, subset_by_index=[n - 1, n - 1])[0])

    # A real matrix has a range symmetric about the real axis: half the angles are enough.
    angles = np.linspace(0.0, np.pi, _ANGLES + 1)
    values = [reach(a) for a in angles]
    at = angles[int(np.argmax(values))]
    width = np.pi / _ANGLES
    best = minimize_scalar(lambda a: -reach(a), bounds=(at - width, at + width), method="bounded")
    value = max(float(np.max(values)), -float(best.fun))
    return Found.exactly(value, 1e-8 * value)


def kreiss(matrix: Array) -> Found:
    """Lower bound of sup over |z| > 1 of (|z| - 1) times the norm of (z - A)**-1, from points.

    A lower bound of the constant, hence of the largest power. Infinite for a radius above one.
    """
    n = matrix.shape[0]
    if n > _RANGE:
        return Found.none(f"computed up to {_RANGE} unknowns only")
    triangle, _ = scipy.linalg.schur(matrix, output="complex")
    if float(np.abs(np.diag(triangle)).max()) > 1.0 + 1e-9:
        return Found.none("infinite: the radius is above one")
    eye = np.eye(n)

    def height(logarithm: float, angle: float) -> float:
        away = float(np.exp(logarithm))
        z = (1.0 + away) * np.exp(1j * angle)
        smallest = np.linalg.svd(z * eye - triangle, compute_uv=False)[-1]
        return away / max(float(smallest), np.finfo(np.float64).tiny)

    # A far point gives 1, so that the bound is never below it.
    found = [
        (height(logarithm, angle), logarithm, angle)
        for logarithm in np.linspace(np.log(1e-3), np.log(3.0), 12)
        for angle in np.linspace(0.0, np.pi, 17)
    ]
    top, logarithm, angle = max(found)
    better: Any = minimize(
        lambda x: -np.log(height(x[0], x[1])),
        np.array([logarithm, angle], dtype=np.float64),
        method="Nelder-Mead",
        options={"maxiter": 60, "xatol": 1e-4, "fatol": 1e-5},
    )  # type: ignore[call-overload]
    value = max(1.0, top, float(np.exp(-better.fun)))
    return Found(value, value, None, "a lower bound from points outside the circle")
