"""Integrators against published limits, general-purpose libraries and their own definitions."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.integrate
import scipy.integrate._ivp.rk as scipy_methods

from probes.limits.axes import growth_law, imaginary_limit, real_limit
from probes.limits.integrators import (
    CATALOGUE,
    Integrator,
    filtered_leapfrog,
    multistep,
    runge_kutta_chebyshev,
    stability_polynomial,
    tableau,
)

# Largest |z| on the negative real and on the imaginary axis.
# Runge-Kutta: Hairer and Wanner 1996, section IV.2; Durran 2010, section 2.3. Adams-Bashforth:
# Hairer and Wanner 1996, section V.1; Durran 2010, section 2.4. Leapfrog: Durran 2010, section
# 2.4. Central difference in time: omega dt <= 2, Hughes 1987, section 9.1. (Sections from memory.)
PUBLISHED = {
    "euler": (2.0, 0.0),
    "midpoint": (2.0, 0.0),
    "heun": (2.0, 0.0),
    "ssprk3": (2.5127, math.sqrt(3.0)),
    "rk4": (2.7853, 2.0 * math.sqrt(2.0)),
    "ab2": (1.0, 0.0),
    "ab3": (6.0 / 11.0, 0.7236),
    "leapfrog": (0.0, 1.0),
    "verlet": (4.0, 2.0),
}


@pytest.mark.parametrize("name", PUBLISHED)
def test_limits_on_both_axes(name: str) -> None:
    """The printed digits of the books' real and imaginary limits."""
    real, imaginary = PUBLISHED[name]
    assert real_limit(CATALOGUE[name]).value == pytest.approx(real, abs=6e-5)
    assert imaginary_limit(CATALOGUE[name]).value == pytest.approx(imaginary, abs=6e-5)


def test_closed_forms_of_limits() -> None:
    """RK3 and RK4 on the real axis solve 1 + R = 0 and 1 - R = 0 (the polynomials' definition),
    found here by NumPy's roots; AB3's imaginary limit squared is (5 + sqrt(5)) ... from Schur-Cohn
    is left to the printed 0.7236; RK4's imaginary one is exactly 2 sqrt(2)."""
    three = [r.real for r in np.roots([1 / 6, 1 / 2, 1, 2]) if abs(r.imag) < 1e-9]
    four = [r.real for r in np.roots([1 / 24, 1 / 6, 1 / 2, 1]) if abs(r.imag) < 1e-9]
    assert real_limit(CATALOGUE["rk3"]).value == pytest.approx(-min(three), rel=1e-9)
    assert real_limit(CATALOGUE["rk4"]).value == pytest.approx(-min(four), rel=1e-9)
    assert imaginary_limit(CATALOGUE["rk4"]).value == pytest.approx(math.sqrt(8.0), rel=1e-9)


@pytest.mark.parametrize(
    ("name", "coefficient", "power"),
    [
        # |R(i nu)| from the polynomials: Euler 1 + nu**2 / 2, second order 1 + nu**4 / 8, RK3
        # 1 - nu**4 / 24, RK4 1 - nu**6 / 144; AB2 1 + nu**4 / 4, AB3 1 - 3 nu**4 / 8 (Durran 2010,
        # table 2.1, from memory).
        ("euler", 1 / 2, 2),
        ("heun", 1 / 8, 4),
        ("rk3", -1 / 24, 4),
        ("rk4", -1 / 144, 6),
        ("ab2", 1 / 4, 4),
        ("ab3", -3 / 8, 4),
    ],
)
def test_weak_growth_of_waves(name: str, coefficient: float, power: float) -> None:
    """The leading term of ln|root| along the imaginary axis."""
    law = growth_law(CATALOGUE[name], 1.0j)
    assert law.power == power
    assert law.coefficient == pytest.approx(coefficient, rel=2e-3)


def test_heun_at_a_tenth() -> None:
    """Heun's method at z = 0.1 i grows by sqrt(1 + nu**4 / 4) = 1.0000125 (the polynomial)."""
    growth = CATALOGUE["heun"].growth(np.array([0.1j]))[0]
    assert growth == pytest.approx(0.5 * math.log1p(0.1**4 / 4.0), rel=1e-12)


@pytest.mark.parametrize("gamma", [0.01, 0.1, 0.3])
def test_filtered_leapfrog(gamma: float) -> None:
    """Both roots are gamma + z +- sqrt((1 - gamma)**2 + z**2) (Durran 2010, section 2.4; Asselin
    1972). Where the root turns imaginary, its modulus is one at omega dt =
    sqrt((1 - gamma) / (1 + gamma)): put z = i omega dt into that formula."""
    method = filtered_leapfrog(gamma)
    z = np.array([0.3j, -0.2 + 0.5j, 1.3j, -1.0])
    apart = np.sqrt((1.0 - gamma) ** 2 + z**2)
    want = np.sort_complex(np.stack([gamma + z + apart, gamma + z - apart]).T)
    assert np.abs(np.sort_complex(method.roots(z).T) - want).max() <= 1e-14
    limit = math.sqrt((1.0 - gamma) / (1.0 + gamma))
    assert imaginary_limit(method).value == pytest.approx(limit, rel=1e-9)


@pytest.mark.parametrize("stages", [2, 5, 10, 30])
def test_chebyshev_limits(stages: int) -> None:
    """First order without damping reaches 2 s**2; second order with damping 2 / 13 about
    2 / 3 (s**2 - 1)(1 - 2 eps / 15), some 0.65 s**2 (Sommeijer, Shampine and Verwer 1998)."""
    first = real_limit(runge_kutta_chebyshev(stages, 1, 0.0)).value
    assert first == pytest.approx(2.0 * stages**2, rel=1e-9)
    damping = 2.0 / 13.0
    second = real_limit(runge_kutta_chebyshev(stages, 2, damping)).value
    published = 2.0 / 3.0 * (stages**2 - 1) * (1.0 - 2.0 * damping / 15.0)
    # The published interval ends where T_s(w0 + w1 z) leaves [-1, 1], a little before |R| = 1.
    assert second is not None
    assert 0.99 * published <= second <= 1.07 * published
    if stages >= 10:
        assert second / stages**2 == pytest.approx(0.65, abs=0.005)


@pytest.mark.parametrize("order", [1, 2])
def test_chebyshev_order(order: int) -> None:
    """R(z) agrees with exp(z) up to z**order and not beyond."""
    z = np.array([1e-2 + 0.0j])
    gap = abs(runge_kutta_chebyshev(7, order, 0.1).roots(z)[0, 0] - np.exp(z[0]))
    assert 1e-3 < gap / 1e-2 ** (order + 1) < 1.0


@pytest.mark.parametrize("name", CATALOGUE)
def test_roots_are_those_of_the_characteristic_polynomial(name: str) -> None:
    """NumPy's roots of rho(x) - z sigma(x), and NumPy's eigenvalues of the small matrices."""
    method = CATALOGUE[name]
    z = np.array([-0.7 + 0.4j, 0.9j, -3.0, 0.3, 0.01 - 2.0j])
    for value, roots in zip(z, method.roots(z).T, strict=True):
        matrix = [[entry.at(np.array([value]))[0] for entry in row] for row in method.blocks]
        want = np.roots(np.poly(np.array(matrix)))
        apart = np.abs(roots[:, None] - want[None, :])
        assert max(apart.min(axis=0).max(), apart.min(axis=1).max()) <= 1e-7


@pytest.mark.parametrize("levels", [2, 3, 4])
def test_multistep_methods_of_any_length(levels: int) -> None:
    """Adams-Bashforth coefficients integrate polynomials exactly: the principal root is exp(z) up
    to z**levels (Hairer, Norsett and Wanner 1993, section III.1)."""
    moments = np.vander(-np.arange(levels, dtype=float), increasing=True).T
    slopes = np.linalg.solve(moments, 1.0 / np.arange(1, levels + 1))
    method = multistep("ab", "Adams-Bashforth", (1.0, *[0.0] * (levels - 1)), tuple(slopes))
    z = 1e-2
    gap = np.abs(method.roots(np.array([z + 0j]))[:, 0] - math.exp(z)).min()
    assert 0.05 < gap / z ** (levels + 1) < 1.0


@pytest.mark.parametrize(
    ("method", "real"),
    [
        # Hairer and Wanner 1996, section IV.2 (figures, from memory): 2.51 and 3.31.
        (scipy_methods.RK23, 2.51),
        (scipy_methods.RK45, 3.31),
    ],
)
def test_a_tableau_of_a_library(method: type, real: float) -> None:
    """SciPy's tableaus give the books' limits, and SciPy's own step on y' = l y multiplies by the
    same number."""
    ours = tableau(method.A.tolist(), method.B.tolist())
    assert real_limit(ours).value == pytest.approx(real, abs=0.01)
    rate, h = -0.8 + 1.3j, 0.7

    def slope(_t: float, y: np.ndarray) -> np.ndarray:
        return rate * y

    stages = np.empty((method.n_stages + 1, 1), dtype=complex)
    start = np.array([1.0 + 0.0j])
    moved, _ = scipy_methods.rk_step(
        slope, 0.0, start, slope(0.0, start), h, method.A, method.B, method.C, stages
    )
    assert ours.roots(np.array([rate * h]))[0, 0] == pytest.approx(moved[0], rel=1e-13)
    assert scipy.integrate.RK45 is scipy_methods.RK45


def test_a_classical_tableau() -> None:
    """The tableau of the classical method is that of the catalogue (Hairer, Norsett and Wanner
    1993, section II.1)."""
    ours = tableau([[], [0.5], [0.0, 0.5], [0.0, 0.0, 1.0]], [1 / 6, 1 / 3, 1 / 3, 1 / 6])
    z = np.array([-1.0 + 1.0j, 2.0j])
    assert np.abs(ours.roots(z) - CATALOGUE["rk4"].roots(z)).max() <= 1e-15


def test_a_given_polynomial() -> None:
    """1 + z + z**2 / 2 is any second-order method of two stages."""
    ours = stability_polynomial([1, 1, 0.5])
    assert real_limit(ours).value == pytest.approx(2.0, rel=1e-9)


@pytest.mark.parametrize(
    "make",
    [
        lambda: tableau([[0.5], [0.5, 0.0]], [1.0, 0.0]),
        lambda: tableau([[], [0.5], [0.1, 0.2]], [0.5, 0.5]),
        lambda: stability_polynomial([1.1, 1.0]),
        lambda: stability_polynomial([1.0]),
        lambda: runge_kutta_chebyshev(1, 2, 0.1),
    ],
)
def test_what_is_no_explicit_method_is_refused(make: object) -> None:
    """Implicit tableaus, polynomials that do not begin with one, too few stages."""
    assert callable(make)
    with pytest.raises(ValueError, match=r"tableau|begins with 1|stages"):
        make()


@pytest.mark.parametrize("name", CATALOGUE)
def test_a_step_and_its_transpose(name: str) -> None:
    """<A x, y> = <x, A' y> for random states, and A's eigenvalues for L = z are the roots."""
    method = CATALOGUE[name]
    rng = np.random.default_rng(55_120)
    matrix = rng.standard_normal((6, 6))
    x, y = rng.standard_normal((2, method.levels, 6))
    forward = method.advance(matrix.__matmul__, x)
    back = method.advance_transposed(matrix.T.__matmul__, y)
    assert np.vdot(forward, y) == pytest.approx(np.vdot(x, back), rel=1e-12)


def step_matrix(method: Integrator, z: float) -> np.ndarray:
    columns = [method.advance(lambda v: z * v, e[:, None])[:, 0] for e in np.eye(method.levels)]
    return np.array(columns).T


@pytest.mark.parametrize("name", CATALOGUE)
def test_a_step_of_a_number_has_the_roots(name: str) -> None:
    """Stepping a scalar equation is a small matrix whose eigenvalues are the roots."""
    method = CATALOGUE[name]
    want = np.sort_complex(np.linalg.eigvals(step_matrix(method, -0.37)))
    got = np.sort_complex(method.roots(np.array([-0.37 + 0j]))[:, 0])
    assert np.abs(got - want).max() <= 1e-12
