"""Largest stable steps of whole schemes against published von Neumann limits."""

from __future__ import annotations

import math

import numpy as np
import pytest

from probes.limits.integrators import CATALOGUE
from probes.limits.scheme import Part, Scheme
from probes.limits.terms import (
    Advection,
    Bending,
    Diffusion,
    Reaction,
    Stencil,
    System,
    Term,
    Waves,
)
from probes.limits.vonneumann import Analysis
from tests.probes.limits.made import largest, scheme

# (integrator, terms, spacing, largest step, source). Chapters and sections from memory.
LIMITS: dict[str, tuple[str, tuple[Term, ...], tuple[float, ...], float]] = {
    # Forward Euler for heat: dt <= h**2 / (2 k); in d dimensions 1 / (2 k sum 1 / h**2). LeVeque
    # 2007, sections 9.3 and 9.7; Strikwerda 2004, section 6.3.
    "heat": ("euler", (Diffusion(1.0),), (0.1,), 0.005),
    "heat, 3-D": ("euler", (Diffusion(2.0),), (0.1, 0.2, 0.3), 0.25 / (100 + 25 + 100 / 9)),
    # The symbol of the fourth-order second difference reaches 16 / 3 (Fornberg 1988).
    "heat, fourth order": ("euler", (Diffusion(1.0, "central4"),), (1.0,), 2.0 / (16 / 3)),
    "heat, spectral": ("euler", (Diffusion(1.0, "spectral"),), (1.0,), 2.0 / math.pi**2),
    # Upwind: Courant number <= 1 (Courant, Friedrichs and Lewy 1928; LeVeque 2007, section 10.4),
    # in several dimensions the sum of them.
    "upwind": ("euler", (Advection((2.0,), "upwind1"),), (0.5,), 0.25),
    "upwind, leftwards": ("euler", (Advection((-2.0,), "upwind1"),), (0.5,), 0.25),
    "upwind, 2-D": ("euler", (Advection((1.0, -2.0), "upwind1"),), (1.0, 1.0), 1 / 3),
    # Lax and Wendroff 1960: Courant number <= 1; in two dimensions |a|**(2/3) + |b|**(2/3) <= 1
    # (Turkel 1977).
    "Lax-Wendroff": ("euler", (Advection((-2.0,), "lax-wendroff"),), (0.5,), 0.25),
    "Lax-Wendroff, 2-D": (
        "euler",
        (Advection((1.0, 2.0), "lax-wendroff"),),
        (1.0, 1.0),
        (1.0 + 2.0 ** (2 / 3)) ** -1.5,
    ),
    # Leapfrog with central differences: Courant number <= 1 (Strikwerda 2004, section 4.1); fourth
    # order 0.7287 (Durran 2010, section 3.3: 1 / 1.3722).
    "leapfrog": ("leapfrog", (Advection((1.0,)),), (1.0,), 1.0),
    "leapfrog, fourth order": ("leapfrog", (Advection((1.0,), "central4"),), (1.0,), 0.72873),
    # Central differences: the integrator's imaginary limit.
    "RK3, central": ("rk3", (Advection((1.0,)),), (1.0,), math.sqrt(3.0)),
    "RK4, central": ("rk4", (Advection((1.0,)),), (1.0,), math.sqrt(8.0)),
    "RK4, central, 3-D": ("rk4", (Advection((1.0, 1.0, 1.0)),), (1.0,) * 3, math.sqrt(8.0) / 3),
    "AB3, central": ("ab3", (Advection((1.0,)),), (1.0,), 0.72363),
    # Spectral derivatives: i pi at most (Trefethen 2000, chapter 10); compact fourth order sqrt(3)
    # (Lele 1992, section 4.1).
    "RK4, spectral": ("rk4", (Advection((1.0,), "spectral"),), (1.0,), math.sqrt(8.0) / math.pi),
    "RK4, compact": ("rk4", (Advection((1.0,), "compact4"),), (1.0,), math.sqrt(8.0 / 3.0)),
    # Linear fifth-order upwinding: 1.43 with SSP RK3, 1.73 with RK4 (Wang and Spiteri 2007;
    # Motamed, Macdonald and Ruuth 2011).
    "SSP RK3, WENO5": ("ssprk3", (Advection((1.0,), "weno5"),), (1.0,), 1.435),
    "RK4, WENO5": ("rk4", (Advection((1.0,), "weno5"),), (1.0,), 1.732),
    # Forward time, central space with diffusion: dt <= min(h**2 / (2 k), 2 k / a**2) (Hirsch 2007,
    # section 8.3); in several dimensions 2 / sum a**2 / k (Hindmarsh, Gresho and Griffiths 1984).
    "FTCS, long waves": ("euler", (Advection((1.0,)), Diffusion(0.1)), (1.0,), 0.2),
    "FTCS, short waves": ("euler", (Advection((0.1,)), Diffusion(1.0)), (1.0,), 0.5),
    "FTCS, cell Reynolds 1e6": ("euler", (Advection((1.0,)), Diffusion(1e-6)), (1.0,), 2e-6),
    "FTCS, 2-D": (
        "euler",
        (Advection((1.0, 2.0)), Diffusion((0.1, 0.3))),
        (1.0, 1.0),
        2.0 / (1.0 / 0.1 + 4.0 / 0.3),
    ),
    # Staggered waves: c dt sqrt(sum 1 / h**2) <= 1 (Yee 1966; Taflove and Hagness 2005, section
    # 4.7); fourth order 6 / 7 of it (Levander 1988).
    "Yee, 3-D": ("verlet", (Waves(1.5),), (0.1, 0.2, 0.3), 1 / 1.5 / math.sqrt(125 + 100 / 9)),
    "staggered, fourth order": (
        "verlet",
        (Waves(1.0, stencil="central4"),),
        (1.0, 1.0),
        6 / 7 / math.sqrt(2.0),
    ),
    "wave equation, 2-D": ("verlet", (Waves(1.0, "second-order"),), (1.0, 1.0), math.sqrt(0.5)),
    # 2 / omega_max with omega_max = 4 sqrt(b) / h**2 for a beam (Hughes 1987, section 9.1;
    # Strikwerda 2004, section 8.2).
    "beam": ("verlet", (Bending(4.0, "second-order"),), (0.5,), 0.0625),
    # Reaction: the integrator's real limit; an oscillator by its imaginary one.
    "decay": ("rk4", (Reaction(-10.0),), (1.0,), 0.27853),
    "spring": ("verlet", (Reaction(-9.0),), (1.0,), 2 / 3),
    # A first-order system (waves of speed 1 both ways) behaves as each of its waves.
    "system, RK4": (
        "rk4",
        (System((np.array([[0.0, 1.0], [1.0, 0.0]]),), np.zeros((2, 2))),),
        (1.0,),
        math.sqrt(8.0),
    ),
    "system, upwind": (
        "euler",
        (System((np.array([[0.0, 2.0], [0.5, 0.0]]),), np.zeros((2, 2)), "upwind1"),),
        (1.0,),
        1.0,
    ),
    # Upwind differences written out by hand.
    "stencil": ("euler", (Stencil(((0,), (-1,)), (-2.0, 2.0)),), (0.5,), 0.5),
}


@pytest.mark.parametrize("name", LIMITS)
def test_published_limits(name: str) -> None:
    """Each to the digits that are published, closed forms to 1e-6 (long-wave limits are met to
    their square)."""
    integrator, terms, spacing, want = LIMITS[name]
    digits = 6e-4 if "WENO5" in name else 2e-5 if "AB3" in name or name == "decay" else 1e-6
    if name == "leapfrog, fourth order":
        digits = 1e-4
    assert largest(integrator, *terms, spacing=spacing) == pytest.approx(want, rel=digits)


@pytest.mark.parametrize(
    ("integrator", "terms", "cause"),
    [
        # Forward-time central advection (LeVeque 2007, section 10.2), Heun and AB2 with it (Durran
        # 2010, chapters 2 and 3), leapfrog diffusion (Strikwerda 2004, section 6.3), Euler with
        # third- and fifth-order upwinding (Wang and Spiteri 2007).
        ("euler", (Advection((1.0,)),), "time"),
        ("heun", (Advection((1.0,)),), "time"),
        ("ab2", (Advection((1.0, 1.0)),), "time"),
        ("leapfrog", (Diffusion(1.0),), "time"),
        ("euler", (Advection((1.0,), "upwind3"),), "time"),
        ("euler", (Advection((1.0,), "weno5"),), "time"),
        ("heun", (Waves(1.0),), "time"),
        # Differences on the downwind side (Courant, Friedrichs and Lewy 1928).
        ("rk4", (Stencil(((0,), (1,)), (1.0, -1.0)),), "space"),
    ],
)
def test_no_step_is_stable(integrator: str, terms: tuple[Term, ...], cause: str) -> None:
    """The limit is zero, and whether time or space is to blame is told."""
    axes = len(terms[0].velocity) if isinstance(terms[0], Advection) else 1
    limit = Analysis(scheme(integrator, *terms, spacing=(1.0,) * axes)).largest_step()
    assert limit.dt.value == 0.0
    assert limit.dt.reason
    assert limit.cause == cause


def test_heun_with_central_advection() -> None:
    """Its limit is zero, and at Courant number 0.1 it grows by 1.25e-5 a step, |R(i nu)| = sqrt(1 +
    nu**4 / 4), for waves of four cells (both from the polynomial)."""
    analysis = Analysis(scheme("heun", Advection((1.0,))))
    growth = analysis.growth(0.1)
    assert analysis.largest_step().dt.value == 0.0
    assert growth.factor - 1.0 == pytest.approx(1.25e-5, rel=1e-3)
    assert growth.wave.cells == pytest.approx(4.0, rel=1e-3)
    assert not growth.stable


@pytest.mark.parametrize(("steps", "growth"), [(10_000, 2.0), (100, 1.5)])
def test_a_budget_of_growth(steps: int, growth: float) -> None:
    """The largest Courant number with (1 + nu**4 / 4)**(steps / 2) <= growth, solved by hand."""
    limit = Analysis(scheme("heun", Advection((1.0,)))).largest_step(math.log(growth) / steps)
    want = (4.0 * (growth ** (2.0 / steps) - 1.0)) ** 0.25
    assert limit.dt.value == pytest.approx(want, rel=1e-6)


def test_growth_of_the_equation_itself_is_allowed() -> None:
    """u_t = r u with r > 0 grows by R(r dt) <= exp(r dt): von Neumann's condition holds, at any
    step (Strikwerda 2004, section 2.2)."""
    analysis = Analysis(scheme("rk4", Reaction(3.0), Diffusion(1.0)))
    growth = analysis.growth(0.1)
    assert growth.factor > 1.3
    assert growth.stable
    assert growth.allowed == pytest.approx(math.exp(0.3), rel=1e-12)


def test_pattern_formation_is_no_instability() -> None:
    """u_t = -u_xx - u_xxxx grows at k = sqrt(1 / 2) by 1 / 4 per unit time at most (Kuramoto 1978);
    explicit steps are limited by the fourth derivative, 2.7853 / (16 / h**4 - 4 / h**2)."""
    h = 0.5
    want = 2.785293563 / (16.0 / h**4 - 4.0 / h**2)
    assert largest("rk4", Diffusion(-1.0), Bending(1.0), spacing=(h,)) == pytest.approx(
        want, rel=1e-3
    )
    # With the exact symbol's own growth at most 1 / 4 in h -> 0, and on this grid below it.
    growth = Analysis(scheme("rk4", Diffusion(-1.0), Bending(1.0), spacing=(h,))).growth(0.01)
    assert growth.allowed <= math.exp(0.25 * 0.01) * (1.0 + 1e-12)
    assert growth.stable


def test_the_worst_wave() -> None:
    """Heat above its limit grows fastest at two cells along every axis, by 4 r d - 1 (LeVeque
    2007, section 9.6)."""
    growth = Analysis(scheme("euler", Diffusion(1.0), spacing=(1.0, 1.0))).growth(0.3)
    assert growth.factor == pytest.approx(8 * 0.3 - 1.0, rel=1e-12)
    assert growth.wave.cells_per_axis == pytest.approx((2.0, 2.0))


def test_split_steps() -> None:
    """One after the other the factors multiply: with Euler diffusion at its own limit and RK3
    advection, at the wave theta, |R3(i nu sin)| (1 - 4 r sin(theta / 2)**2)."""
    split = Scheme(
        (
            Part(CATALOGUE["rk3"], (Advection((1.0,)),)),
            Part(CATALOGUE["euler"], (Diffusion(0.1),)),
        ),
        (1.0,),
    )
    theta = np.linspace(0.1, 3.0, 30)[None]
    z = -1j * np.sin(theta[0]) * 1.9
    want = np.abs(1 + z + z**2 / 2 + z**3 / 6) * np.abs(1 - 4 * 0.19 * np.sin(theta[0] / 2) ** 2)
    got = np.exp(Analysis(split).at(theta, 1.9))
    assert got == pytest.approx(want, rel=1e-12)


def test_nothing_limits_nothing() -> None:
    """Zero coefficients and pure growth have no limit, and say so."""
    for terms in ((Diffusion(0.0),), (Reaction(2.0),)):
        limit = Analysis(scheme("rk4", *terms)).largest_step()
        assert limit.dt.value is None
        assert limit.dt.reason


@pytest.mark.parametrize("integrator", ["euler", "rk4", "ab2", "ab3"])
def test_the_limit_separates(integrator: str) -> None:
    """Just below the found step no wave grows, just above one does (the definition), in three
    dimensions with unequal coefficients."""
    terms = (Advection((1.0, 0.3, -0.5)), Diffusion((0.3, 0.2, 0.4)))
    spacing = (1.0, 0.8, 0.9)
    dt = largest(integrator, *terms, spacing=spacing)
    analysis = Analysis(scheme(integrator, *terms, spacing=spacing))
    assert analysis.growth(dt * (1.0 - 1e-6)).factor <= 1.0 + 1e-12
    assert analysis.growth(dt * (1.0 + 1e-3)).factor > 1.0


def test_a_brute_force_search_finds_no_smaller_limit() -> None:
    """A million random waves at a step 1e-6 below the limit: none grows."""
    terms = (Advection((1.0, 0.3)), Diffusion((0.3, 0.2)))
    dt = largest("rk4", *terms, spacing=(1.0, 0.8))
    angles = np.random.default_rng(60_313).uniform(-np.pi, np.pi, (2, 1_000_000))
    analysis = Analysis(scheme("rk4", *terms, spacing=(1.0, 0.8)))
    assert analysis.at(angles, dt * (1.0 - 1e-6)).max() <= 1e-12
