"""Terms of an evolution equation with their space discretisation and coefficients.

Each term becomes pieces: a coefficient (a number or one per cell) times a function of the wave's
angles. `Rate` pieces add up to lambda of u_t = lambda u, `late` ones are multiplied by dt once more
(Lax-Wendroff), `square` ones add up to omega**2 of u_tt = -omega**2 u.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from probes.limits.stencils import FIRST, HALF, SECOND, First, Second, square

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]
Angles = Array  # (axes, waves)
Coefficient = float | Array
Mean = Literal["harmonic", "arithmetic", "cell"]
Role = Literal["rate", "late", "square"]


@dataclass(frozen=True)
class Piece:
    """coefficient times symbol(angles); exact: what the equation itself makes of the wave, None
    where that adds nothing to its growth."""

    role: Role
    coefficient: Coefficient
    symbol: Callable[[Angles], Array | Complex]
    exact: Callable[[Angles], Array] | None = None


@dataclass(frozen=True)
class Advection:
    """u_t + a . grad u = 0. velocity: one coefficient per axis. stencil: a key of FIRST, or
    "lax-wendroff" (with forward Euler)."""

    velocity: tuple[Coefficient, ...]
    stencil: str = "central2"
    name: str = "advection"


@dataclass(frozen=True)
class Diffusion:
    """u_t = div(k grad u). coefficient: for all axes, or a tuple with one per axis. mean: of k on
    the faces, used by the assembled matrix only."""

    coefficient: Coefficient | tuple[Coefficient, ...]
    stencil: str = "central2"
    mean: Mean = "harmonic"
    name: str = "diffusion"


@dataclass(frozen=True)
class Waves:
    """u_tt = c**2 div grad u, or its first-order system p_t = -c div v, v_t = -c grad p.

    form: "second-order", "staggered" (velocities on the faces) or "collocated". mean: "cell" puts
    c**2 before the divergence, the others average c**2 to the faces, inside of it.
    """

    speed: Coefficient
    form: Literal["second-order", "staggered", "collocated"] = "staggered"
    stencil: str = "central2"
    mean: Mean = "cell"
    name: str = "wave"


@dataclass(frozen=True)
class Reaction:
    """u_t = r u (u_tt = r u with a method for second-order equations). rate: r; negative decays."""

    rate: Coefficient
    name: str = "reaction"


@dataclass(frozen=True)
class Bending:
    """u_t = -b lap lap u, or u_tt = -b lap lap u; three-point stencils, applied twice."""

    coefficient: Coefficient
    form: Literal["first-order", "second-order"] = "first-order"
    name: str = "bending"


@dataclass(frozen=True)
class Stencil:
    """u_t(j) = c times the sum of weights[k] u(j + offsets[k]). offsets: (points, axes) integers;
    weights already hold the spacing."""

    offsets: tuple[tuple[int, ...], ...]
    weights: tuple[float, ...]
    coefficient: Coefficient = 1.0
    name: str = "stencil"


@dataclass(frozen=True)
class System:
    """u_t + sum A[a] du/dx[a] = S u for m fields. matrices: (axes, m, m); source: (m, m).

    Upwind stencils use |A| of each axis's matrix, which must have real eigenvalues.
    """

    matrices: tuple[Array, ...]
    source: Array
    stencil: str = "central2"
    name: str = "system"


Term = Advection | Diffusion | Waves | Reaction | Bending | Stencil | System
Spacing = Sequence[Coefficient]


def pieces(term: Term, spacing: Spacing, time_order: int) -> Iterator[Piece]:
    """The term's pieces on cells of the given size per axis (System has none: see `symbol`)."""
    match term:
        case Advection():
            yield from _advection(term, spacing)
        case Diffusion():
            yield from _diffusion(term, spacing)
        case Waves():
            for a, h in enumerate(spacing):
                c2 = np.asarray(term.speed, dtype=np.float64) ** 2
                yield Piece("square", c2 / np.asarray(h) ** 2, partial(_wave_size, term, a))
        case Reaction():
            if time_order == 2:
                yield Piece("square", -np.asarray(term.rate), _one)
            else:
                yield Piece("rate", term.rate, _one, _one)
        case Bending():
            yield from _bending(term, spacing)
        case Stencil():
            uniform = sum(term.weights)
            yield Piece(
                "rate", term.coefficient, partial(_stencil_symbol, term), partial(_const, uniform)
            )


# --- functions of the angles ---------------------------------------------------------------------


def _const(value: float, t: Angles) -> Array:
    return np.full(t.shape[1], value)


_one = partial(_const, 1.0)


def _drift(stencil: First, a: int, t: Angles) -> Complex:
    return np.asarray(-1j * stencil.phase(t[a]))


def _loss(stencil: First, a: int, t: Angles) -> Array:
    return -stencil.loss(t[a])


def _bend(stencil: Second, a: int, t: Angles) -> Array:
    return -stencil.size(t[a])


def _bend_exactly(a: int, t: Angles) -> Array:
    return np.asarray(-(t[a] ** 2))


def _cross(a: int, b: int, t: Angles) -> Array:
    return np.asarray(-np.sin(t[a]) * np.sin(t[b]))


def _twice(sign: float, a: int, b: int, t: Angles) -> Array:
    return np.asarray(sign * square(t[a]) * square(t[b]))


def _twice_exactly(a: int, b: int, t: Angles) -> Array:
    return np.asarray(-((t[a] * t[b]) ** 2))


def _wave_size(term: Waves, a: int, t: Angles) -> Array:
    """omega**2 h**2 / c**2 of one axis."""
    if term.form == "second-order":
        return SECOND[term.stencil].size(t[a])
    phase = HALF[term.stencil].phase if term.form == "staggered" else FIRST[term.stencil].phase
    return np.asarray(phase(t[a]) ** 2)


# --- pieces of one term --------------------------------------------------------------------------


def _advection(term: Advection, spacing: Spacing) -> Iterator[Piece]:
    lax_wendroff = term.stencil == "lax-wendroff"
    stencil = FIRST["central2" if lax_wendroff else term.stencil]
    ratios = [np.asarray(v) / np.asarray(h) for v, h in zip(term.velocity, spacing, strict=True)]
    for a, ratio in enumerate(ratios):
        yield Piece("rate", ratio, partial(_drift, stencil, a))
        if stencil.damping[0]:
            yield Piece("rate", np.abs(ratio), partial(_loss, stencil, a))
    if lax_wendroff:
        # dt**2 / 2 times the second derivative along the velocity (Lax and Wendroff 1960; in
        # several dimensions with the cross terms, Turkel 1977).
        for a, one in enumerate(ratios):
            yield Piece("late", 0.5 * one**2, partial(_bend, SECOND["central2"], a))
            for b, other in enumerate(ratios[:a]):
                cross = one * other
                yield Piece("late", cross, partial(_cross, a, b))


def _diffusion(term: Diffusion, spacing: Spacing) -> Iterator[Piece]:
    stencil = SECOND[term.stencil]
    each = term.coefficient
    per_axis = each if isinstance(each, tuple) else (each,) * len(spacing)
    for a, (k, h) in enumerate(zip(per_axis, spacing, strict=True)):
        yield Piece(
            "rate",
            np.asarray(k) / np.asarray(h) ** 2,
            partial(_bend, stencil, a),
            partial(_bend_exactly, a),
        )


def _bending(term: Bending, spacing: Spacing) -> Iterator[Piece]:
    second = term.form == "second-order"
    for a, h in enumerate(spacing):
        for b, g in enumerate(spacing[: a + 1]):
            twice = 1.0 if a == b else 2.0
            scale = twice * np.asarray(term.coefficient) / (np.asarray(h) * np.asarray(g)) ** 2
            sign = 1.0 if second else -1.0
            yield Piece(
                "square" if second else "rate",
                scale,
                partial(_twice, sign, a, b),
                None if second else partial(_twice_exactly, a, b),
            )


def _stencil_symbol(term: Stencil, angles: Angles) -> Complex:
    offsets = np.asarray(term.offsets, dtype=np.float64)
    phases = offsets @ angles
    weights = np.asarray(term.weights)
    # exp(i p) - 1 keeps its digits for long waves; what is left is the sum of the weights.
    moved = -2.0 * np.sin(0.5 * phases) ** 2 + 1j * np.sin(phases)
    uniform = float(weights.sum())
    if abs(uniform) <= 4.0 * np.finfo(np.float64).eps * float(np.abs(weights).sum()):
        uniform = 0.0
    return np.asarray(weights @ moved + uniform)
