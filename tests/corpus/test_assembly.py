"""Matrices and symbols from the solvers' own steps, against unit vectors and textbooks."""

from __future__ import annotations

import numpy as np
import pytest

from tests.corpus.assembly import State, Step, matrix_of, symbol_of
from tests.corpus.cases import carrying, elastic
from tests.corpus.cases.diffusion import faces, spread


def column_by_column(step: Step, shapes: list[tuple[int, ...]]) -> np.ndarray:
    """The plain way: one unit vector after the other."""
    sizes = [int(np.prod(s)) for s in shapes]
    columns = []
    for k in range(sum(sizes)):
        flat = np.zeros(sum(sizes))
        flat[k] = 1.0
        state = [
            a.reshape(s) for a, s in zip(np.split(flat, np.cumsum(sizes)[:-1]), shapes, strict=True)
        ]
        columns.append(np.concatenate([a.ravel() for a in step(state)]))
    return np.array(columns).T


def heat(shape: tuple[int, ...], periodic: bool) -> Step:
    k = faces(np.random.default_rng(3).uniform(0.5, 1.0, size=shape), periodic)
    return lambda s: [s[0] + 0.1 * spread(s[0], k, periodic)]


def bar(n: int) -> Step:
    return lambda s: elastic.bar(s, np.linspace(0.5, 1.0, n), 0.9)


@pytest.mark.parametrize(
    ("step", "shapes", "reach", "periodic"),
    [
        (heat((17,), False), [(17,)], 1, False),
        (heat((17,), True), [(17,)], 1, True),
        (heat((7, 9), False), [(7, 9)], 1, False),
        (heat((6, 5, 7), True), [(6, 5, 7)], 1, True),
        (bar(13), [(14,), (13,)], 2, False),
    ],
    ids=["1d", "periodic", "2d", "3d periodic", "staggered"],
)
def test_the_matrix_is_that_of_unit_vectors(
    step: Step, shapes: list[tuple[int, ...]], reach: int, periodic: bool
) -> None:
    """Applying unit vectors together gives what applying them one by one gives, exactly."""
    found = matrix_of(step, shapes, reach, periodic).toarray()
    np.testing.assert_array_equal(found, column_by_column(step, shapes))


def test_a_source_is_no_part_of_the_matrix() -> None:
    """An affine step has the matrix of its linear part."""

    def step(s: State) -> State:
        return [0.5 * s[0] + 3.0]

    np.testing.assert_allclose(matrix_of(step, [(5,)], 0, False).toarray(), 0.5 * np.eye(5))


def test_symbols_are_those_of_the_textbook() -> None:
    """Upwind 1 - nu (1 - exp(-i theta)) and Lax-Wendroff 1 - i nu sin theta - nu**2 (1 - cos theta)
    (LeVeque 2007, section 10.7, from memory of the number)."""
    n, nu = 24, 0.7
    theta = 2.0 * np.pi * np.arange(n // 2 + 1) / n
    upwind = symbol_of(lambda s: [carrying.upwind(s[0], [nu])], [(n,)])[:, 0, 0]
    np.testing.assert_allclose(upwind, 1.0 - nu * (1.0 - np.exp(-1j * theta)), atol=1e-14)
    lw = symbol_of(lambda s: [carrying.lax_wendroff(s[0], nu)], [(n,)])[:, 0, 0]
    expected = 1.0 - 1j * nu * np.sin(theta) - nu**2 * (1.0 - np.cos(theta))
    np.testing.assert_allclose(lw, expected, atol=1e-14)
