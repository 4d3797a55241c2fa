"""Finite-difference stencils on unit spacing and what they make of a wave exp(i theta j).

A first derivative becomes i d(theta), a second one -m(theta). Even symbols are given in powers of
x = 4 sin(theta / 2)**2, so that they keep their digits for long waves.

Sources: explicit stencils Fornberg 1988 (weights) and Durran 2010 (section 3.3); upwind-biased
stencils of third and fifth order as in Hirsch 2007 and Wang and Spiteri 2007 (linearised WENO5: the
optimal weights); compact fourth order Lele 1992, equation 2.1.6; staggered fourth order Levander
1988. Section numbers from memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class First:
    """A first derivative.

    odd: weights of u(j + k) - u(j - k), k = 1, 2, ... implicit: the same for the tridiagonal
    left side's off-diagonals (compact stencils), 0 for none. spectral: exact for all waves.
    damping: (m, coefficient) of the upwind part: |a| times coefficient times the 2m-th difference
    with the sign that damps; (0, 0) for central stencils.
    """

    name: str
    odd: tuple[float, ...] = ()
    implicit: float = 0.0
    spectral: bool = False
    damping: tuple[int, float] = (0, 0.0)

    def phase(self, theta: Array) -> Array:
        """d(theta), odd."""
        if self.spectral:
            return theta
        value = sum(2.0 * w * np.sin(k * theta) for k, w in enumerate(self.odd, 1))
        return np.asarray(value / (1.0 + 2.0 * self.implicit * np.cos(theta)))

    def loss(self, theta: Array) -> Array:
        """Damping of the upwind part per unit of |a|, not negative."""
        order, weight = self.damping
        return np.asarray(weight * square(theta) ** order if order else np.zeros_like(theta))


@dataclass(frozen=True)
class Second:
    """A second derivative: -m(theta), m = even[0] x + even[1] x**2 + ..., or theta**2."""

    name: str
    even: tuple[float, ...] = ()
    spectral: bool = False

    def size(self, theta: Array) -> Array:
        """m(theta), not negative."""
        if self.spectral:
            return theta**2
        x = square(theta)
        return np.asarray(sum(w * x**k for k, w in enumerate(self.even, 1)))


@dataclass(frozen=True)
class Half:
    """A first derivative on faces halfway: weights of u(j + k - 1/2) - u(j - k + 1/2)."""

    name: str
    odd: tuple[float, ...] = ()
    spectral: bool = False

    def phase(self, theta: Array) -> Array:
        """2 sin(theta / 2) for the two-point stencil; odd."""
        if self.spectral:
            return theta
        parts = (2.0 * w * np.sin((k - 0.5) * theta) for k, w in enumerate(self.odd, 1))
        return np.asarray(sum(parts))


def square(theta: Array) -> Array:
    """4 sin(theta / 2)**2."""
    return np.asarray(4.0 * np.sin(0.5 * theta) ** 2)


FIRST = {
    s.name: s
    for s in (
        First("central2", (0.5,)),
        First("central4", (2 / 3, -1 / 12)),
        First("upwind1", (0.5,), damping=(1, 0.5)),
        First("upwind3", (2 / 3, -1 / 12), damping=(2, 1 / 12)),
        First("weno5", (3 / 4, -3 / 20, 1 / 60), damping=(3, 1 / 60)),
        First("compact4", (0.75,), implicit=0.25),
        First("spectral", spectral=True),
    )
}
SECOND = {
    s.name: s
    for s in (
        Second("central2", (1.0,)),
        Second("central4", (1.0, 1 / 12)),
        Second("spectral", spectral=True),
    )
}
HALF = {
    s.name: s
    for s in (
        Half("central2", (1.0,)),
        Half("central4", (27 / 24, -1 / 24)),
        Half("spectral", spectral=True),
    )
}
