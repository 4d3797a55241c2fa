"""Polynomials of numbers and of matrices."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.polynomial import chebyshev

from probes.limits.integrators import runge_kutta_chebyshev
from probes.limits.polynomials import Chebyshev, Polynomial, Powers, chebyshev_value, product, total
from probes.limits.roots import cubic

CASES: list[Polynomial] = [
    Powers((1.0, 1.0, 0.5, 1 / 6)),
    Powers((0.8, 0.2)),
    runge_kutta_chebyshev(6, 2, 0.1).blocks[0][0],
]


@pytest.mark.parametrize("case", CASES)
def test_of_a_matrix_it_is_that_of_the_eigenvalues(case: Polynomial) -> None:
    """p(V diag(z) V^-1) v = V p(z) V^-1 v, with NumPy's eigenvectors of a random matrix."""
    rng = np.random.default_rng(9_147)
    matrix = 0.5 * rng.standard_normal((5, 5))
    v = rng.standard_normal(5)
    z, vectors = np.linalg.eig(matrix)
    want = vectors @ (case.at(z.astype(complex)) * np.linalg.solve(vectors, v))
    assert np.abs(case.of(matrix.__matmul__, v) - want).max() <= 1e-11


@pytest.mark.parametrize("case", CASES)
def test_less_one(case: Polynomial) -> None:
    """It is the value minus one, and where that is tiny it keeps its digits."""
    z = np.array([-0.4 + 0.2j, 1.5j])
    assert np.abs(case.less_one(z) - (case.at(z) - 1.0)).max() <= 1e-14
    if case.at(np.zeros(1, dtype=complex))[0] == pytest.approx(1.0):
        tiny = case.less_one(np.array([1e-12 + 0j]))[0]
        assert tiny == pytest.approx(1e-12, rel=1e-10)


def test_chebyshev_polynomials_are_numpys() -> None:
    """T_s, its first and its second derivative at a point, by NumPy's series."""
    for s in (1, 2, 7, 12):
        series = np.zeros(s + 1)
        series[s] = 1.0
        want = [
            chebyshev.chebval(1.05, chebyshev.chebder(series, d) if d else series) for d in range(3)
        ]
        assert chebyshev_value(s, 1.05) == pytest.approx(tuple(want), rel=1e-12)


def test_evaluation_stays_stable_with_many_stages() -> None:
    """|T_s| <= 1 between -1 and 1: fifty stages stay below one on the real axis, where powers of
    z would have lost all digits."""
    case = runge_kutta_chebyshev(50, 1, 0.0).blocks[0][0]
    assert isinstance(case, Chebyshev)
    z = -np.linspace(0.0, 2.0 * 50**2, 999).astype(complex)
    assert np.abs(case.at(z)).max() <= 1.0 + 1e-10


def test_sums_and_products() -> None:
    """(1 + x)(2 - x) = 2 + x - x**2, and sums of different length."""
    assert product((1.0, 1.0), (2.0, -1.0)) == (2.0, 1.0, -1.0)
    assert total((1.0,), (0.0, 2.0), (1.0, 1.0, 1.0)) == (2.0, 3.0, 1.0)


def test_cubic_roots() -> None:
    """Random cubics, and one with a triple root, against NumPy's companion matrices."""
    rng = np.random.default_rng(31_007)
    a, b, c = rng.standard_normal((3, 200)) + 1j * rng.standard_normal((3, 200))
    got = np.sort_complex(cubic(a, b, c).T)
    want = np.array([np.sort_complex(np.roots([1, *abc])) for abc in zip(a, b, c, strict=True)])
    assert np.abs(got - want).max() <= 1e-10
    triple = cubic(*(np.array([v], dtype=complex) for v in (-3.0, 3.0, -1.0)))
    assert np.abs(triple - 1.0).max() <= 1e-4
