"""Explicit time integrators, each given by the polynomials that one step applies.

A step takes the `levels` values that the method keeps to those after it by a small matrix of
polynomials in z = lambda dt (z = mu dt**2 for u_tt = mu u). Its eigenvalues are the roots of the
method's characteristic polynomial; the largest modulus is the growth of an error per step. Nothing
else is known of an integrator, so that symbol, matrix and time stepping cannot disagree.

Sources: one-step and multistep methods Hairer and Wanner 1996 (chapters IV.2 and V.1) and Durran
2010 (chapters 2 and 3); Runge-Kutta-Chebyshev Sommeijer, Shampine and Verwer 1998; filtered
leapfrog Asselin 1972; section numbers from memory.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from probes.limits.polynomials import (
    Apply,
    Chebyshev,
    Numbers,
    Polynomial,
    Powers,
    chebyshev_value,
    product,
    total,
)
from probes.limits.roots import cubic

Array = NDArray[np.float64]

# Rounding errors in the logarithm of a root's modulus; growth below it is none.
_ROOT_NOISE = 16.0 * float(np.finfo(np.float64).eps)
_STEP_NOISE = 8.0 * float(np.finfo(np.float64).eps)
_LOWEST = -745.0  # ln of the smallest positive number


@dataclass(frozen=True)
class Integrator:
    """One explicit method.

    name: as in settings. title: for people. blocks: (levels, levels) polynomials, row i of the new
    levels in terms of the old, newest first. time_order: 1 for u_t = L u, 2 for u_tt = L u.
    """

    name: str
    title: str
    blocks: tuple[tuple[Polynomial, ...], ...]
    time_order: int = 1

    @property
    def levels(self) -> int:
        """Time levels kept between two steps."""
        return len(self.blocks)

    @property
    def evaluations(self) -> int:
        """Evaluations of the right-hand side per step (values of earlier steps are kept)."""
        return self.blocks[0][0].degree

    def roots(self, z: Numbers) -> Numbers:
        """All roots of the characteristic polynomial at z: (levels, *z.shape)."""
        if self.levels == 1:
            return self.blocks[0][0].at(z)[None]
        if self.levels == 2:
            half, square = self._quadratic()
            middle, apart = half.at(z), np.sqrt(square.at(z))
            return np.stack([middle + apart, middle - apart])
        if self.levels == 3 and self.blocks[1:] == _SHIFT:
            return cubic(*(-entry.at(z) for entry in self.blocks[0]))
        matrices = np.empty((*z.shape, self.levels, self.levels), dtype=np.complex128)
        for i, row in enumerate(self.blocks):
            for j, entry in enumerate(row):
                matrices[..., i, j] = entry.at(z)
        return np.moveaxis(np.asarray(np.linalg.eigvals(matrices), dtype=np.complex128), -1, 0)

    def growth(self, z: Numbers) -> Array:
        """ln of the largest root modulus at z, same shape; exactly zero within rounding of it."""
        return self._logarithm(self._size(np.asarray(z, dtype=np.complex128)))

    def largest_growth(self, z: Numbers) -> Array:
        """The same, the largest along the first axis."""
        return self._logarithm(self._size(z).max(axis=0))

    def _size(self, z: Numbers) -> Array:
        """The largest root modulus; for one level its square less one, |R|**2 - 1 =
        2 Re q + |q|**2 with q = R - 1, which keeps its digits where R is near one."""
        if self.levels > 1:
            return np.asarray(np.abs(self.roots(z)).max(axis=0))
        q = self.blocks[0][0].less_one(z)
        twice, square = 2.0 * q.real, q.real**2 + q.imag**2
        out = twice + square
        np.abs(twice, out=twice)
        twice += square
        twice *= _STEP_NOISE
        out[np.abs(out) <= twice] = 0.0
        return np.asarray(out)

    def _logarithm(self, size: Array) -> Array:
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            if self.levels == 1:
                out = 0.5 * np.log1p(np.maximum(size, -1.0))
            else:
                out = np.log(size)
                out[np.abs(out) <= _ROOT_NOISE] = 0.0
        return np.asarray(np.maximum(out, _LOWEST))

    def advance(self, apply: Apply, state: NDArray[Any]) -> NDArray[Any]:
        """One step of state (levels, n, ...); apply: the product with dt L, or dt**2 L."""
        return self._blockwise(apply, state, transposed=False)

    def advance_transposed(self, apply: Apply, state: NDArray[Any]) -> NDArray[Any]:
        """The transposed step; apply: the product with the transposed dt L."""
        return self._blockwise(apply, state, transposed=True)

    def _blockwise(self, apply: Apply, state: NDArray[Any], transposed: bool) -> NDArray[Any]:
        out = np.zeros_like(state)
        for i, row in enumerate(self.blocks):
            for j, entry in enumerate(row):
                to, source = (j, i) if transposed else (i, j)
                if entry != _ZERO:
                    out[to] += entry.of(apply, state[source])
        return out

    def _quadratic(self) -> tuple[Powers, Powers]:
        """Half the trace and the discriminant of two-level blocks, as polynomials: their roots keep
        their digits near a double root."""
        (a, b), (c, d) = (tuple(_powers(p) for p in row) for row in self.blocks)
        half = total(_times(0.5, a), _times(0.5, d))
        determinant = total(product(a, d), _times(-1.0, product(b, c)))
        return Powers(half), Powers(total(product(half, half), _times(-1.0, determinant)))


def _times(by: float, c: Sequence[float]) -> tuple[float, ...]:
    return tuple(by * value for value in c)


def _powers(p: Polynomial) -> tuple[float, ...]:
    if not isinstance(p, Powers):
        raise TypeError("methods of several levels are given by powers")
    return p.c


_ZERO, _ONE = Powers((0.0,)), Powers((1.0,))
_SHIFT = ((_ONE, _ZERO, _ZERO), (_ZERO, _ONE, _ZERO))


def one_step(name: str, title: str, polynomial: Polynomial) -> Integrator:
    """A Runge-Kutta method by its stability polynomial."""
    return Integrator(name, title, ((polynomial,),))


def multistep(name: str, title: str, old: Sequence[float], slopes: Sequence[float]) -> Integrator:
    """u(n+1) = sum old[j] u(n-j) + dt sum slopes[j] f(u(n-j)), as a companion matrix."""
    k = len(slopes)
    first = tuple(Powers((a, b)) for a, b in zip(old, slopes, strict=True))
    below = tuple(tuple(_ONE if j == i else _ZERO for j in range(k)) for i in range(k - 1))
    return Integrator(name, title, (first, *below))


def taylor(name: str, title: str, order: int) -> Integrator:
    """Methods with as many stages as their order p <= 4: sum of z**k / k! up to k = p."""
    c, value = [1.0], 1.0
    for k in range(1, order + 1):
        value /= k
        c.append(value)
    return one_step(name, title, Powers(tuple(c)))


def filtered_leapfrog(gamma: float) -> Integrator:
    """Leapfrog whose middle level is filtered by gamma (u_old - 2 u + u_new) (Asselin 1972).

    The levels are u(n) and the filtered u(n-1); gamma = 0 is the plain leapfrog.
    """
    if gamma == 0.0:
        return multistep("leapfrog", "leapfrog", (0.0, 1.0), (2.0, 0.0))
    middle = Powers((1.0 - 2.0 * gamma, 2.0 * gamma))
    blocks = ((Powers((0.0, 2.0)), _ONE), (middle, Powers((2.0 * gamma,))))
    return Integrator("leapfrog", f"leapfrog, Robert-Asselin filter {gamma:g}", blocks)


def runge_kutta_chebyshev(stages: int, order: int, damping: float) -> Integrator:
    """First order T_s(w0 + w1 z) / T_s(w0), or second order a + b T_s(w0 + w1 z) (Sommeijer,
    Shampine and Verwer 1998), with w0 = 1 + damping / s**2.

    Raises ValueError for fewer stages than the order needs.
    """
    if stages < (2 if order == 2 else 1):
        raise ValueError("second order needs at least two stages, first order one")
    w0 = 1.0 + damping / stages**2
    t, first, second = chebyshev_value(stages, w0)
    if order == 1:
        polynomial = Chebyshev(0.0, 1.0 / t, w0, t / first, stages)
    else:
        b = second / first**2
        polynomial = Chebyshev(1.0 - b * t, b, w0, first / second, stages)
    title = f"Runge-Kutta-Chebyshev, {stages} stages, order {order}, damping {damping:.4g}"
    return one_step("rkc", title, polynomial)


def tableau(a: Sequence[Sequence[float]], b: Sequence[float]) -> Integrator:
    """An explicit Runge-Kutta method by its tableau: R(z) = 1 + sum z**k b A**(k-1) 1.

    a: (s, s), strictly lower triangular; b: (s,). Raises ValueError for other shapes.
    """
    weights = np.asarray(b, dtype=np.float64)
    s = weights.size
    stages = np.zeros((s, s))
    for i, row in enumerate(a):
        if i >= s or any(value != 0.0 for value in row[i:]):
            raise ValueError("the tableau must be square and zero on and above its diagonal")
        stages[i, : len(row)] = row[:s]
    c, ones = [1.0], np.ones(s)
    for _ in range(s):
        c.append(float(weights @ ones))
        ones = stages @ ones
    while len(c) > 1 and c[-1] == 0.0:
        c.pop()
    return one_step("tableau", f"the given tableau of {s} stages", Powers(tuple(c)))


def stability_polynomial(c: Sequence[float]) -> Integrator:
    """A one-step method by the coefficients of its stability polynomial, constant first.

    Raises ValueError unless it begins with one, as every consistent method does.
    """
    if len(c) < 2 or c[0] != 1.0:
        raise ValueError("a stability polynomial begins with 1 and has at least two coefficients")
    return one_step(
        "polynomial", f"the given polynomial of degree {len(c) - 1}", Powers(tuple(map(float, c)))
    )


# Methods without settings of their own. To add one, see DEVELOPERS.md.
CATALOGUE: dict[str, Integrator] = {
    m.name: m
    for m in (
        taylor("euler", "forward Euler", 1),
        taylor("midpoint", "explicit midpoint", 2),
        taylor("heun", "Heun, second order", 2),
        taylor("rk2", "Runge-Kutta, second order", 2),
        taylor("ssprk3", "SSP Runge-Kutta, third order", 3),
        taylor("rk3", "Runge-Kutta, third order", 3),
        taylor("rk4", "classical Runge-Kutta, fourth order", 4),
        multistep("ab2", "Adams-Bashforth, second order", (1.0, 0.0), (1.5, -0.5)),
        multistep(
            "ab3", "Adams-Bashforth, third order", (1.0, 0.0, 0.0), (23 / 12, -16 / 12, 5 / 12)
        ),
        filtered_leapfrog(0.0),
        Integrator(
            "verlet",
            "Stoermer-Verlet (central difference in time)",
            ((Powers((2.0, 1.0)), Powers((-1.0,))), (_ONE, _ZERO)),
            time_order=2,
        ),
    )
}
