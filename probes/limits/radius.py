"""The spectral radius of a step, with its doubt.

An eigenvalue is known to about its condition number times rounding (Golub and Van Loan 2013,
section 7.2.2). Where that is as large as the radius itself, none is given: a permuted copy of the
same matrix would give another one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, cast

import numpy as np
import scipy.linalg
import scipy.sparse as sp
from numpy.typing import NDArray
from scipy.sparse.linalg import ArpackError, ArpackNoConvergence, LinearOperator, eigs

from probes.limits.normal import spectrum
from probes.limits.records import Found
from probes.limits.stepping import ForwardBackward, MatrixStep, SchemeStep, Step, dense
from probes.limits.structure import groups

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

DENSE = 900
_EPS = float(np.finfo(np.float64).eps)
# An eigenvalue that rounding moves by more than this share of the radius is worthless.
_WORTHLESS = 0.02
_SEED = 73_611


@dataclass(frozen=True)
class Radius:
    """value: the spectral radius. condition: of its eigenvalue, 1 for a normal matrix, None if not
    known. vector: (size,) of the mode, None where the structure gave the answer. how: the method.
    """

    value: Found
    condition: float | None = None
    vector: NDArray[np.complex128] | None = None
    how: str = ""


def spectral_radius(step: Step) -> Radius:
    """By structure, by dense or by sparse eigenvalues, whichever applies first."""
    if isinstance(step, SchemeStep | MatrixStep) and groups(step.pattern())[0].size == 1:
        return _single(step)
    if isinstance(step, ForwardBackward) and (squares := step.squares()) is not None:
        return _waves(step, squares)
    if step.size <= DENSE:
        return _dense(dense(step))
    return _sparse(step)


def _single(step: SchemeStep | MatrixStep) -> Radius:
    """Every unknown is a group of its own: the step of one unknown alone gives its factors."""
    how = "structure: influence goes one way only, so the factors are those of each cell alone"
    if isinstance(step, MatrixStep):
        value = float(np.abs(step.matrix.diagonal()).max())
    else:
        value = float(np.exp(step.diagonal_growth().max()))
    return Radius(Found.exactly(value, 4.0 * _EPS * max(1.0, value)), None, None, how)


def _waves(step: ForwardBackward, squares: sp.csr_array) -> Radius:
    """The frequencies of a staggered leapfrog are the eigenvalues of a symmetric matrix."""
    found = spectrum(squares, 1)
    inner = float(np.exp(step.integrator.growth(found.z).max()))
    outer = float(np.exp(step.integrator.growth(np.append(found.z, found.edge)).max()))
    how = "all frequencies" if found.all else "the highest frequency"
    return Radius(Found(inner, inner, outer), None, None, f"{how}, by symmetry")


def _dense(matrix: Array) -> Radius:
    values, left, right = eigen(matrix)
    worst = int(np.argmax(np.abs(values)))
    value = float(abs(values[worst]))
    overlap = float(abs(np.vdot(left[:, worst], right[:, worst])))
    size = float(np.linalg.norm(matrix, 2))
    condition = float(1.0 / overlap) if overlap > 0.0 else np.inf
    error = 4.0 * _EPS * size * condition
    # The same matrix with its unknowns in another order has the same eigenvalues.
    order = np.random.default_rng(_SEED).permutation(matrix.shape[0])
    other = float(np.abs(np.linalg.eigvals(matrix[np.ix_(order, order)])).max())
    error = max(error, abs(other - value))
    how = "all eigenvalues"
    if not error <= _WORTHLESS * max(value, 1e-3):
        return Radius(_declined(condition, value, other), condition, None, how)
    return Radius(Found.exactly(value, error), condition, right[:, worst].astype(complex), how)


def eigen(matrix: Array) -> tuple[Complex, Complex, Complex]:
    """Eigenvalues with left and right eigenvectors of unit length, in columns."""
    values, left, right = cast(
        tuple[Complex, Complex, Complex], scipy.linalg.eig(matrix, left=True, right=True)
    )
    return values, left, right


def _declined(condition: float, value: float, other: float) -> Found:
    return Found.none(
        f"rounding decides it: the eigenvalue's condition number is {condition:.1e}, and the same "
        f"matrix gives {value:.4g} in one order of its unknowns and {other:.4g} in another"
    )


def _sparse(step: Step) -> Radius:
    """ARPACK for the mode and, where the transpose is known, for its condition."""
    how = "outermost eigenvalues, sparse iteration"
    try:
        value, vector = outermost(step.size, step.forward)
    except ArpackError:
        return Radius(Found.none("the iteration did not settle"), None, None, how)
    moved = step.forward(vector.real) + 1j * step.forward(vector.imag)
    residual = float(np.linalg.norm(moved - value * vector))
    try:
        _, left = outermost(step.size, step.back, towards=value.conjugate())
    except (NotImplementedError, ArpackError):
        reason = "lower bound: the eigenvalue's condition is not known"
        return Radius(Found(abs(value), None, None, reason), None, vector, how)
    overlap = float(abs(np.vdot(left, vector)))
    condition = float(1.0 / overlap) if overlap > 0.0 else np.inf
    error = condition * (residual + 4.0 * _EPS * abs(value))
    if not error <= _WORTHLESS * abs(value):
        reason = (
            f"rounding decides it: the eigenvalue's condition number is {condition:.1e}, its "
            f"residual {residual:.1e}"
        )
        return Radius(Found.none(reason), condition, None, how)
    return Radius(Found.exactly(abs(value), error), condition, vector, how)


def outermost(
    size: int, apply: Callable[[Array], Array], towards: complex | None = None
) -> tuple[complex, NDArray[np.complex128]]:
    """An eigenvalue of largest modulus and its vector; of several of equal modulus the one nearest
    to `towards`. Raises ArpackError where the iteration does not settle."""
    operator = LinearOperator((size, size), matvec=lambda v: apply(v.ravel()), dtype=np.float64)
    start = np.random.default_rng(_SEED).standard_normal(size)
    values: Any
    vectors: Any
    try:
        values, vectors = eigs(operator, k=6, which="LM", v0=start, ncv=40, tol=1e-8, maxiter=60)
    except ArpackNoConvergence as error:
        # Crowded eigenvalues never settle all; those that have are eigenvalues all the same.
        values, vectors = error.eigenvalues, error.eigenvectors
        if not len(values):
            raise
    if towards is None:
        at = int(np.argmax(np.abs(values)))
    else:
        at = int(np.argmin(np.abs(values - towards)))
    return complex(values[at]), np.asarray(vectors[:, at], dtype=np.complex128)
