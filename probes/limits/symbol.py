"""The symbol of a scheme with frozen coefficients: z = lambda dt for any wave in any cell.

Terms are sums of coefficient(cell) times function(wave), so that all waves in many cells are one
matrix product.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from probes.limits.scheme import Part, Scheme
from probes.limits.stencils import FIRST
from probes.limits.terms import Angles, Piece, Role, System, Waves, pieces

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]
Cells = slice | NDArray[np.intp]


@dataclass(frozen=True)
class WaveTable:
    """The functions of the waves, evaluated once for many cells and steps.

    rate, late: (waves, pieces) complex; square: (waves, pieces) real; system: (m, waves) complex
    eigenvalues of the system's matrix or None; exact: (waves, pieces) real.
    """

    rate: Complex
    late: Complex
    square: Array
    system: Complex | None
    exact: Array


class PartSymbol:
    """One part's pieces over the cells of its scheme.

    cells: number of cells; coefficients are (pieces, cells), or (pieces, 1) where all are numbers.
    """

    def __init__(self, part: Part, scheme: Scheme) -> None:
        self.integrator = part.integrator
        shape = scheme.shape
        every = [
            piece
            for term in part.terms
            for piece in pieces(term, scheme.spacing, part.integrator.time_order)
        ]
        roles: tuple[Role, ...] = ("rate", "late", "square")
        found = {role: [p for p in every if p.role == role] for role in roles}
        self._coefficients = {role: _over_cells(found[role], shape) for role in roles}
        # From here on the functions are enough: fields are not kept twice.
        self._pieces = {role: [replace(p, coefficient=0.0) for p in found[role]] for role in roles}
        self.cells = int(np.prod(shape))
        self._waves = bool(self._pieces["square"])
        self._vortices = scheme.axes > 1 and any(
            isinstance(t, Waves) and t.form != "second-order" for t in part.terms
        )
        self._system = next((t for t in part.terms if isinstance(t, System)), None)
        if self._system is not None:
            spacing = [float(np.asarray(h).ravel()[0]) for h in scheme.spacing]
            self._steps = tuple(spacing)
        # Growth of the equation itself comes from pieces that can have a positive exact part.
        probe = np.linspace(0.1, np.pi, 5)
        angles = np.tile(probe, (scheme.axes, 1))
        self._may_grow = self._system is not None and bool(np.any(self._system.source))
        for piece, row in zip(self._pieces["rate"], self._coefficients["rate"], strict=True):
            if piece.exact is not None:
                self._may_grow |= bool((np.outer(piece.exact(angles), row) > 0.0).any())
        self._may_grow |= bool((self._coefficients["square"] < 0.0).any())

    def table(self, angles: Angles) -> WaveTable:
        """angles: (axes, waves)."""
        waves = angles.shape[1]

        def columns(role: Role) -> Complex:
            found = [p.symbol(angles) for p in self._pieces[role]]
            return np.array(found, dtype=np.complex128).reshape(-1, waves).T.copy()

        exact = [
            p.exact(angles) if p.exact is not None else np.zeros(waves)
            for p in self._pieces["rate"]
        ]
        return WaveTable(
            columns("rate"),
            columns("late"),
            np.ascontiguousarray(columns("square").real),
            None if self._system is None else self._eigenvalues(angles),
            np.array(exact).reshape(-1, waves).T.copy(),
        )

    def steps(self, table: WaveTable, dt: float | Array, cells: Cells) -> list[Complex]:
        """z of every eigenvalue: arrays (waves, cells). dt: a number, or (waves, 1)."""
        squares = self._sum(table.square, "square", cells)
        if self.integrator.time_order == 2:
            return [(-(dt**2) * squares).astype(np.complex128)]
        rate = self._sum(table.rate, "rate", cells)
        if self._pieces["late"]:
            rate = rate + dt * self._sum(table.late, "late", cells)
        if table.system is not None:
            return [dt * (rate + value[:, None]) for value in table.system]
        if not self._waves:
            return [dt * rate]
        omega = np.sqrt(squares.astype(np.complex128))
        out = [dt * (rate + 1j * omega), dt * (rate - 1j * omega)]
        # In several dimensions the velocities also carry vortices, which no pressure moves.
        return [*out, dt * rate] if self._vortices else out

    def own_growth(self, table: WaveTable, cells: Cells) -> Array:
        """Fastest growth of the equation itself over these waves, per unit time: (cells,), at least
        0. The scheme may follow it."""
        width = self._coefficients["rate"][:, cells].shape[1]
        if not self._may_grow:
            return np.zeros(max(width, 1))
        rate = (table.exact @ self._coefficients["rate"][:, cells]).max(axis=0, initial=0.0)
        if self._waves:
            squares = self._sum(table.square, "square", cells)
            rate = rate + np.sqrt(np.maximum(0.0, -squares.min(axis=0)))
        if self._system is not None:
            rate = rate + max(0.0, float(np.linalg.eigvals(self._system.source).real.max()))
        return np.asarray(np.maximum(rate, 0.0))

    def _sum(self, columns: Array | Complex, role: Role, cells: Cells) -> Complex:
        coefficients = self._coefficients[role][:, cells]
        if np.iscomplexobj(columns):
            # Two real products are what the linear algebra library does best.
            out = np.empty((columns.shape[0], coefficients.shape[1]), dtype=np.complex128)
            out.real = columns.real @ coefficients
            out.imag = columns.imag @ coefficients
            return out
        return np.asarray(columns @ coefficients)

    def _eigenvalues(self, angles: Angles) -> Complex:
        system = self._system
        assert system is not None  # the caller looked
        matrix = np.zeros((angles.shape[1], *system.source.shape), dtype=np.complex128)
        matrix += system.source
        stencil = FIRST[system.stencil]
        for a, (slope, h) in enumerate(zip(system.matrices, self._steps, strict=True)):
            matrix -= (1j * stencil.phase(angles[a]) / h)[:, None, None] * slope
            if stencil.damping[0]:
                matrix -= (stencil.loss(angles[a]) / h)[:, None, None] * matrix_modulus(slope)
        values = np.linalg.eigvals(matrix)
        # Real parts within rounding of zero are zero: waves are neither damped nor driven.
        size = np.abs(matrix).sum(axis=(1, 2))[:, None]
        small = np.abs(values.real) <= 64.0 * np.finfo(np.float64).eps * size
        values.real[small] = 0.0
        return np.ascontiguousarray(values.T)


def matrix_modulus(matrix: Array) -> Array:
    """|A|: the same eigenvectors, moduli of the eigenvalues. For real eigenvalues only."""
    values, vectors = np.linalg.eig(matrix)
    return np.asarray(((vectors * np.abs(values.real)) @ np.linalg.inv(vectors)).real)


def _over_cells(found: list[Piece], shape: tuple[int, ...]) -> Array:
    """(pieces, cells) coefficients."""
    cells = int(np.prod(shape))
    out = np.empty((len(found), cells))
    for row, piece in zip(out, found, strict=True):
        row[:] = np.broadcast_to(np.asarray(piece.coefficient, dtype=np.float64), shape).ravel()
    return out
