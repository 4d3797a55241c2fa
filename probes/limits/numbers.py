"""Each term's own dimensionless step, never merged into one: which of them is violated points to
the cause."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from probes.limits.records import Number
from probes.limits.scheme import Scheme
from probes.limits.symbol import matrix_modulus
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
from probes.limits.vonneumann import Analysis

Array = NDArray[np.float64]


def numbers(scheme: Scheme, dt: float, cell: int = 0) -> list[Number]:
    """One number per term at step dt: the largest over all cells.

    cell: whose coefficients are used for the number that each term alone would be limited to.
    """
    out = []
    for term in scheme.terms:
        name, per_cell, power = _number(term, scheme)
        limit = Analysis(scheme.alone(term), cell).largest_step().dt.value
        here = _at(per_cell, scheme, cell)
        alone = None if limit is None else here * limit**power
        out.append(Number(term.name, name, float(np.max(per_cell)) * dt**power, alone))
    return out + _cell_reynolds(scheme)


def _number(term: Term, scheme: Scheme) -> tuple[str, Array, int]:
    """Name, the number per cell at dt = 1, and the power of dt in it."""
    spacing = [np.asarray(h, dtype=np.float64) for h in scheme.spacing]
    inverse = [1.0 / h for h in spacing]
    match term:
        case Advection():
            parts = [np.abs(v) * i for v, i in zip(term.velocity, inverse, strict=True)]
            return "advective Courant number", _total(parts), 1
        case Diffusion():
            each = _per_axis(term.coefficient, scheme.axes)
            parts = [np.abs(k) * i**2 for k, i in zip(each, inverse, strict=True)]
            return "diffusion number", _total(parts), 1
        case Waves():
            across = np.sqrt(_total([i**2 for i in inverse]))
            return "wave Courant number", np.asarray(np.abs(term.speed) * across), 1
        case Reaction():
            if any(p.integrator.time_order == 2 and term in p.terms for p in scheme.parts):
                return "reaction number (squared)", np.asarray(np.abs(term.rate)), 2
            return "reaction number", np.asarray(np.abs(term.rate)), 1
        case Bending():
            across = _total([i**2 for i in inverse])
            size = np.asarray(np.abs(term.coefficient) * across**2)
            if term.form == "second-order":
                return "bending Courant number", np.sqrt(size), 1
            return "bending number", size, 1
        case Stencil():
            total = sum(abs(w) for w in term.weights)
            return "stencil number", np.asarray(np.abs(term.coefficient) * total), 1
        case System():
            fast = [
                float(np.abs(np.linalg.eigvals(matrix_modulus(a))).max()) for a in term.matrices
            ]
            parts = [np.asarray(c * i) for c, i in zip(fast, inverse, strict=True)]
            return "Courant number of the fastest wave", _total(parts), 1


def _cell_reynolds(scheme: Scheme) -> list[Number]:
    """|a| h / k, the largest over axes and cells, where a scheme has both terms."""
    flows = [t for t in scheme.terms if isinstance(t, Advection)]
    mixing = [t for t in scheme.terms if isinstance(t, Diffusion)]
    out = []
    for flow in flows[:1]:
        for mix in mixing[:1]:
            each = _per_axis(mix.coefficient, scheme.axes)
            with np.errstate(divide="ignore", invalid="ignore"):
                ratios = [
                    float(np.nanmax(np.abs(v) * np.asarray(h) / np.abs(k)))
                    for v, h, k in zip(flow.velocity, scheme.spacing, each, strict=True)
                ]
            out.append(Number(f"{flow.name}, {mix.name}", "cell Reynolds number", max(ratios)))
    return out


def _per_axis(value: Coefficient | tuple[Coefficient, ...], axes: int) -> tuple[Coefficient, ...]:
    return value if isinstance(value, tuple) else (value,) * axes


def _total(parts: list[Array]) -> Array:
    out = np.asarray(parts[0])
    for part in parts[1:]:
        out = out + part
    return np.asarray(out)


def _at(values: Array, scheme: Scheme, cell: int) -> float:
    index = np.unravel_index(cell, scheme.shape) if scheme.shape else ()
    return float(np.broadcast_to(values, scheme.shape)[index])
