"""Ritz pairs against dense eigenvalues and published closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest

from probes import modes


def differences(matrix: np.ndarray, start: np.ndarray, count: int) -> np.ndarray:
    """Successive differences of u, A u, A A u, ..."""
    states = [start]
    for _ in range(count):
        states.append(matrix @ states[-1])
    return np.diff(np.array(states), axis=0).T


def heat_matrix(n: int, r: float) -> np.ndarray:
    """Forward Euler, central differences, Dirichlet: 1 - 2r on the diagonal, r beside it."""
    return (1 - 2 * r) * np.eye(n) + r * (np.eye(n, k=1) + np.eye(n, k=-1))


def test_toeplitz_eigenvalue_of_the_heat_equation() -> None:
    """The dominant factor of forward Euler above its limit is found from differences.

    Eigenvalues of a tridiagonal Toeplitz matrix: 1 - 4 r sin(j pi / (2 (n + 1)))**2
    (LeVeque 2007, section 2.10; Smith 1985, page 154).
    """
    n, r = 40, 0.55
    matrix = heat_matrix(n, r)
    state = np.random.default_rng(1234).standard_normal(n)
    for _ in range(400):
        state = matrix @ state
        state /= np.abs(state).max()
    pair = modes.ritz_pairs(differences(matrix, state, 6))[0]
    published = 1 - 4 * r * math.sin(n * math.pi / (2 * (n + 1))) ** 2
    assert pair.value.real == pytest.approx(published, rel=1e-6)
    assert pair.value.imag == 0.0


def test_leapfrog_pair() -> None:
    """Above its limit the leapfrog wave scheme has the real pair
    G = r**2 ... : roots of z**2 - (2 - 4 r**2) z + 1 at the zigzag (Strikwerda 2004, section 8.2):
    the larger modulus is (r + sqrt(r**2 - 1))**2."""
    r = 1.02
    k = 4 * r * r
    matrix = np.array([[2 - k, -1.0], [1.0, 0.0]])
    pair = modes.ritz_pairs(differences(matrix, np.array([1.0, 0.3]), 4))
    largest = max(abs(p.value) for p in pair)
    assert largest == pytest.approx((r + math.sqrt(r * r - 1)) ** 2, rel=1e-9)


def test_dense_eigenvalues_of_random_matrices() -> None:
    """With as many differences as dimensions the Ritz values are the eigenvalues (numpy)."""
    rng = np.random.default_rng(998)
    matrix = rng.standard_normal((4, 4))
    reference = np.linalg.eigvals(matrix)
    found = modes.ritz_pairs(differences(matrix, rng.standard_normal(4), 5))
    for value in (p.value for p in found):
        assert np.abs(reference - value).min() < 1e-6 * np.abs(reference).max()


def test_growing_mode_under_a_larger_decaying_one() -> None:
    """A zigzag of 1e-9 that grows by 1.05 is separated from a smooth field that decays."""
    n = 200
    x = np.arange(n)
    smooth, zigzag = np.sin(np.pi * x / n), np.where(x % 2, 1.0, -1.0)
    states = [0.99**k * smooth + 1e-9 * 1.05**k * zigzag for k in range(7)]
    pairs = modes.ritz_pairs(np.diff(np.array(states), axis=0).T)
    growing = max(pairs, key=lambda p: abs(p.value))
    assert growing.value.real == pytest.approx(1.05, rel=1e-4)
    part = 1e-9 * 1.05**5 * 0.05 * math.sqrt(n)
    assert growing.size == pytest.approx(part, rel=1e-3)
    assert modes.size_in_field(growing.size, growing.value, 1e-3) == pytest.approx(
        1e-9 * 1.05**6 * math.sqrt(n), rel=1e-2
    )


def test_complex_pair_has_a_plane() -> None:
    """A rotation with growth gives one of the conjugate pair and a two-dimensional basis."""
    turn = 1.03 * np.array([[math.cos(0.7), -math.sin(0.7)], [math.sin(0.7), math.cos(0.7)]])
    d = differences(turn, np.array([1.0, 0.2]), 5)
    (pair,) = modes.ritz_pairs(d)
    assert abs(pair.value) == pytest.approx(1.03)
    assert math.atan2(pair.value.imag, pair.value.real) == pytest.approx(0.7)
    assert pair.vectors(d).shape == (2, 2)


def test_noise_hides_what_is_below_it() -> None:
    """Directions below the stated noise are dropped; nothing at all gives no pairs."""
    rng = np.random.default_rng(16180)
    noise = rng.standard_normal((500, 6))
    assert modes.ritz_pairs(noise, noise=3.0 * math.sqrt(500)) == []
    assert modes.ritz_pairs(np.zeros((10, 4))) == []
    assert modes.ritz_pairs(np.full((10, 4), np.inf)) == []


def test_noise_does_not_bias_towards_decay() -> None:
    """The total-least-squares form keeps the factor where plain least squares underestimates it
    (Hemati, Rowley, Deem and Cattafesta 2017): median over 40 trials within 1 %."""
    rng = np.random.default_rng(65537)
    truth, found, plain = 1.1, [], []
    for _ in range(40):
        v = rng.standard_normal(4000)
        d = np.outer(v, truth ** np.arange(6)) + 0.5 * rng.standard_normal((4000, 6))
        x, y = d[:, :-1].ravel(), d[:, 1:].ravel()
        plain.append(float(x @ y / (x @ x)))
        noise = 0.5 * math.sqrt(4000)
        found.append(max(abs(p.value) for p in modes.ritz_pairs(d, noise)))
    assert np.median(found) == pytest.approx(truth, rel=0.01)
    assert np.median(plain) < truth - 0.05


def test_a_leap_beyond_all_bounds_is_no_mode() -> None:
    """A difference 1e200 times the one before, as at an overflow, gives no pair and no warning."""
    leap = np.array([[1e-200, 1.0], [2e-200, -1.0], [1e-200, 0.5]])
    assert modes.ritz_pairs(leap) == []


def test_likeness_is_the_squared_cosine() -> None:
    """Parallel vectors 1, orthogonal 0, 60 degrees a quarter; a plane contains its vectors."""
    a = np.array([[1.0], [0.0], [0.0]])
    b = np.array([[0.5], [math.sqrt(0.75)], [0.0]])
    assert modes.likeness(a, 7.0 * a) == pytest.approx(1.0)
    assert modes.likeness(a, b) == pytest.approx(0.25)
    assert modes.likeness(a, np.eye(3)[:, 1:]) == pytest.approx(0.0)
    assert modes.likeness(a, np.eye(3)[:, :2]) == pytest.approx(1.0)
    assert modes.likeness(a, np.zeros((3, 1))) == 0.0


def test_no_size_near_one() -> None:
    """Within the doubt of mu = 1 the size in the field is not known."""
    assert modes.size_in_field(1.0, 1.0005 + 0j, 1e-3) is None
