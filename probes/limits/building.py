"""From settings to a scheme and its grid, with errors that name the key."""

from __future__ import annotations

import math
from collections.abc import Callable
from difflib import get_close_matches
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from probes.errors import SettingsError
from probes.limits.grids import Box
from probes.limits.integrators import (
    CATALOGUE,
    Integrator,
    filtered_leapfrog,
    runge_kutta_chebyshev,
    stability_polynomial,
    tableau,
)
from probes.limits.scheme import Part, Scheme
from probes.limits.spec import Amount, Amounts, SchemeSpec, TermSpec
from probes.limits.stencils import FIRST, HALF, SECOND
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

# Turns a text into values per cell: (text, the key it stands under) -> array.
Lookup = Callable[[str, str], NDArray[np.float64]]

# Whole schemes by the name that people give them: integrator and stencil of their advection.
WHOLE = {
    "lax-wendroff": ("euler", "lax-wendroff"),
    "upwind": ("euler", "upwind1"),
    "ftcs": ("euler", "central2"),
}
_OWN = ("leapfrog", "rkc", "tableau", "polynomial")
# Cells up to which a matrix is assembled without being asked for.
_BY_ITSELF = 20_000
_DAMPING = {1: 0.05, 2: 2.0 / 13.0}


def names() -> list[str]:
    """All integrators that settings may name."""
    return [*CATALOGUE, *(name for name in _OWN if name not in CATALOGUE), *WHOLE]


def build(spec: SchemeSpec, lookup: Lookup) -> Scheme:
    """The scheme that settings describe.

    Raises SettingsError with the key, the value and what to write instead.
    """
    if not spec.spacing:
        raise SettingsError(
            "must be given", "[scheme] spacing", "one cell size per axis, like [0.1, 0.1]"
        )
    if not spec.terms:
        raise SettingsError("names no terms", "[scheme]", "write a [[scheme.terms]] for each")
    spacing = tuple(
        _spacing(value, axis, len(spec.spacing), lookup) for axis, value in enumerate(spec.spacing)
    )
    parts: dict[str, list[Term]] = {}
    for number, term in enumerate(spec.terms, 1):
        own = term.integrator or spec.integrator
        place = f"[[scheme.terms]] number {number}"
        parts.setdefault(own, []).append(_term(term, spec, own, place, len(spacing), lookup))
    return Scheme(
        tuple(Part(integrator(name, spec), tuple(terms)) for name, terms in parts.items()), spacing
    )


def integrator(name: str, spec: SchemeSpec) -> Integrator:
    """The integrator of that name, with the settings it needs."""
    name = WHOLE[name][0] if name in WHOLE else name
    try:
        if name == "leapfrog":
            if not 0.0 <= spec.filter < 0.5:
                raise ValueError(f"filter {spec.filter:g} must lie between 0 and 0.5")
            return filtered_leapfrog(spec.filter)
        if name == "rkc":
            if spec.order not in (1, 2):
                raise ValueError(f"order {spec.order} must be 1 or 2")
            damping = _DAMPING[spec.order] if spec.damping == -1.0 else spec.damping
            if damping < 0.0:
                raise ValueError(f"damping {damping:g} must not be negative")
            return runge_kutta_chebyshev(spec.stages, spec.order, damping)
        if name == "tableau":
            return tableau(spec.tableau, spec.weights)
        if name == "polynomial":
            return stability_polynomial(spec.polynomial)
    except ValueError as error:
        raise SettingsError(str(error), f"[scheme] integrator {name!r}") from error
    if name not in CATALOGUE:
        raise SettingsError(
            f"{name!r} is no integrator here", "[scheme] integrator", _suggestion(name, names())
        )
    return CATALOGUE[name]


def box(spec: SchemeSpec, scheme: Scheme) -> Box | None:
    """The grid of the assembled matrix: as settings name it, or that of the coefficients unless it
    is large. None where there is none."""
    shape = spec.cells or scheme.shape
    if not shape or (not spec.cells and math.prod(shape) > _BY_ITSELF):
        return None
    if len(shape) != scheme.axes or any(n < 1 for n in shape):
        raise SettingsError(
            f"is {list(shape)} for {scheme.axes} axis(es)", "[scheme] cells", "one number per axis"
        )
    words = spec.boundary or ("periodic",) * scheme.axes
    if len(words) == 1:
        words = words * scheme.axes
    if len(words) != scheme.axes:
        what = f"holds {len(words)} entries for {scheme.axes} axis(es)"
        raise SettingsError(what, "[scheme] boundary", "give one per axis, or one for all")
    ends = []
    for entry in words:
        pair = entry.split()
        if not 1 <= len(pair) <= 2:
            raise SettingsError(
                f"{entry!r} must be one or two words",
                "[scheme] boundary",
                'write "periodic" or "dirichlet neumann"',
            )
        ends.append((pair[0], pair[-1]))
    return Box(tuple(shape), tuple(ends))


def _spacing(value: Amount, axis: int, axes: int, lookup: Lookup) -> Coefficient:
    place = f"[scheme] spacing[{axis}]"
    if isinstance(value, float):
        return value
    sizes = lookup(value, place)
    if sizes.ndim == 1:  # one size per cell of this axis
        sizes = sizes.reshape([-1 if a == axis else 1 for a in range(axes)])
    return sizes


def _term(t: TermSpec, spec: SchemeSpec, own: str, place: str, axes: int, lookup: Lookup) -> Term:
    name = t.name or t.kind

    def amount(key: str, value: Amount) -> Coefficient:
        if value == "":
            raise SettingsError(f"{key} must be given for a term of kind {t.kind!r}", place)
        return value if isinstance(value, float) else lookup(value, f"{place} {key}")

    def each(key: str, value: Amounts) -> tuple[Coefficient, ...]:
        if value == ():
            raise SettingsError(f"{key} must be given for a term of kind {t.kind!r}", place)
        values = value if isinstance(value, tuple) else (value,)
        return tuple(amount(f"{key}[{n}]", v) for n, v in enumerate(values))

    match t.kind:
        case "advection":
            implied = WHOLE[own][1] if own in WHOLE else ""
            if implied and t.stencil not in ("", implied):
                what = f"stencil {t.stencil!r} does not go with {own}, which is {implied}"
                raise SettingsError(what, place, "leave the stencil out")
            stencil = t.stencil or implied or "central2"
            _known(stencil, (*FIRST, "lax-wendroff"), f"{place} stencil")
            return Advection(each("velocity", t.velocity), stencil, name)
        case "diffusion":
            stencil = _known(t.stencil or "central2", SECOND, f"{place} stencil")
            values = each("coefficient", t.coefficient)
            coefficient = values[0] if not isinstance(t.coefficient, tuple) else values
            mean = _known(t.mean or "harmonic", _MEANS, f"{place} mean")
            return Diffusion(coefficient, stencil, cast(Any, mean), name)
        case "wave":
            form = _known(t.form or "staggered", _FORMS, f"{place} form")
            central = {
                "staggered": list(HALF),
                "second-order": list(SECOND),
                "collocated": [s for s, first in FIRST.items() if not first.damping[0]],
            }[form]
            stencil = _known(t.stencil or "central2", central, f"{place} stencil")
            mean = _known(t.mean or "cell", _MEANS, f"{place} mean")
            return Waves(amount("speed", t.speed), cast(Any, form), stencil, cast(Any, mean), name)
        case "reaction":
            return Reaction(amount("rate", t.rate), name)
        case "bending":
            second = integrator(own, spec).time_order == 2
            form = _known(
                t.form or ("second-order" if second else "first-order"),
                ("first-order", "second-order"),
                f"{place} form",
            )
            return Bending(each("coefficient", t.coefficient)[0], cast(Any, form), name)
        case "stencil":
            if not t.offsets or len(t.offsets) != len(t.weights):
                what = f"{len(t.offsets)} offsets for {len(t.weights)} weights"
                raise SettingsError(what, place, "give one weight for each offset")
            values = each("coefficient", t.coefficient) if t.coefficient != () else (1.0,)
            return Stencil(t.offsets, t.weights, values[0], name)
        case "system":
            return _system(t, place, axes, name)


_FORMS = ("staggered", "second-order", "collocated")
_MEANS = ("harmonic", "arithmetic", "cell")


def _system(t: TermSpec, place: str, axes: int, name: str) -> System:
    stencil = _known(t.stencil or "central2", FIRST, f"{place} stencil")
    m = len(t.matrices[0]) if t.matrices else len(t.source)
    zero = tuple((0.0,) * m for _ in range(m))
    for key, rows in [
        *((f"matrices[{a}]", r) for a, r in enumerate(t.matrices)),
        ("source", t.source or zero),
    ]:
        if len(rows) != m or any(len(row) != m for row in rows):
            raise SettingsError(f"is not a square matrix of {m} rows", f"{place} {key}")
    if len(t.matrices) != axes:
        what = f"holds {len(t.matrices)} matrices for {axes} axis(es) of spacing"
        raise SettingsError(what, f"{place} matrices", "give one per axis")
    matrices = tuple(np.array(rows, dtype=np.float64) for rows in t.matrices)
    for a, matrix in enumerate(matrices):
        if FIRST[stencil].damping[0] and np.abs(np.linalg.eigvals(matrix).imag).max() > 0.0:
            raise SettingsError(
                "has complex eigenvalues: there is no upwind side", f"{place} matrices[{a}]"
            )
    return System(matrices, np.array(t.source or zero, dtype=np.float64), stencil, name)


def _known(word: str, known: Any, place: str) -> str:
    if word not in known:
        raise SettingsError(f"{word!r} is not known", place, _suggestion(word, list(known)))
    return word


def _suggestion(word: str, known: list[str]) -> str:
    near = get_close_matches(word, known, 1)
    return f"did you mean {near[0]!r}?" if near else f"known are {', '.join(known)}"
