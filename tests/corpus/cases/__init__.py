"""All cases, family by family. Names and counts are fixed: add, never rename; a case that has to
go keeps its line, with `removed` saying why."""

from __future__ import annotations

from tests.corpus.case import Case, Family
from tests.corpus.cases import (  # noqa: F401
    acoustics,
    acoustics_healthy,
    advection,
    advection_healthy,
    bending,
    burgers,
    elastic,
    febar,
    heat,
    heat_healthy,
    kuramoto,
    reaction,
    reaction_healthy,
    shallow,
    shallow_healthy,
    vorticity,
)

FAMILIES: tuple[Family, ...] = (
    heat.FAMILY,
    advection.FAMILY,
    acoustics.FAMILY,
    elastic.FAMILY,
    shallow.FAMILY,
    burgers.FAMILY,
    kuramoto.FAMILY,
    reaction.FAMILY,
    vorticity.FAMILY,
    bending.FAMILY,
    febar.FAMILY,
)
CASES: tuple[Case, ...] = tuple(case for family in FAMILIES for case in family.cases)
BY_NAME = {case.name: case for case in CASES}
