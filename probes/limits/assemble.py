"""The right-hand side's matrix L of u_t = L u (or u_tt = L u) with boundaries and coefficients.

Waves bring fields of their own: "pair" (u and u_t), "staggered" (p in cells, velocities on faces),
"collocated" (both in cells). Each field is scaled so that the plain two-norm of the scaled state is
the energy of the undamped waves, or the root mean square on cells of unequal size.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from probes.errors import SettingsError
from probes.limits.grids import (
    Box,
    along,
    face_difference,
    first_derivative,
    on_faces,
    second_derivative,
    shift,
    upwind_part,
)
from probes.limits.integrators import Integrator
from probes.limits.scheme import Part, Scheme
from probes.limits.stencils import FIRST, SECOND
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

Array = NDArray[np.float64]
Sparse = sp.csr_array


@dataclass(frozen=True)
class Operator:
    """One part's matrix.

    matrix: L, (n, n). late: added as dt times it (Lax-Wendroff), or None. scale: (n,) the scaled
    state is scale * state. told: what that scaling means.
    """

    integrator: Integrator
    matrix: Sparse
    late: Sparse | None
    scale: Array = field(repr=False)
    told: str = ""


def assemble(scheme: Scheme, box: Box) -> list[Operator]:
    """One operator for each part of the scheme, on the same state.

    Raises SettingsError for what has no matrix on this grid.
    """
    if len(box.shape) != scheme.axes:
        what = f"holds {len(box.shape)} number(s) for {scheme.axes} axis(es) of spacing"
        raise SettingsError(what, "cells", "give one per axis")
    try:
        fits = np.broadcast_shapes(scheme.shape, box.shape) == box.shape
    except ValueError:
        fits = False
    if not fits:
        what = f"{list(box.shape)} do not fit coefficients on {list(scheme.shape)} cells"
        raise SettingsError(what, "cells", "leave them out to take the coefficients' own")
    builder = _Builder(scheme, box)
    return [builder.operator(part) for part in scheme.parts]


def forward_backward(scheme: Scheme) -> bool:
    """A staggered leapfrog, which is better stepped as pressure and velocities than as two levels
    of the pressure: then slow modes and drift are no transients."""
    (part, *others) = scheme.parts
    return (
        not others
        and part.integrator.time_order == 2
        and all(
            isinstance(t, Waves) and t.form == "staggered" and t.stencil == "central2"
            for t in part.terms
        )
    )


class _Builder:
    def __init__(self, scheme: Scheme, box: Box) -> None:
        self.scheme, self.box = scheme, box
        self.spacing = [self._cells(h) for h in scheme.spacing]
        self.volume = np.prod(self.spacing, axis=0)
        self.order = max(part.integrator.time_order for part in scheme.parts)
        self.layout = self._layout()

    def _layout(self) -> str:
        kinds = {
            {"second-order": "pair"}.get(t.form, t.form)
            for t in self.scheme.terms
            if isinstance(t, Waves)
        }
        kinds |= {
            "pair" for t in self.scheme.terms if isinstance(t, Bending) and t.form != "first-order"
        }
        kinds |= {"system" for t in self.scheme.terms if isinstance(t, System)}
        if not kinds or (self.order == 2 and not forward_backward(self.scheme)):
            return "scalar"
        if len(kinds) > 1:
            raise SettingsError(
                f"{' and '.join(sorted(kinds))} terms have different fields", "terms"
            )
        return kinds.pop()

    def operator(self, part: Part) -> Operator:
        scalar = self._scalar(part.terms)
        waves = [t for t in part.terms if isinstance(t, Waves)]
        root = np.sqrt(self.volume / self.volume.max())
        late = self._late(part.terms)
        told = "root mean square over the cells"
        if self.layout == "scalar":
            for term in waves:
                scalar = scalar + self._eliminated(term)
            return Operator(part.integrator, Sparse(scalar), late, root, told)
        if late is not None:
            raise SettingsError("Lax-Wendroff is for advection alone", "terms")
        if self.layout == "pair":
            return self._pair(part, scalar, root)
        if self.layout == "system":
            return self._system(part, scalar)
        return self._first_order_waves(part, scalar, waves, root)

    # --- terms on one field in the cells ---------------------------------------------------------

    def _scalar(self, terms: Sequence[Term]) -> Sparse:
        total = Sparse((self.box.size, self.box.size))
        for term in terms:
            match term:
                case Advection():
                    total = total + self._advection(term)
                case Diffusion():
                    total = total + self._diffusion(term)
                case Reaction():
                    total = total + sp.diags_array(self._cells(term.rate))
                case Bending() if term.form == "first-order" or self.order == 2:
                    total = total + self._bending(term)
                case Stencil():
                    total = total + self._stencil(term)
        return Sparse(total)

    def _advection(self, term: Advection) -> Sparse:
        stencil = FIRST["central2" if term.stencil == "lax-wendroff" else term.stencil]
        total = Sparse((self.box.size, self.box.size))
        for axis, velocity in enumerate(term.velocity):
            ratio = self._cells(velocity) / self.spacing[axis]
            n, ends = self.box.shape[axis], self.box.ends[axis]
            central = along(first_derivative(stencil, n, ends), self.box, axis)
            total = total - sp.diags_array(ratio) @ central
            if stencil.damping[0]:
                loss = along(upwind_part(stencil, n, ends), self.box, axis)
                total = total + sp.diags_array(np.abs(ratio)) @ loss
        return Sparse(total)

    def _late(self, terms: Sequence[Term]) -> Sparse | None:
        found = [t for t in terms if isinstance(t, Advection) and t.stencil == "lax-wendroff"]
        if not found:
            return None
        total = Sparse((self.box.size, self.box.size))
        for term in found:
            ratios = [self._cells(v) / h for v, h in zip(term.velocity, self.spacing, strict=True)]
            slopes = [
                along(first_derivative(FIRST["central2"], n, ends), self.box, a)
                for a, (n, ends) in enumerate(zip(self.box.shape, self.box.ends, strict=True))
            ]
            for a, ratio in enumerate(ratios):
                bend = second_derivative(SECOND["central2"], self.box.shape[a], self.box.ends[a])
                total = total + sp.diags_array(0.5 * ratio**2) @ along(bend, self.box, a)
                for b in range(a):
                    total = total + sp.diags_array(ratio * ratios[b]) @ slopes[a] @ slopes[b]
        return Sparse(total)

    def _diffusion(self, term: Diffusion) -> Sparse:
        each = term.coefficient
        per_axis = each if isinstance(each, tuple) else (each,) * self.scheme.axes
        total = Sparse((self.box.size, self.box.size))
        for axis, k in enumerate(per_axis):
            if term.stencil == "central2" and term.mean != "cell":
                inside = on_faces(self._cells(k), self.box, axis, term.mean)
                total = total - self._divergence_of_gradient(axis, inside)
            else:
                bend = second_derivative(
                    SECOND[term.stencil], self.box.shape[axis], self.box.ends[axis]
                )
                ratio = self._cells(k) / self.spacing[axis] ** 2
                total = total + sp.diags_array(ratio) @ along(bend, self.box, axis)
        return Sparse(total)

    def _divergence_of_gradient(self, axis: int, inside: Array) -> Sparse:
        """-div inside grad along one axis, conservative on cells of unequal size."""
        difference = face_difference(self.box, axis)
        distance = on_faces(self.spacing[axis], self.box, axis, "arithmetic")
        flux = sp.diags_array(inside / distance) @ difference
        return Sparse(sp.diags_array(1.0 / self.spacing[axis]) @ (difference.T @ flux))

    def _laplacian(self) -> Sparse:
        total = Sparse((self.box.size, self.box.size))
        for axis in range(self.scheme.axes):
            ones = np.ones(face_difference(self.box, axis).shape[0])
            total = total - self._divergence_of_gradient(axis, ones)
        return Sparse(total)

    def _bending(self, term: Bending) -> Sparse:
        lap = self._laplacian()
        return Sparse(-(sp.diags_array(self._cells(term.coefficient)) @ lap @ lap))

    def _stencil(self, term: Stencil) -> Sparse:
        total = Sparse((self.box.size, self.box.size))
        for offset, weight in zip(term.offsets, term.weights, strict=True):
            one: Sparse = Sparse(sp.eye_array(1))
            for n, by, ends in zip(self.box.shape, offset, self.box.ends, strict=True):
                one = Sparse(sp.kron(one, shift(n, by, ends)))
            total = total + weight * one
        return Sparse(sp.diags_array(self._cells(term.coefficient)) @ total)

    # --- waves -----------------------------------------------------------------------------------

    def _eliminated(self, term: Waves) -> Sparse:
        """L of p_tt = L p."""
        c2 = self._cells(term.speed) ** 2
        total = Sparse((self.box.size, self.box.size))
        for axis in range(self.scheme.axes):
            n, ends = self.box.shape[axis], self.box.ends[axis]
            if term.form == "collocated":
                slope = along(first_derivative(FIRST[term.stencil], n, ends), self.box, axis)
                ratio = sp.diags_array(c2 / self.spacing[axis] ** 2)
                total = total + ratio @ slope @ slope
            elif term.stencil == "central2":
                inside = (
                    np.ones(face_difference(self.box, axis).shape[0])
                    if term.mean == "cell"
                    else on_faces(c2, self.box, axis, term.mean)
                )
                part = self._divergence_of_gradient(axis, inside)
                total = total - (sp.diags_array(c2) @ part if term.mean == "cell" else part)
            elif term.form == "second-order":
                bend = along(second_derivative(SECOND[term.stencil], n, ends), self.box, axis)
                total = total + sp.diags_array(c2 / self.spacing[axis] ** 2) @ bend
            else:
                raise SettingsError(
                    f"the staggered {term.stencil} stencil is not assembled",
                    f"{term.name} stencil",
                    "its symbol is available",
                )
        return Sparse(total)

    def _pair(self, part: Part, scalar: Sparse, root: Array) -> Operator:
        n = self.box.size
        bend = Sparse((n, n))
        for term in part.terms:
            if isinstance(term, Waves):
                bend = bend + self._eliminated(term)
            if isinstance(term, Bending) and term.form == "second-order":
                bend = bend + self._bending(term)
        one = Sparse(sp.eye_array(n))
        matrix = sp.block_array([[scalar, one], [bend, scalar]])
        fastest = np.sqrt(float(abs(bend).sum(axis=1).max())) or 1.0
        scale = np.concatenate([fastest * root, root])
        told = "u times the fastest frequency, and u_t"
        return Operator(part.integrator, Sparse(matrix), None, scale, told)

    def _first_order_waves(
        self, part: Part, scalar: Sparse, waves: Sequence[Waves], root: Array
    ) -> Operator:
        """p_t = -s div v, v_t = -r grad p with s r = c**2."""
        axes, n = self.scheme.axes, self.box.size
        sizes = [n] * (axes + 1)
        if self.layout == "staggered":
            sizes[1:] = [face_difference(self.box, a).shape[0] for a in range(axes)]
        blocks: list[list[Sparse | None]] = [[None] * (axes + 1) for _ in sizes]
        scales = [root] + [np.ones(size) for size in sizes[1:]]
        for term in waves:
            c2 = self._cells(term.speed) ** 2
            cell = c2 if term.mean == "cell" else np.ones(n)
            scales[0] = root / np.sqrt(np.maximum(cell, np.finfo(np.float64).tiny))
            for axis in range(axes):
                down, up, scales[axis + 1] = self._wave_blocks(term, c2, axis)
                blocks[0][axis + 1] = Sparse(sp.diags_array(cell) @ down)
                blocks[axis + 1][0] = up
        plain = [t for t in part.terms if not isinstance(t, Waves)]
        for i, size in enumerate(sizes):
            if plain and size != n:
                raise SettingsError(
                    "other terms beside staggered waves are assembled on periodic grids only",
                    "boundary",
                )
            blocks[i][i] = scalar if plain else Sparse((size, size))
        if plain and self.scheme.shape and self.layout == "staggered":
            raise SettingsError(
                "other terms beside staggered waves need numbers as coefficients here", "terms"
            )
        told = "energy of the waves: p / c and velocities"
        return Operator(
            part.integrator, Sparse(sp.block_array(blocks)), None, np.concatenate(scales), told
        )

    def _wave_blocks(self, term: Waves, c2: Array, axis: int) -> tuple[Sparse, Sparse, Array]:
        """-div on one velocity, -r grad, and the velocity's scale."""
        h = self.spacing[axis]
        if term.form == "collocated":
            n, ends = self.box.shape[axis], self.box.ends[axis]
            slope = along(first_derivative(FIRST[term.stencil], n, ends), self.box, axis)
            slope = Sparse(-(sp.diags_array(1.0 / h) @ slope))
            inside = c2 if term.mean != "cell" else np.ones_like(c2)
            return slope, Sparse(sp.diags_array(inside) @ slope), 1.0 / np.sqrt(inside)
        if term.stencil != "central2":
            raise SettingsError(
                f"the staggered {term.stencil} stencil is not assembled",
                f"{term.name} stencil",
                "its symbol is available",
            )
        difference = face_difference(self.box, axis)
        distance = on_faces(h, self.box, axis, "arithmetic")
        inside = (
            np.ones(distance.size)
            if term.mean == "cell"
            else on_faces(c2, self.box, axis, term.mean)
        )
        across = on_faces(self.volume / h, self.box, axis, "arithmetic")
        down = Sparse(sp.diags_array(1.0 / h) @ difference.T)
        up = Sparse(-(sp.diags_array(inside / distance) @ difference))
        weight = np.sqrt(distance * across / self.volume.max() / np.maximum(inside, 1e-300))
        return down, up, weight

    def _system(self, part: Part, scalar: Sparse) -> Operator:
        system = next((t for t in part.terms if isinstance(t, System)), None)
        every = next(t for t in self.scheme.terms if isinstance(t, System))
        m, n = every.source.shape[0], self.box.size
        matrix = sp.kron(sp.eye_array(m), scalar)
        if system is not None:
            stencil = FIRST[system.stencil]
            matrix = matrix + sp.kron(system.source, sp.eye_array(n))
            for axis, slope in enumerate(system.matrices):
                width, ends = self.box.shape[axis], self.box.ends[axis]
                inverse = sp.diags_array(1.0 / self.spacing[axis])
                central = along(first_derivative(stencil, width, ends), self.box, axis)
                matrix = matrix - sp.kron(slope, inverse @ central)
                if stencil.damping[0]:
                    loss = along(upwind_part(stencil, width, ends), self.box, axis)
                    matrix = matrix + sp.kron(matrix_modulus(slope), inverse @ loss)
        return Operator(
            part.integrator, Sparse(matrix), None, np.ones(m * n), "the fields as given"
        )

    def _cells(self, value: Coefficient) -> Array:
        """A coefficient on all cells of the box, flattened."""
        return np.broadcast_to(np.asarray(value, dtype=np.float64), self.box.shape).ravel()
