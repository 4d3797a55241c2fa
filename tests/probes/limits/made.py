"""Schemes to test with, built in one line."""

from __future__ import annotations

from probes.limits.grids import Box
from probes.limits.integrators import CATALOGUE, Integrator
from probes.limits.scheme import Part, Scheme
from probes.limits.terms import Coefficient, Term
from probes.limits.vonneumann import Analysis

FIXED, CLOSED, ROUND = (
    ("dirichlet", "dirichlet"),
    ("neumann", "neumann"),
    ("periodic", "periodic"),
)
INFLOW = ("dirichlet", "neumann")


def scheme(
    integrator: str | Integrator, *terms: Term, spacing: tuple[Coefficient, ...] = (1.0,)
) -> Scheme:
    method = CATALOGUE[integrator] if isinstance(integrator, str) else integrator
    return Scheme((Part(method, terms),), spacing)


def largest(
    integrator: str | Integrator, *terms: Term, spacing: tuple[Coefficient, ...] = (1.0,)
) -> float:
    """The symbol's largest step."""
    value = Analysis(scheme(integrator, *terms, spacing=spacing)).largest_step().dt.value
    assert value is not None
    return value


def line(n: int, ends: tuple[str, str] = ROUND) -> Box:
    return Box((n,), (ends,))
