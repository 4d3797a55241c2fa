"""Which step to restart with."""

from __future__ import annotations

import math

import numpy as np
import pytest

from demo_runs import basin, plate
from probes.limits.cells import CellAnalysis
from probes.limits.integrators import CATALOGUE
from probes.limits.records import Found
from probes.limits.restart import MOST, from_growth, from_limit, limit_ratio
from probes.limits.terms import Advection, Diffusion, Stencil
from probes.limits.vonneumann import Analysis, Limit
from tests.probes.limits.made import scheme


@pytest.mark.parametrize("factor", [1.01, 1.4, 3.0, 20.0])
def test_closed_forms(factor: float) -> None:
    """Forward Euler on the negative real axis: z = -(1 + G) and the limit -2, so 2 / (1 + G). The
    staggered leapfrog: omega dt / 2 = (sqrt(G) + 1 / sqrt(G)) / 2 and the limit 1 (from z**2 -
    (2 - (omega dt)**2) z + 1 = 0 at z = -G). RK4 on the imaginary axis: |R(i y)| = G, solved here
    with NumPy's roots."""
    assert limit_ratio(CATALOGUE["euler"], factor, "damped") == pytest.approx(
        2.0 / (1.0 + factor), rel=1e-9
    )
    assert limit_ratio(CATALOGUE["verlet"], factor, "wave") == pytest.approx(
        2.0 * math.sqrt(factor) / (1.0 + factor), rel=1e-6
    )
    # |R(i y)|**2 = 1 - y**6 / 72 + y**8 / 576.
    squares = np.roots([1 / 576, -1 / 72, 0.0, 0.0, 1.0 - factor**2])
    y = math.sqrt(max(s.real for s in squares if abs(s.imag) < 1e-9))
    assert limit_ratio(CATALOGUE["rk4"], factor, "wave") == pytest.approx(
        math.sqrt(8.0) / y, rel=1e-6
    )


def test_a_wave_is_not_a_damped_mode() -> None:
    """1 % above its limit a staggered leapfrog grows by 1.33 and needs 0.99 (derivation above); the
    formula for heat would have said 0.86."""
    factor = (1.01 + math.sqrt(1.01**2 - 1.0)) ** 2
    assert factor == pytest.approx(1.33, abs=0.005)
    assert limit_ratio(CATALOGUE["verlet"], factor, "wave") == pytest.approx(1 / 1.01, rel=1e-6)


def test_never_above_095() -> None:
    """Just beyond the limit the advice keeps a distance of 5 %."""
    advice = from_growth(CATALOGUE["verlet"], 1.01, 1.02)
    assert advice.ratio.value is not None
    assert advice.ratio.value <= MOST
    assert advice.ratio.high == pytest.approx(1.0, abs=1e-3)
    near = from_limit(Limit(Found.exactly(0.99), None), 1.0)
    assert near.ratio.value is not None
    assert near.ratio.value <= MOST


def test_an_unknown_mode_gets_a_range() -> None:
    """RK4 that grew by 1.5: between a wave's and a damped mode's ratio, the stricter is advised."""
    advice = from_growth(CATALOGUE["rk4"], 1.5, 1.5)
    each = [limit_ratio(CATALOGUE["rk4"], 1.5, ray) for ray in ("damped", "wave")]  # type: ignore[arg-type]
    assert (advice.ratio.low, advice.ratio.high) == (min(each), max(each))  # type: ignore[type-var]
    assert advice.ratio.value == pytest.approx(MOST * min(each))  # type: ignore[type-var]
    assert "or" in advice.assumes


def test_what_no_step_cures() -> None:
    """Heun amplifies waves at any step: said with the range; known to be a wave, no number."""
    open_ = from_growth(CATALOGUE["heun"], 1.01, 1.01)
    assert open_.ratio.low == 0.0
    assert "does not cure" in open_.ratio.reason
    wave = from_growth(CATALOGUE["heun"], 1.01, 1.01, "wave")
    assert (wave.ratio.value, wave.curable) == (None, False)


@pytest.mark.parametrize(
    ("made", "said"),
    [
        # Forward-time central advection, and differences on the downwind side (LeVeque 2007,
        # sections 10.2 and 10.4).
        (scheme("euler", Advection((1.0,))), "no smaller step cures it"),
        (scheme("rk4", Stencil(((0,), (1,)), (1.0, -1.0))), "no smaller step cures it"),
        # A step within the limit: something else grew.
        (scheme("euler", Diffusion(1.0)), "80.0% of the scheme's limit"),
    ],
)
def test_schemes_that_a_smaller_step_does_not_help(made: object, said: str) -> None:
    """The reason stands instead of a number."""
    limit = Analysis(made).largest_step()  # type: ignore[arg-type]
    advice = from_limit(limit, 0.4)
    assert advice.ratio.value is None
    assert not advice.curable
    assert said in advice.ratio.reason


@pytest.mark.parametrize("step_factor", [1.02, 1.3])
def test_advice_for_demo_runs_is_stable(step_factor: float) -> None:
    """From the growth that the demo solvers are known to have, the advised step lies below their
    known limit, and not below half of it."""
    heat = from_growth(CATALOGUE["euler"], *[plate.growth(step_factor).factor] * 2, ray="damped")
    waves = from_growth(CATALOGUE["verlet"], *[basin.growth(step_factor).factor] * 2)
    for advice in (heat, waves):
        assert advice.ratio.value is not None
        assert 0.5 <= step_factor * advice.ratio.value < 1.0
        assert advice.ratio.high == pytest.approx(1.0 / step_factor, rel=1e-6)


def test_the_configured_schemes_limit_comes_first() -> None:
    """The plate's frozen coefficients are a little strict, so the advice is stable too."""
    made = scheme("euler", Diffusion(plate.conductivity()), spacing=(plate.SPACING,) * 2)
    failed = 1.05 * plate.limit_step()
    advice = from_limit(CellAnalysis(made).limit().limit, failed)
    assert advice.ratio.value is not None
    assert 0.9 * plate.limit_step() <= advice.ratio.value * failed < plate.limit_step()
