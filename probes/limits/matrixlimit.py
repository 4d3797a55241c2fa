"""The largest step for an assembled scheme with its boundaries, from the eigenvalues of L.

Eigenvalues alone do not make a non-normal step stable (upwind differences with an inflow would be
allowed twice the Courant number): take the smaller of this and the symbol's.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray
from scipy.sparse.linalg import ArpackNoConvergence, eigs

from probes.limits.assemble import Operator
from probes.limits.axes import first_crossing
from probes.limits.integrators import Integrator
from probes.limits.normal import Spectrum, spectrum
from probes.limits.radius import eigen
from probes.limits.records import Found
from probes.limits.stepping import SchemeStep
from probes.limits.structure import groups
from probes.limits.vonneumann import OWN

Complex = NDArray[np.complex128]

_DENSE = 900
_EPS = float(np.finfo(np.float64).eps)
_NEUTRAL = 1e-2
_SEED = 73_611
# Eigenvalues that rounding moves by more than this share of the largest give no limit.
_WORTHLESS = 1e-3


def largest_step(
    operators: Sequence[Operator], own_growth: float = 0.0, forward_backward: bool = False
) -> Found:
    """Largest dt up to which no eigenvalue grows faster than exp(own_growth dt).

    forward_backward: the operator is the first-order system of a staggered leapfrog, whose method
    sees the squares of its eigenvalues.
    """
    if len(operators) > 1 or operators[0].late is not None:
        return Found.none("split steps and Lax-Wendroff have no eigenvalues apart from their step")
    step = SchemeStep(operators, 1.0)
    integrator = operators[0].integrator
    if step.normal is not None:
        found = spectrum(*step.normal)
        if forward_backward:
            found = Spectrum(found.z**2, found.edge**2, found.all)
        limit = crossing(integrator, found.z, own_growth)
        if found.all or limit.value is None:
            return limit
        worst = crossing(integrator, np.append(found.z, found.edge), own_growth)
        return Found(worst.value, worst.value, limit.value, worst.reason)
    if groups(step.pattern())[0].size == 1:
        return crossing(integrator, operators[0].matrix.diagonal().astype(complex), own_growth)
    if step.unknowns > _DENSE:
        return _outermost(integrator, operators[0].matrix, own_growth, forward_backward)
    matrix = step.dense()
    return of_matrix(integrator, matrix @ matrix if forward_backward else matrix, own_growth)


def of_matrix(
    integrator: Integrator, matrix: NDArray[np.float64], own_growth: float = 0.0
) -> Found:
    """The same for a dense L (n, n), which need not be normal."""
    values, left, right = eigen(matrix)
    overlap = np.abs((left.conj() * right).sum(axis=0))
    size = float(np.linalg.norm(matrix, 2))
    if size == 0.0:
        return Found.none("nothing in the matrix limits the step")
    doubt = 4.0 * _EPS * size / max(float(overlap.min()), _EPS**2)
    if doubt > _WORTHLESS * float(np.abs(values).max()):
        return Found.none(
            f"rounding moves the eigenvalues by {doubt / size:.1e} of the matrix's norm"
        )
    # Real parts within rounding are zero: waves that nothing damps.
    values.real[np.abs(values.real) <= 64.0 * doubt] = 0.0
    return crossing(integrator, values, own_growth)


def crossing(integrator: Integrator, values: Complex, own_growth: float) -> Found:
    """Largest dt for eigenvalues of L (values,)."""
    fastest = float(np.abs(values).max(initial=0.0))
    if fastest == 0.0:
        return Found.none("nothing in the matrix limits the step")
    scale = fastest ** (1.0 / integrator.time_order)

    def growth(dt: float) -> float:
        return float(integrator.growth(values * dt**integrator.time_order).max())

    def stable(dt: float) -> bool:
        return growth(dt) <= own_growth * dt * OWN

    dt = first_crossing(stable, 1e-6 / scale, 1e9 / scale)
    if dt is None:
        return Found.none("no eigenvalue grows at any step tried")
    worst = values[
        int(np.argmax(integrator.growth(values * (1.001 * dt) ** integrator.time_order)))
    ]
    neutral = float(np.abs(worst)) ** (1.0 / integrator.time_order) * dt <= _NEUTRAL
    if dt == 0.0 or (neutral and growth(0.5 * dt) == 0.0):
        return Found.exactly(0.0, 0.0, "an eigenvalue grows at any step, however small")
    return Found.exactly(dt, 1e-9 * dt)


def _outermost(
    integrator: Integrator, matrix: sp.csr_array, own_growth: float, squared: bool
) -> Found:
    """From a few eigenvalues of largest modulus and of largest real part: others may be stricter,
    but for explicit methods the far ends of the spectrum mostly decide."""
    start = np.random.default_rng(_SEED).standard_normal(matrix.shape[0])
    found = []
    for which in ("LM", "LR"):
        try:
            values: Any = eigs(
                matrix, k=6, which=which, ncv=60, v0=start, tol=1e-9, maxiter=200,
                return_eigenvectors=False,
            )  # fmt: skip
        except ArpackNoConvergence as error:
            values = error.eigenvalues
        found.append(np.asarray(values, dtype=np.complex128))
    if not found[0].size:
        return Found.none("the outermost eigenvalues did not settle")
    values = np.concatenate(found)
    limit = crossing(integrator, values**2 if squared else values, own_growth)
    if limit.value is None:
        return limit
    return Found(limit.value, None, limit.value, "from the outermost eigenvalues only")
