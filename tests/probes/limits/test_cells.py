"""Frozen coefficients in every cell of a grid."""

from __future__ import annotations

import tracemalloc

import numpy as np
import pytest

from probes.limits.cells import CellAnalysis
from probes.limits.integrators import CATALOGUE
from probes.limits.lookup import GrowthTable
from probes.limits.numbers import numbers
from probes.limits.scheme import Part, Scheme
from probes.limits.terms import Advection, Diffusion, Reaction, Term, Waves
from probes.limits.vonneumann import Analysis
from probes.limits.wavenumbers import candidates, few
from tests.probes.limits.made import scheme

RNG = np.random.default_rng(41_203)
U, V = 1.0 + RNG.random((2, 3, 5))
K = 0.1 + 0.2 * RNG.random((3, 5))
CASES: dict[str, tuple[str, tuple[Term, ...]]] = {
    "euler": ("euler", (Advection((U, -V)), Diffusion(K))),
    "rk4": ("rk4", (Advection((U, 0.5), "upwind3"), Diffusion((K, 0.2)))),
    "ab3": ("ab3", (Advection((U, V)), Diffusion(K), Reaction(-V))),
    "leapfrog": ("leapfrog", (Advection((U, V)),)),
    "verlet": ("verlet", (Waves(U),)),
    "waves in a stream": ("rk3", (Waves(V), Advection((U, V)))),
}


@pytest.mark.parametrize("name", CASES)
def test_the_limit_is_the_smallest_of_all_cells(name: str) -> None:
    """Each cell by itself, with its numbers, and the smallest of their limits."""
    integrator, terms = CASES[name]
    made = scheme(integrator, *terms, spacing=(1.0, 0.8))
    each = [Analysis(made, cell).largest_step().dt.value for cell in range(15)]
    found = CellAnalysis(made).limit()
    smallest = min(v for v in each if v is not None)
    assert found.limit.dt.value == pytest.approx(smallest, rel=1e-7)
    assert found.cell == np.unravel_index(int(np.argmin(np.array(each, dtype=float))), (3, 5))


@pytest.mark.parametrize("name", CASES)
def test_the_map_shows_each_cells_factor(name: str) -> None:
    """Below and above the limit, cell by cell against a full search: never above it, and mostly
    within 1 % of its logarithm."""
    integrator, terms = CASES[name]
    made = scheme(integrator, *terms, spacing=(1.0, 0.8))
    known = CellAnalysis(made).limit()
    assert known.limit.dt.value
    dt = 1.3 * known.limit.dt.value
    found = CellAnalysis(made).at(dt, known)
    want = np.array([np.log(Analysis(made, c).growth(dt).factor) for c in range(15)])
    got = np.log(found.factor.ravel())
    assert (got <= want + 1e-9).all()
    assert np.median(np.abs(got - want)) <= 0.01 * want.max()
    assert found.growth.factor == pytest.approx(float(np.exp(want.max())), rel=1e-3)


def test_a_stretched_grid() -> None:
    """Heat on cells of 0.1 to 0.2: the smallest cell sets the limit, h**2 / 2 (LeVeque 2007,
    section 9.3)."""
    h = np.linspace(0.2, 0.1, 12)
    found = CellAnalysis(scheme("euler", Diffusion(1.0), spacing=(h,))).limit()
    assert found.cell == (11,)
    assert found.limit.dt.value == pytest.approx(0.005, rel=1e-9)


@pytest.mark.parametrize(("width", "true"), [(8, 1.0), (12, 1.010), (16, 1.022)])
def test_a_narrow_spot(width: int, true: float) -> None:
    """Heat, limit exceeded by 2 % in a square of this many cells: the true factors of the assembled
    matrix, which frozen coefficients put at 1.040, and which a confined wave estimates."""
    k = np.full((48, 48), 0.5)
    k[16 : 16 + width, 16 : 16 + width] = 1.0
    made = scheme("euler", Diffusion(k), spacing=(1.0, 1.0))
    found = CellAnalysis(made).at(1.02 * 0.25)
    assert found.growth.factor == pytest.approx(1.04, rel=1e-9)
    assert found.spot is not None
    assert found.spot.widths == (width, width)
    assert found.spot.cells == width**2
    assert not any(found.spot.whole)
    assert max(1.0, found.spot.confined) == pytest.approx(true, abs=1.5e-3)


def test_a_spot_from_end_to_end() -> None:
    """A strip that reaches across is as wide as the grid there, and a wave is not confined."""
    k = np.full((20, 20), 0.1)
    k[5:9] = 1.0
    spot = CellAnalysis(scheme("euler", Diffusion(k), spacing=(1.0, 1.0))).at(0.3).spot
    assert spot is not None
    assert spot.widths == (4, 20)
    assert spot.whole == (False, True)


def test_nothing_exceeds() -> None:
    """Below the limit there is no spot and no cell above one."""
    found = CellAnalysis(scheme("euler", Diffusion(K), spacing=(1.0, 1.0))).at(0.5)
    assert found.spot is None
    assert found.factor.max() <= 1.0


def test_memory_is_bounded_by_the_coefficients() -> None:
    """A cube of 48**3 cells with three coefficient fields takes a few arrays of its size, not one
    for each of hundreds of waves."""
    shape = (48, 48, 48)
    u, v, k = 1.0 + RNG.random((3, *shape))
    made = scheme("euler", Advection((u, v, 0.5), "upwind1"), Diffusion(k), spacing=(1.0,) * 3)
    one = u.nbytes
    tracemalloc.start()
    found = CellAnalysis(made).at(0.05)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert found.factor.shape == shape
    assert peak < 40 * one


def test_the_growth_table() -> None:
    """Interpolated growth is that of the roots to 0.02 over the plane, both halves alike."""
    method = CATALOGUE["ab3"]
    table = GrowthTable(method, 3.0)
    z = RNG.uniform(-2.0, 2.0, 500) + 1j * RNG.uniform(-2.0, 2.0, 500)
    assert np.abs(table(z) - method.growth(z)).max() <= 0.02
    assert (table(z) == table(z.conj())).all()


@pytest.mark.parametrize("axes", [1, 2, 3])
def test_waves_that_are_tried(axes: int) -> None:
    """Half of all directions, the shortest waves and the longest ones, none twice."""
    for angles in (candidates(axes), few(axes)):
        assert np.abs(angles).max() == pytest.approx(np.pi)
        assert (np.abs(angles - np.pi).max(axis=0) < 1e-9).any()
        lengths = np.abs(angles).max(axis=0)
        assert 0.0 < lengths[lengths > 0.0].min() <= 1e-3
        assert np.unique(angles, axis=1).shape == angles.shape


def test_each_terms_own_number() -> None:
    """Courant number sum |a| dt / h, diffusion number sum k dt / h**2, cell Reynolds number
    |a| h / k, each at most what the term alone allows (Hirsch 2007, chapter 8)."""
    made = scheme(
        "rk4",
        Advection((1.0, -2.0), "upwind1"),
        Diffusion((0.5, 0.1)),
        Reaction(-3.0),
        spacing=(0.5, 0.25),
    )
    found = {n.name: n for n in numbers(made, 0.01)}
    assert found["advective Courant number"].value == pytest.approx(0.01 * (2.0 + 8.0))
    assert found["diffusion number"].value == pytest.approx(0.01 * (2.0 + 1.6))
    assert found["reaction number"].value == pytest.approx(0.03)
    assert found["cell Reynolds number"].value == pytest.approx(5.0)
    # Real limit 2.7853: upwind and heat reach -2 nu and -4 d along the negative real axis.
    assert found["advective Courant number"].alone == pytest.approx(2.7853 / 2.0, rel=1e-4)
    assert found["diffusion number"].alone == pytest.approx(2.7853 / 4.0, rel=1e-4)
    assert found["reaction number"].alone == pytest.approx(2.7853, rel=1e-4)


def test_numbers_of_waves() -> None:
    """c dt sqrt(sum 1 / h**2), at most 1 for a staggered leapfrog (Yee 1966), with the largest
    speed of all cells."""
    made = scheme("verlet", Waves(U), spacing=(1.0, 1.0))
    (found,) = numbers(made, 0.1)
    assert found.value == pytest.approx(0.1 * U.max() * np.sqrt(2.0))
    assert found.alone == pytest.approx(1.0, rel=1e-6)


def test_parts_with_fields() -> None:
    """A split scheme over cells multiplies its parts' factors cell by cell."""
    split = Scheme(
        (
            Part(CATALOGUE["rk3"], (Advection((U, V)),)),
            Part(CATALOGUE["euler"], (Diffusion(K),)),
        ),
        (1.0, 1.0),
    )
    found = CellAnalysis(split).at(1.5)
    want = [Analysis(split, c).growth(1.5).factor for c in range(15)]
    assert found.growth.factor == pytest.approx(max(want), rel=1e-3)
