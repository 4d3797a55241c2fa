"""Symbol and matrix of a scheme together: the largest step, and what a given one does."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from monitor.limits.answer import Budget, LimitAnswer, SymbolPart
from probes.limits.assemble import assemble, forward_backward
from probes.limits.cells import CellAnalysis, CellLimit, CellMap
from probes.limits.grids import Box
from probes.limits.matrix import TRANSIENT_MAX, MatrixAnswer, analyse, step_of
from probes.limits.matrixlimit import largest_step
from probes.limits.numbers import numbers
from probes.limits.records import Found
from probes.limits.scheme import Scheme
from probes.limits.terms import Bending, Reaction, Stencil
from probes.limits.vonneumann import OWN, Analysis

# Just below a limit, where the matrix is judged when no step was given.
_BELOW = 1.0 - 1e-6
# A factor that answers a millionth more of step by this much comes from roots that meet.
_MEETING = 1e-4


@dataclass(frozen=True)
class Wish:
    """What is asked. step: None if only the limit is wanted. steps, growth: a budget of growth, 0
    steps for none. powers: how far powers of the matrix are followed, 0 means by its size.
    """

    step: float | None = None
    steps: int = 0
    growth: float = 1.0
    powers: int = 0
    transient_max: float = TRANSIENT_MAX


def judge(scheme: Scheme, box: Box | None, wish: Wish) -> LimitAnswer:
    """The whole answer for a scheme; box: grid of the matrix, None for the symbol alone."""
    cells = CellAnalysis(scheme)
    limit, own = cells.limit(), cells.own_growth()
    cell = int(np.ravel_multi_index(limit.cell, scheme.shape)) if scheme.shape else 0
    matrix = matrix_dt = None
    if box is not None:
        matrix_dt = largest_step(assemble(scheme, box), own, forward_backward(scheme))
    dt_max = _combined(scheme, limit.limit.dt, matrix_dt)
    at = wish.step if wish.step is not None else _positive(dt_max)
    if box is not None and at is not None:
        matrix = _matrix(scheme, box, at if wish.step is not None else at * _BELOW, own, wish)
        if wish.step is None and not matrix.stable and dt_max is not limit.limit.dt:
            # Eigenvalues allow what the powers forbid: the symbol's limit holds.
            dt_max = limit.limit.dt
            at = _positive(dt_max)
            matrix = None if at is None else _matrix(scheme, box, at * _BELOW, own, wish)
    local = cells.at(at, limit) if at is not None else None
    found = numbers(scheme, at, cell) if at is not None else []
    budget = _budget(scheme, cell, wish)
    verdict, why, stable = _verdict(scheme, local, matrix, dt_max, budget, wish)
    return LimitAnswer(
        title=_title(scheme),
        evaluations=sum(part.integrator.evaluations for part in scheme.parts),
        step=wish.step,
        judged_at=at,
        dt_max=dt_max,
        symbol=_symbol(scheme, limit, local),
        matrix_dt=matrix_dt,
        matrix=matrix,
        budget=budget,
        numbers=tuple(found),
        verdict=verdict,
        why=why,
        stable=stable,
        notes=(*_notes(scheme, limit, local, own), *_left_out(scheme, box)),
    )


def _combined(scheme: Scheme, symbol: Found, matrix: Found | None) -> Found:
    """Stable means bounded uniformly in the grid: with equal coefficients everywhere the smaller
    of symbol and matrix. Where coefficients vary, frozen ones exaggerate narrow spots and the
    matrix, whose powers are looked at as well, decides."""
    if matrix is None or matrix.value is None:
        return symbol
    if symbol.value is None or scheme.shape:
        return matrix
    return symbol if symbol.value <= matrix.value else matrix


def _matrix(scheme: Scheme, box: Box, dt: float, own: float, wish: Wish) -> MatrixAnswer:
    step, weight = step_of(scheme, box, dt)
    steps = wish.powers or min(2000, max(200, 10 * max(box.shape)))
    return analyse(step, weight, steps, wish.transient_max, math.exp(min(700.0, own * dt * OWN)))


def _positive(found: Found) -> float | None:
    return found.value if found.value else None


def _symbol(scheme: Scheme, limit: CellLimit, local: CellMap | None) -> SymbolPart:
    growth = local.growth if local is not None else None
    return SymbolPart(
        dt=limit.limit.dt,
        wave=limit.limit.wave,
        cell=limit.cell if scheme.shape else (),
        factor=growth.factor if growth is not None else None,
        allowed=growth.allowed if growth is not None else None,
        worst=growth.wave if growth is not None else None,
        exceeding=local.spot if local is not None and scheme.shape else None,
        exceeds=growth is not None and not growth.stable,
    )


def _budget(scheme: Scheme, cell: int, wish: Wish) -> Budget | None:
    if not wish.steps:
        return None
    limit = Analysis(scheme, cell).largest_step(math.log(wish.growth) / wish.steps)
    return Budget(wish.steps, wish.growth, limit.dt)


def _verdict(
    scheme: Scheme,
    local: CellMap | None,
    matrix: MatrixAnswer | None,
    dt_max: Found,
    budget: Budget | None,
    wish: Wish,
) -> tuple[str, str, bool]:
    """Word, sentence, and whether the given step is stable."""
    if wish.step is None:
        if dt_max.value is None:
            return "no limit", dt_max.reason, True
        if dt_max.value == 0.0:
            return "no stable step", dt_max.reason, True
        return "limit found", "any step up to it is stable", True
    assert local is not None  # a step was given
    growth = local.growth
    unsteady = "" if growth.stable else f"errors grow by a factor of {growth.factor:.8g} per step"
    if unsteady and budget is not None and budget.dt.value is not None:
        total = wish.steps * math.log(growth.factor)
        if total <= math.log(wish.growth) * (1.0 + 1e-9):
            told = f"{unsteady}, {math.exp(total):.4g} in {wish.steps} steps"
            return "stable within the budget", told, True
    if matrix is not None and (scheme.shape or not unsteady):
        word = {"transient": "stable with transient growth"}.get(matrix.word, matrix.word)
        if unsteady and matrix.stable:
            return word, f"{matrix.why}; frozen coefficients alone would grow", True
        return word, matrix.why, matrix.stable
    if unsteady:
        return "unstable", unsteady, False
    if _meeting(scheme, local, wish.step):
        why = "two roots meet on the unit circle: errors grow in proportion to the steps"
        return "marginal", why, False
    return "stable", "no wave grows", True


def _meeting(scheme: Scheme, local: CellMap, step: float) -> bool:
    """At a limit where roots meet, a little more of step lets them part as its square root."""
    if all(part.integrator.levels == 1 for part in scheme.parts):
        return False
    cell = int(np.ravel_multi_index(local.worst, scheme.shape)) if scheme.shape else 0
    beyond = Analysis(scheme, cell).growth(step * (1.0 + 1e-6))
    return math.log(beyond.factor / beyond.allowed) > _MEETING


def _title(scheme: Scheme) -> str:
    told = []
    for part in scheme.parts:
        terms = []
        for term in part.terms:
            kind = "" if isinstance(term, Reaction | Bending | Stencil) else f" ({term.stencil})"
            terms.append(f"{term.name}{kind}")
        told.append(f"{part.integrator.title}: {', '.join(terms)}")
    return "; then ".join(told)


def _notes(scheme: Scheme, limit: CellLimit, local: CellMap | None, own: float) -> Iterator[str]:
    """What a number alone would not say."""
    if own > 0.0:
        yield (
            f"the equation itself grows at up to {own:.4g} per unit time; a growth no faster than "
            "that counts as stable"
        )
    if limit.limit.cause == "space":
        yield (
            "no step cures this: the differences themselves make errors grow (a wrong upwind "
            "side, or a term of the wrong sign)"
        )
    elif limit.limit.cause == "time":
        yield (
            "every step grows, more slowly the smaller it is; give --steps N --allowed-growth X "
            "for the largest step within a budget, or add damping, or choose an integrator that "
            "covers the imaginary axis"
        )
    if local is not None and local.spot is not None and scheme.shape:
        spot = local.spot
        if not all(spot.whole):
            size = " x ".join(str(w) for w in spot.widths)
            yield (
                f"the step is too long in {spot.cells} cell(s); around the worst the region is "
                f"{size} cells wide, and a wave confined to it changes by a factor of "
                f"{spot.confined:.6g} per step"
                + ("" if spot.confined > 1.0 else ": too narrow to grow")
            )


def _left_out(scheme: Scheme, box: Box | None) -> Iterator[str]:
    if scheme.shape and box is None:
        cells = ",".join(str(n) for n in scheme.shape)
        yield (
            f"a matrix of {math.prod(scheme.shape):,} cells is assembled only if asked for "
            f"(--cells {cells}); frozen coefficients are strict about narrow spots"
        )
