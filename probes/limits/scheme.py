"""A whole scheme: terms on a grid, marched by one integrator or by several in turn (split)."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from probes.errors import SettingsError
from probes.limits.integrators import Integrator
from probes.limits.terms import (
    Advection,
    Bending,
    Coefficient,
    Diffusion,
    Reaction,
    Stencil,
    System,
    Term,
    Waves,
)


@dataclass(frozen=True)
class Part:
    """Terms that one integrator marches together."""

    integrator: Integrator
    terms: tuple[Term, ...]


@dataclass(frozen=True)
class Scheme:
    """parts: one, or several that each take the whole step in turn (Lie splitting).

    spacing: cell size per axis, a number or an array that broadcasts over the grid's cells.
    Raises SettingsError where the pieces do not fit together.
    """

    parts: tuple[Part, ...]
    spacing: tuple[Coefficient, ...]

    def __post_init__(self) -> None:
        if not 1 <= self.axes <= 3:
            raise SettingsError("must hold one to three cell sizes", "spacing")
        for h in self.spacing:
            _check("spacing", h, positive=True)
        for part in self.parts:
            _check_part(part, self.axes, split=len(self.parts) > 1)
        arrays = [c for c in self.coefficients() if np.ndim(c)]
        try:
            np.broadcast_shapes(*(np.shape(a) for a in arrays))
        except ValueError as error:
            shapes = ", ".join(sorted({str(np.shape(a)) for a in arrays}))
            raise SettingsError(
                f"coefficient arrays do not fit on one grid: shapes {shapes}",
                remedy="give all of them one value per cell",
            ) from error

    @property
    def axes(self) -> int:
        return len(self.spacing)

    @property
    def terms(self) -> tuple[Term, ...]:
        return tuple(term for part in self.parts for term in part.terms)

    def coefficients(self) -> list[Coefficient]:
        """Every coefficient and spacing."""
        out: list[Coefficient] = list(self.spacing)
        for term in self.terms:
            out += [c for _, c in named_coefficients(term)]
        return out

    @property
    def shape(self) -> tuple[int, ...]:
        """Cells of the grid of coefficients; () where all are numbers."""
        return np.broadcast_shapes(*(np.shape(c) for c in self.coefficients()))

    def cell(self, number: int) -> Scheme:
        """The scheme with the coefficients of one cell, counted along the flattened grid.

        Raises IndexError for a cell that does not exist.
        """
        shape = self.shape
        if not 0 <= number < int(np.prod(shape)):
            raise IndexError(number)
        index = tuple(int(i) for i in np.unravel_index(number, shape)) if shape else ()

        def here(value: Coefficient) -> float:
            return float(np.broadcast_to(value, shape)[index])

        parts = tuple(
            Part(part.integrator, tuple(_mapped(term, here) for term in part.terms))
            for part in self.parts
        )
        return Scheme(parts, tuple(here(h) for h in self.spacing))

    def alone(self, term: Term) -> Scheme:
        """The scheme with nothing but one of its terms."""
        part = next(p for p in self.parts if any(t is term for t in p.terms))
        return Scheme((Part(part.integrator, (term,)),), self.spacing)


def named_coefficients(term: Term) -> list[tuple[str, Coefficient]]:
    """The term's coefficients by the key they stand under in settings."""
    match term:
        case Advection():
            return [(f"velocity[{a}]", v) for a, v in enumerate(term.velocity)]
        case Diffusion():
            if isinstance(term.coefficient, tuple):
                return [(f"coefficient[{a}]", k) for a, k in enumerate(term.coefficient)]
            return [("coefficient", term.coefficient)]
        case Waves():
            return [("speed", term.speed)]
        case Reaction():
            return [("rate", term.rate)]
        case Bending():
            return [("coefficient", term.coefficient)]
        case Stencil():
            return [("coefficient", term.coefficient)]
        case System():
            return []


def _mapped(term: Term, here: Callable[[Coefficient], float]) -> Term:
    """The term with every coefficient replaced."""
    match term:
        case Advection():
            return replace(term, velocity=tuple(here(v) for v in term.velocity))
        case Diffusion(coefficient=tuple() as each):
            return replace(term, coefficient=tuple(here(k) for k in each))
        case Diffusion(coefficient=k) if not isinstance(k, tuple):
            return replace(term, coefficient=here(k))
        case Bending() | Stencil():
            return replace(term, coefficient=here(term.coefficient))
        case Waves():
            return replace(term, speed=here(term.speed))
        case Reaction():
            return replace(term, rate=here(term.rate))
    return term


def _check_part(part: Part, axes: int, split: bool) -> None:
    if not part.terms:
        raise SettingsError("a scheme needs at least one term", "terms")
    if split and (part.integrator.levels > 1 or part.integrator.time_order == 2):
        raise SettingsError(
            f"{part.integrator.title} keeps several time levels and cannot be split",
            "integrator",
            "split between one-step methods",
        )
    if sum(isinstance(term, System) for term in part.terms) and any(
        isinstance(term, Waves) for term in part.terms
    ):
        raise SettingsError("a system and a wave cannot be combined", "terms", "write one system")
    if sum(isinstance(term, System) for term in part.terms) > 1:
        raise SettingsError("there can be one system only", "terms", "add the matrices up")
    for term in part.terms:
        for key, value in named_coefficients(term):
            _check(f"{term.name} {key}", value)
        _check_term(term, part.integrator, axes)


def _check_term(term: Term, integrator: Integrator, axes: int) -> None:
    match term:
        case Advection() if len(term.velocity) != axes:
            what = f"holds {len(term.velocity)} components for {axes} axis(es) of spacing"
            raise SettingsError(what, f"{term.name} velocity", "give one per axis")
        case Advection() if term.stencil == "lax-wendroff" and integrator.name != "euler":
            raise SettingsError(
                f"Lax-Wendroff is a whole step of its own and cannot be marched by "
                f"{integrator.title}",
                f"{term.name} stencil",
                "use it with forward Euler",
            )
        case Diffusion() if isinstance(term.coefficient, tuple) and len(term.coefficient) != axes:
            what = f"holds {len(term.coefficient)} values for {axes} axis(es) of spacing"
            raise SettingsError(what, f"{term.name} coefficient", "give one, or one per axis")
        case Stencil() if any(len(o) != axes for o in term.offsets):
            raise SettingsError(
                f"each offset needs {axes} number(s), one per axis", f"{term.name} offsets"
            )
        case Stencil() if len(term.offsets) != len(term.weights):
            raise SettingsError(
                f"{len(term.offsets)} offsets for {len(term.weights)} weights", f"{term.name}"
            )
        case System() if len(term.matrices) != axes:
            raise SettingsError(
                f"{len(term.matrices)} matrices for {axes} axis(es)", f"{term.name} matrices"
            )
    second = isinstance(term, Waves | Reaction) or (
        isinstance(term, Bending) and term.form == "second-order"
    )
    if integrator.time_order == 2 and not second:
        raise SettingsError(
            f"{integrator.title} marches u_tt = L u, but {term.name} is a term of u_t = L u",
            f"{term.name}",
            "choose an integrator for first-order equations",
        )


def _check(where: str, value: Coefficient, positive: bool = False) -> None:
    """Raises SettingsError with the value, and its place in an array."""
    array = np.asarray(value, dtype=np.float64)
    bad = ~np.isfinite(array) | ((array <= 0.0) if positive else False)
    if not bad.any():
        return
    if array.ndim == 0:
        place, number = "", float(array)
    else:
        index = tuple(int(i) for i in np.argwhere(bad)[0])
        place, number = f" at cell {list(index)} ({int(bad.sum())} cell(s) in all)", array[index]
    if not math.isfinite(number):
        remedy = "mask the field or correct it" if array.ndim else "give a finite number"
        raise SettingsError(f"is {number}{place}", where, remedy)
    raise SettingsError(f"is {number:g}{place}", where, "a cell size must be positive")
