"""Polynomials of a complex number and of a linear operator: what one explicit step applies.

An explicit step multiplies u by polynomials of dt L. A polynomial here can be evaluated at arrays
of numbers z = lambda dt and be applied to a vector through a function that does the product with
dt L. Being polynomials of one operator, their transposes are the same polynomials of its transpose.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

Numbers = NDArray[np.complex128]
Vector = NDArray[Any]
Apply = Callable[[Vector], Vector]


class Polynomial(Protocol):
    """What an integrator is made of."""

    @property
    def degree(self) -> int:
        """Evaluations of the right-hand side."""

    def at(self, z: Numbers) -> Numbers:
        """Values at z, any shape."""

    def less_one(self, z: Numbers) -> Numbers:
        """Values minus one, without cancellation at small z where the constant is one."""

    def of(self, apply: Apply, v: Vector) -> Vector:
        """The polynomial of the operator behind `apply`, times v."""


@dataclass(frozen=True, slots=True)
class Powers:
    """c[0] + c[1] z + c[2] z**2 + ..."""

    c: tuple[float, ...]

    @property
    def degree(self) -> int:
        return len(self.c) - 1

    def at(self, z: Numbers) -> Numbers:
        return _horner(self.c, z)

    def less_one(self, z: Numbers) -> Numbers:
        return _horner((self.c[0] - 1.0, *self.c[1:]), z)

    def of(self, apply: Apply, v: Vector) -> Vector:
        out = self.c[-1] * v
        for c in reversed(self.c[:-1]):
            out = apply(out)
            if c:
                out = out + c * v
        return out


@dataclass(frozen=True, slots=True)
class Chebyshev:
    """a + b T_s(w0 + w1 z), evaluated by the three-term recurrence, stable for many stages."""

    a: float
    b: float
    w0: float
    w1: float
    s: int

    @property
    def degree(self) -> int:
        return self.s

    def at(self, z: Numbers) -> Numbers:
        x = self.w0 + self.w1 * z
        before, now = np.ones_like(x), x
        for _ in range(self.s - 1):
            before, now = now, 2.0 * x * now - before
        return np.asarray(self.a + self.b * now)

    def less_one(self, z: Numbers) -> Numbers:
        """By differences from the value at z = 0, where the polynomial is one: with
        T_j(x) - T_j(w0) = e_j and x - w0 = w1 z the recurrence is
        e_{j+1} = 2 x e_j - e_{j-1} + 2 w1 z T_j(w0)."""
        x = self.w0 + self.w1 * z
        base, level = 1.0, self.w0
        before, now = np.zeros_like(x), self.w1 * z
        for _ in range(self.s - 1):
            before, now = now, 2.0 * x * now - before + (2.0 * level) * (self.w1 * z)
            base, level = level, 2.0 * self.w0 * level - base
        return np.asarray(self.b * now)

    def of(self, apply: Apply, v: Vector) -> Vector:
        before, now = v, self.w0 * v + self.w1 * apply(v)
        for _ in range(self.s - 1):
            before, now = now, 2.0 * (self.w0 * now + self.w1 * apply(now)) - before
        return self.a * v + self.b * now


def chebyshev_value(s: int, x: float) -> tuple[float, float, float]:
    """T_s(x), T_s'(x), T_s''(x) by their recurrences."""
    t0, t1 = 1.0, x
    d0, d1 = 0.0, 1.0
    e0, e1 = 0.0, 0.0
    for _ in range(s - 1):
        t0, t1, d0, d1, e0, e1 = (
            t1,
            2.0 * x * t1 - t0,
            d1,
            2.0 * t1 + 2.0 * x * d1 - d0,
            e1,
            4.0 * d1 + 2.0 * x * e1 - e0,
        )
    return t1, d1, e1


def product(one: Sequence[float], other: Sequence[float]) -> tuple[float, ...]:
    """Coefficients of the product of two polynomials in powers."""
    return tuple(float(c) for c in np.convolve(one, other))


def total(*parts: Sequence[float]) -> tuple[float, ...]:
    """Coefficients of the sum."""
    size = max(len(p) for p in parts)
    return tuple(float(sum(p[i] for p in parts if i < len(p))) for i in range(size))


def _horner(c: Sequence[float], z: Numbers) -> Numbers:
    out = np.full_like(z, c[-1])
    for value in reversed(c[:-1]):
        out *= z
        if value:
            out += value
    return out
