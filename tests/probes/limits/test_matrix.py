"""Norms, radius, powers and verdicts of assembled steps."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.linalg
import scipy.sparse as sp

from probes.limits.assemble import assemble
from probes.limits.grids import Box
from probes.limits.matrix import MatrixAnswer, analyse, step_of
from probes.limits.matrixlimit import largest_step, of_matrix
from probes.limits.normal import lanczos, spectrum
from probes.limits.norms import kreiss, numerical_radius, two_norm
from probes.limits.powers import transient
from probes.limits.radius import spectral_radius
from probes.limits.scheme import Scheme
from probes.limits.stepping import MatrixStep, Step, dense
from probes.limits.structure import groups
from probes.limits.terms import Advection, Diffusion, Waves
from tests.probes.limits.made import CLOSED, FIXED, INFLOW, ROUND, line, scheme

HEAT = scheme("euler", Diffusion(1.0))
UPWIND = scheme("euler", Advection((1.0,), "upwind1"))
MIXED = scheme("euler", Advection((1.0,)), Diffusion(0.3))


def judged(what: Scheme, box: Box, dt: float, steps: int = 500) -> MatrixAnswer:
    step, weight = step_of(what, box, dt)
    return analyse(step, weight, steps)


def given(matrix: np.ndarray) -> Step:
    return MatrixStep(sp.csr_array(matrix))


def dense_powers(matrix: np.ndarray, steps: int) -> np.ndarray:
    """Norms of the powers, by NumPy's singular values."""
    out, now = [1.0], np.eye(matrix.shape[0])
    for _ in range(steps):
        now = matrix @ now
        out.append(float(np.linalg.norm(now, 2)))
    return np.array(out)


@pytest.mark.parametrize("ratio", [0.3, 0.5, 0.5001, 1.0, 1.5])
def test_the_heat_equations_norm(ratio: float) -> None:
    """100 unknowns between fixed ends: max over j of |1 - 4 r sin(j pi / 202)**2| (LeVeque 2007,
    section 9.6). 0.9995 at r = 0.5, 4.9985 at 1.5, and 2.999 for the often misquoted limit r = 1
    (common practice, no source)."""
    answer = judged(HEAT, line(100, FIXED), ratio)
    j = np.arange(1, 101)
    want = np.abs(1.0 - 4.0 * ratio * np.sin(j * np.pi / 202) ** 2).max()
    assert answer.norm.value == pytest.approx(want, rel=1e-12)
    assert answer.radius.value.value == pytest.approx(want, rel=1e-12)
    assert answer.word == ("contractive" if want <= 1.0 else "unstable")
    printed = {0.5: 0.9995, 1.0: 2.999, 1.5: 4.9985}
    if ratio in printed:
        assert answer.norm.value == pytest.approx(printed[ratio], abs=5e-5)


def test_upwind_with_an_inflow() -> None:
    """100 cells at Courant number 1.5: the step is bidiagonal with 1 - 1.5 on its diagonal, so its
    radius is 0.5, and its powers reach 1e46 before they decay (Trefethen and Embree 2005, chapters
    24 and 32, for the kind; the size by dense powers)."""
    answer = judged(UPWIND, line(100, INFLOW), 1.5, 1000)
    norms = dense_powers(dense(step_of(UPWIND, line(100, INFLOW), 1.5)[0]), 400)
    assert answer.radius.value.value == pytest.approx(0.5, rel=1e-14)
    assert answer.word == "unstable in practice"
    assert not answer.stable
    assert answer.transient.at == int(norms.argmax())
    assert answer.transient.largest.value == pytest.approx(norms.max(), rel=0.01)
    assert 1e45 < norms.max() < 1e47
    # Kreiss: some power is at least the constant, and no power above e n times it.
    assert answer.kreiss.value is not None
    assert norms.max() / (math.e * 100 * 1.01) <= answer.kreiss.value <= norms.max()


def test_upwind_within_its_limit_never_grows() -> None:
    """Courant number 0.9: rows and columns sum to one at most, so the norm is one at most (the
    geometric mean of both sums bounds it; Golub and Van Loan 2013, section 2.3)."""
    answer = judged(UPWIND, line(100, INFLOW), 0.9)
    assert answer.word == "contractive"
    assert answer.norm.value is not None
    assert 0.99 < answer.norm.value <= 1.0


@pytest.mark.parametrize("dt", [0.55, 0.6])
def test_transient_growth_under_a_radius_below_one(dt: float) -> None:
    """Strong advection between fixed ends: the norm exceeds one, the eigenvalues (their closed form
    below) do not, and the largest power is that of dense computation to 1 %."""
    what = scheme("euler", Advection((1.0,)), Diffusion(0.26))
    step, _ = step_of(what, line(40, FIXED), dt)
    # Tridiagonal Toeplitz: d + 2 sqrt(b c) cos(j pi / (n + 1)) (Strang 1999; Smith 1985, ch. 3).
    b, c = dt * (0.26 + 0.5), complex(dt * (0.26 - 0.5))
    middle = 1.0 - 2.0 * dt * 0.26
    exact = np.abs(middle + 2.0 * np.sqrt(b * c) * np.cos(np.arange(1, 41) * np.pi / 41)).max()
    assert exact < 1.0
    answer = analyse(step, "", 400)
    norms = dense_powers(dense(step), 400)
    assert answer.norm.value == pytest.approx(norms[1], rel=1e-12)
    assert norms.max() > 1.0
    assert answer.transient.largest.value == pytest.approx(norms.max(), rel=0.01)
    assert answer.word == "transient"
    if answer.radius.value.value is not None:
        assert answer.radius.value.value == pytest.approx(exact, rel=0.02)


def test_a_radius_that_rounding_decides_is_declined() -> None:
    """A Toeplitz matrix turned by an orthogonal one hides its structure; its true radius is 0.55,
    computed ones differ (Trefethen and Embree 2005, chapter 7, on such eigenvalues)."""
    n = 60
    toeplitz = scipy.linalg.toeplitz(
        [0.5, 1.0, *[0.0] * (n - 2)], [0.5, 0.000625, *[0.0] * (n - 2)]
    )
    exact = 0.5 + 2.0 * math.sqrt(0.000625) * math.cos(math.pi / (n + 1))
    assert exact == pytest.approx(0.55, abs=1e-3)
    turn, _ = np.linalg.qr(np.random.default_rng(8_111).standard_normal((n, n)))
    radius = spectral_radius(given(turn @ toeplitz @ turn.T))
    assert radius.value.value is None
    assert "rounding" in radius.value.reason
    assert radius.condition is not None
    assert radius.condition > 1e10


def test_structure_gives_what_rounding_does_not() -> None:
    """The permuted bidiagonal matrix has the radius 0.5 of its diagonal; turned by an orthogonal
    matrix, which hides its structure, NumPy's eigenvalues are far off."""
    n = 100
    matrix = np.diag(np.full(n, -0.5)) + np.diag(np.full(n - 1, 1.5), -1)
    order = np.random.default_rng(3_301).permutation(n)
    found = spectral_radius(given(matrix[np.ix_(order, order)]))
    assert found.value.value == 0.5
    assert "structure" in found.how
    turn, _ = np.linalg.qr(np.random.default_rng(3_301).standard_normal((n, n)))
    assert np.abs(np.linalg.eigvals(turn @ matrix @ turn.T)).max() > 0.6


def test_groups_of_unknowns() -> None:
    """0 and 1 feed each other, 2 is fed only."""
    pattern = sp.csr_array(np.array([[1.0, 1, 0], [1, 1, 0], [0, 1, 1]]))
    assert [set(g.tolist()) for g in groups(pattern)] == [{0, 1}, {2}]


def test_a_normal_matrixs_condition_is_one() -> None:
    """A rotation that shrinks by 0.9: radius 0.9, condition 1."""
    turn = 0.9 * np.array([[0.6, -0.8], [0.8, 0.6]])
    radius = spectral_radius(given(turn))
    assert radius.value.value == pytest.approx(0.9, rel=1e-14)
    assert radius.condition == pytest.approx(1.0, rel=1e-12)


@pytest.mark.parametrize("n", [2, 5, 9])
def test_the_numerical_radius_of_a_jordan_block(n: int) -> None:
    """cos(pi / (n + 1)) (Horn and Johnson 1991, section 1.7)."""
    found = numerical_radius(np.diag(np.ones(n - 1), 1))
    assert found.value == pytest.approx(math.cos(math.pi / (n + 1)), rel=1e-6)


def test_kreiss_bounds_the_powers() -> None:
    """For random matrices of radius 0.9 the bound lies below the largest power and above it divided
    by e n (Kreiss 1962; Trefethen and Embree 2005, chapter 18)."""
    rng = np.random.default_rng(90_907)
    for _ in range(5):
        matrix = np.triu(rng.standard_normal((8, 8)))
        matrix[np.diag_indices(8)] = rng.uniform(-0.9, 0.9, 8)
        found = kreiss(matrix).value
        top = dense_powers(matrix, 300).max()
        assert found is not None
        assert top / (math.e * 8) <= found <= top * (1.0 + 1e-9)


def test_the_norm_without_forming_the_matrix() -> None:
    """1,000 unknowns of advection and diffusion: the iteration agrees with NumPy's singular values
    to 1e-3."""
    step, _ = step_of(MIXED, line(1000, FIXED), 0.62)
    assert two_norm(step).value == pytest.approx(np.linalg.norm(dense(step), 2), rel=1e-3)


@pytest.mark.parametrize(("mixing", "dt"), [(0.3, 0.62), (0.3, 0.7), (0.2, 0.5)])
def test_powers_without_forming_the_matrix(mixing: float, dt: float) -> None:
    """150 unknowns: the largest power is that of dense computation to 1 %, and never above it."""
    what = scheme("euler", Advection((1.0,)), Diffusion(mixing))
    step, _ = step_of(what, line(150, FIXED), dt)
    norms = dense_powers(dense(step), 400)
    found = transient(step, 400).largest.value
    assert found is not None
    assert 0.99 * norms.max() <= found <= norms.max() * (1.0 + 1e-9)


def test_leapfrog_at_its_limit_is_marginal() -> None:
    """At Courant number 1 the roots +-i are double for waves of four cells: powers grow in
    proportion to k (the root condition; Strikwerda 2004, section 4.2)."""
    what = scheme("leapfrog", Advection((1.0,)))
    at, below = (judged(what, line(64), dt) for dt in (1.0, 0.9))
    assert (at.word, below.word) == ("marginal", "transient")
    assert at.transient.largest.value == pytest.approx(2.0 * 500, rel=0.01)


def test_staggered_waves_keep_their_energy() -> None:
    """A staggered leapfrog conserves p(k)**2 and v(k-1/2) v(k+1/2) taken together, so that at
    Courant number C the energy changes by 1 / (1 - C**2) at most: powers stay below twice its root
    (Strikwerda 2004, section 8.2, for the kind)."""
    answer = judged(scheme("verlet", Waves(1.0)), line(60, CLOSED), 0.8)
    assert answer.word == "transient"
    assert answer.transient.largest.value is not None
    assert answer.transient.largest.value <= 2.0 / math.sqrt(1.0 - 0.64)
    assert answer.radius.value.value == pytest.approx(1.0, abs=1e-9)


def test_drift_is_no_instability() -> None:
    """u_tt = u_xx between closed ends lets the uniform state drift at a constant rate; that is told
    apart and does not make the step marginal."""
    answer = judged(scheme("verlet", Waves(1.0, "second-order")), line(30, CLOSED), 0.8)
    assert answer.drift
    assert answer.stable


def test_both_ends_of_a_spectrum() -> None:
    """Lanczos meets the closed form (Strang 1999) from inside, the bounds from outside."""
    step, _ = step_of(HEAT, line(3000, FIXED), 1.0)
    matrix, sign = step.normal  # type: ignore[attr-defined]
    assert sign == 1
    low, high = lanczos(matrix)
    exact = -4.0 * np.sin(np.array([3000, 1]) * np.pi / 6002) ** 2
    assert low[1] <= exact[0] <= low[0] <= exact[0] * (1.0 - 1e-3)
    assert high[0] <= exact[1] <= high[1]
    small = spectrum(step_of(HEAT, line(50, FIXED), 1.0)[0].normal[0], 1)  # type: ignore[attr-defined]
    assert small.all
    assert small.z.real.min() == pytest.approx(-4.0 * np.sin(50 * np.pi / 102) ** 2, rel=1e-12)


@pytest.mark.parametrize("size", [50, 2000])
def test_limits_of_assembled_operators(size: int) -> None:
    """2 / (4 sin(n pi / (2 (n + 1)))**2) for heat between fixed ends; large ones as an interval."""
    found = largest_step(assemble(HEAT, line(size, FIXED)))
    exact = 0.5 / np.sin(size * np.pi / (2 * (size + 1))) ** 2
    assert found.low is not None
    assert found.high is not None
    assert found.low * (1.0 - 1e-9) <= exact <= found.high * (1.0 + 1e-9)
    assert found.high / found.low <= 1.001


def test_eigenvalues_alone_allow_twice_the_courant_number() -> None:
    """|1 - nu| <= 1 up to nu = 2 (the bidiagonal matrix): why the symbol's limit counts too."""
    assert largest_step(assemble(UPWIND, line(60, INFLOW))).value == pytest.approx(2.0, rel=1e-9)


def test_a_matrix_without_a_stable_step() -> None:
    """A rotation: forward Euler and Heun amplify it at any step, RK4 up to sqrt(8) / 2."""
    turn = np.array([[0.0, -2.0], [2.0, 0.0]])
    methods = {name: scheme(name, Diffusion(1.0)).parts[0].integrator for name in ("euler", "rk4")}
    assert of_matrix(methods["euler"], turn).value == 0.0
    assert of_matrix(methods["rk4"], turn).value == pytest.approx(math.sqrt(2.0), rel=1e-9)
    assert of_matrix(methods["rk4"], np.zeros((3, 3))).value is None


def test_periodic_advection_is_normal() -> None:
    """Central differences on a ring: RK3 contracts below sqrt(3) and grows beyond."""
    what = scheme("rk3", Advection((1.0,)))
    assert judged(what, Box((32,), (ROUND,)), 1.7).word == "contractive"
    assert judged(what, Box((32,), (ROUND,)), 1.75).word == "unstable"


def test_mixed_terms_are_judged_by_their_powers() -> None:
    """Where the radius is declined the verdict rests on the powers."""
    answer = judged(MIXED, line(100, FIXED), 0.7)
    norms = dense_powers(dense(step_of(MIXED, line(100, FIXED), 0.7)[0]), 500)
    assert answer.word == "transient"
    assert answer.transient.largest.value == pytest.approx(norms.max(), rel=0.01)
