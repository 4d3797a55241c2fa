"""Settings that name a scheme: ``[scheme]`` and ``[[scheme.terms]]`` of ``stepwarden.toml``."""

from __future__ import annotations

from typing import Literal

import msgspec

# A number, or a text: a file of values per cell, or a formula of a snapshot's fields.
Amount = float | str
Amounts = float | str | tuple[float | str, ...]


class TermSpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[[scheme.terms]]``: one term of the equation and how it is discretised in space.

    name: for people; "" means the kind. velocity: per axis (advection). coefficient: diffusivity
    (one, or one per axis), bending stiffness, or what a stencil's weights are multiplied by. speed:
    of waves. rate: of a reaction, negative where it decays. stencil, form, mean: "" means the
    usual one (see probes.limits.terms). offsets, weights: of a stencil of one's own. matrices,
    source: of a system of fields. integrator: "" means the scheme's; another one is a split step.
    """

    kind: Literal["advection", "diffusion", "wave", "reaction", "bending", "stencil", "system"]
    name: str = ""
    velocity: Amounts = ()
    coefficient: Amounts = ()
    speed: Amount = ""
    rate: Amount = ""
    stencil: str = ""
    form: str = ""
    mean: str = ""
    offsets: tuple[tuple[int, ...], ...] = ()
    weights: tuple[float, ...] = ()
    matrices: tuple[tuple[tuple[float, ...], ...], ...] = ()
    source: tuple[tuple[float, ...], ...] = ()
    integrator: str = ""


class SchemeSpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[scheme]``: how the solver marches.

    integrator: a name (see probes.limits.integrators), or "lax-wendroff", "upwind", "ftcs" for
    these whole schemes, "rkc", "tableau", "polynomial" with the keys below.
    spacing: cell size per axis; a text is a file with one size per cell of that axis.
    step: the time step to be judged; 0 means none is given.
    terms: the equation.
    cells: grid of the assembled matrix; () means that of the coefficients, or no matrix.
    boundary: per axis "periodic", "dirichlet", "neumann", or two of these words for its two ends.
    snapshot: file whose fields the formulas name.
    stages, damping, order: of "rkc"; damping -1 means the usual one. filter: Robert-Asselin
    coefficient of "leapfrog". tableau, weights: of "tableau". polynomial: its coefficients.
    """

    integrator: str = "euler"
    spacing: tuple[float | str, ...] = ()
    step: float = 0.0
    terms: tuple[TermSpec, ...] = ()
    cells: tuple[int, ...] = ()
    boundary: tuple[str, ...] = ()
    snapshot: str = ""
    stages: int = 0
    damping: float = -1.0
    order: int = 2
    filter: float = 0.0
    tableau: tuple[tuple[float, ...], ...] = ()
    weights: tuple[float, ...] = ()
    polynomial: tuple[float, ...] = ()
