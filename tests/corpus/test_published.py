"""Factors of the cases' solvers against closed forms, each from the source named beside it."""

from __future__ import annotations

import math

import numpy as np
import pytest

from tests.corpus.cases import BY_NAME, carrying
from tests.corpus.growing import WaveNumbers


def leapfrog(share: float) -> float:
    """Larger root of z + 1/z = 2 - 4 s**2 in modulus, at a share s > 1 of the limit (LeVeque 2007,
    section 10.2.2; Virieux 1986 for the elastic case, which has the same dispersion relation)."""
    return (share + math.sqrt(share * share - 1.0)) ** 2


@pytest.mark.parametrize(
    ("name", "factor"),
    [
        # 1 - 4 r sum sin(theta / 2)**2 with r = share / (2 d): 2 share - 1 (LeVeque 2007, 9.3).
        ("heat_1d_half_percent", 1.01),
        ("heat_1d_double", 3.0),
        ("heat_2d_two_percent", 1.04),
        ("heat_3d_ten_percent", 1.2),
        # A surface mode, by the formula in `heat.boundary`, derived there.
        ("heat_1d_boundary", 1.05),
        # Zigzag in the upwind symbol: 1 - 2 nu, nu summed over the axes (LeVeque 2007, 10.4).
        ("advection_1d_upwind_half", 1.01),
        ("advection_2d_upwind", 1.04),
        ("advection_3d_upwind_f4", 1.1),
        # Zigzag in the Lax-Wendroff symbol: 1 - 2 nu**2 (LeVeque 2007, 10.3).
        ("advection_1d_lax_wendroff_f4", 2.0 * 1.01**2 - 1.0),
        ("acoustics_1d_half_percent", leapfrog(1.005)),
        ("acoustics_2d_staggered", leapfrog(1.02)),
        ("acoustics_3d_two_percent", leapfrog(1.02)),
        ("elastic_plane_half_percent", leapfrog(1.005)),
        ("elastic_plane_in_single", leapfrog(1.005)),
        ("shallow_2d_half_percent", leapfrog(1.005)),
        ("bending_beam_half_percent", leapfrog(1.005)),
        ("bending_plate_f4", leapfrog(1.005)),
        # Zigzag in the symbol of the fourth difference, 16, forward Euler: 1 - 16 r = 1 - 2 share.
        ("bending_film_one_percent", 1.02),
        # dt = share * 2 / w_max of M^-1 K (Belytschko, Liu and Moran, section 6.2, from memory).
        ("febar_one_percent", leapfrog(1.01)),
        # Forward Euler of viscosity in spectral space: 1 - nu k**2 dt = 1 - 2 share.
        ("vorticity_two_percent", 1.04),
    ],
)
def test_the_factor_is_the_published_one(name: str, factor: float) -> None:
    """The factor that comes from the solver's own step is the closed form, whatever the draw."""
    assert BY_NAME[name].run(draw=41).truth.factor == pytest.approx(factor, rel=1e-6)


def test_central_differences_with_forward_euler() -> None:
    """|g|**2 = 1 + nu**2 sin(theta)**2, largest at four cells (LeVeque 2007, section 10.2)."""
    nu = 0.23
    modes = WaveNumbers(lambda s: [carrying.central(s[0], nu)], [(64,)])
    assert modes.factor == pytest.approx(math.sqrt(1.0 + nu * nu), rel=1e-12)


def test_diffusion_at_the_middle_level_of_leapfrog() -> None:
    """At the zigzag z**2 + 8 r z - 1 = 0: the root -4 r - sqrt(1 + 16 r**2) is outside the circle
    for every r (the scheme of Richardson 1910, unstable for any step; LeVeque 2007,
    section 9.5)."""
    r = 0.004
    modes = WaveNumbers(lambda s: carrying.leapfrog(s, 0.3, r), [(64,)] * 2)
    assert modes.factor == pytest.approx(4.0 * r + math.sqrt(1.0 + 16.0 * r * r), rel=1e-12)


def test_the_limit_of_the_third_order_scheme() -> None:
    """Third-order upwind-biased differences with three Runge-Kutta stages are stable up to Courant
    number of 1.626 (Baldauf 2008, table 1, from memory; Wicker and Skamarock 2002 give 1.61)."""
    found = carrying.limit_of(lambda nu: lambda s: [carrying.third_order(s[0], nu)], 1.0, 2.5)
    assert found == pytest.approx(1.626, abs=0.003)


@pytest.mark.parametrize(
    ("name", "slack"),
    [
        ("heat_2d_insert", 0.0),
        ("acoustics_1d_echo", 0.0),
        ("advection_1d_packet", 0.3),
        ("reaction_2d_relaxing", 0.0),
    ],
)
def test_the_growing_part_grows_by_the_factor(name: str, slack: float) -> None:
    """Between contaminations of 1e-9 (where seeds have died down) and 1e-2 the norm of the growing
    part rises by the factor to the number of steps: within 3 % in ln, more for a packet, which
    spreads and so grows a little more slowly."""
    truth = BY_NAME[name].run(draw=41).truth
    share = np.array(truth.contamination)
    seen = (share > 1e-5) & (share < 1e-2)
    steps = np.array(truth.steps)[seen]
    slope = np.polyfit(steps, np.log(share[seen]), 1)[0]
    assert slope == pytest.approx(math.log(truth.factor or 0.0), rel=0.03 + slack)
