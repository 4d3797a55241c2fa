"""The growing part of a state, against states that are put together by hand."""

from __future__ import annotations

import numpy as np
import pytest

from tests.corpus.cases.diffusion import faces, spread
from tests.corpus.cases.sounding import flat_top, second_order
from tests.corpus.growing import Subspace, Swings, Twin, WaveNumbers

VECTORS = np.array([[1.0, 0.9, 0.0], [0.0, 1.0, 0.3], [0.2, 0.0, 1.0]])


def skew(values: list[float]):
    """A step on three cells with these eigenvalues and with eigenvectors that are not at right
    angles (the columns of VECTORS)."""
    a = VECTORS @ np.diag(values) @ np.linalg.inv(VECTORS)
    return lambda s: [a @ s[0]]


def test_the_projection_is_oblique() -> None:
    """Of 2 v1 + 3 v2 + 5 v3, where only v1 grows, exactly 2 v1 is the growing part; a projection at
    right angles would give something else."""
    modes = Subspace(skew([1.5, 0.5, -0.9]), [(3,)], reach=3)
    state = VECTORS @ np.array([2.0, 3.0, 5.0])
    np.testing.assert_allclose(modes.part([state])[0], 2.0 * VECTORS[:, 0], atol=1e-12)
    assert modes.factor == pytest.approx(1.5)
    direction = VECTORS[:, 0] / np.linalg.norm(VECTORS[:, 0])
    assert not np.allclose(direction * (direction @ state), 2.0 * VECTORS[:, 0])


def test_what_grows_much_more_slowly_is_no_part_of_it() -> None:
    """With eigenvalues 1.5 and 1.01 the second belongs to the field; with 1.5 and 1.3 to the
    growing part."""
    state = VECTORS @ np.array([2.0, 3.0, 5.0])
    slow = Subspace(skew([1.5, 1.01, 0.3]), [(3,)], reach=3).part([state])[0]
    np.testing.assert_allclose(slow, 2.0 * VECTORS[:, 0], atol=1e-12)
    both = Subspace(skew([1.5, 1.3, 0.3]), [(3,)], reach=3).part([state])[0]
    np.testing.assert_allclose(both, VECTORS[:, :2] @ np.array([2.0, 3.0]), atol=1e-12)


def test_waves_and_matrix_agree() -> None:
    """On a periodic grid the projection wave by wave is that by invariant subspaces."""
    shape, k = (16, 12), faces(np.ones((16, 12)), True)

    def step(s):
        return [s[0] + 0.26 * spread(s[0], k, True)]

    waves, whole = WaveNumbers(step, [shape]), Subspace(step, [shape], periodic=True)
    assert waves.factor == pytest.approx(whole.factor, rel=1e-12)
    state = np.random.default_rng(1).standard_normal(shape)
    np.testing.assert_allclose(waves.part([state])[0], whole.part([state])[0], atol=1e-10)


def test_large_matrices_give_what_small_ones_do(monkeypatch: pytest.MonkeyPatch) -> None:
    """Eigenvectors by Lanczos and Arnoldi iteration span the subspace that the whole matrix has."""
    n = 60
    k = faces(0.8 + 0.2 * flat_top((n,), [25.0], 9.0), False)

    def step(s):
        return [s[0] + 0.53 * spread(s[0], k, False)]

    whole = Subspace(step, [(n,)])
    monkeypatch.setattr("tests.corpus.growing._DENSE", 10)
    state = np.random.default_rng(2).standard_normal(n)
    for symmetric in (True, False):
        found = Subspace(step, [(n,)], symmetric=symmetric, most=20)
        assert found.factor == pytest.approx(whole.factor, rel=1e-10)
        np.testing.assert_allclose(found.part([state])[0], whole.part([state])[0], atol=1e-8)
    with pytest.raises(ValueError, match="more than 1 growing"):
        Subspace(step, [(n,)], symmetric=True, most=1)


def test_swinging_states_need_only_the_operator() -> None:
    """Two levels split by the operator's eigenvectors as by the whole two-level matrix."""
    n = 60
    k, r = faces(0.7 + 0.3 * flat_top((n,), [25.0], 12.0), False), 1.03**2
    swings = Swings(lambda s: [r * spread(s[0], k, False)], (n,))
    whole = Subspace(lambda s: second_order(s, k, r, False), [(n,)] * 2)
    assert swings.factor == pytest.approx(whole.factor, rel=1e-10)
    state = list(np.random.default_rng(3).standard_normal((2, n)))
    for one, other in zip(swings.part(state), whole.part(state), strict=True):
        np.testing.assert_allclose(one, other, atol=1e-8)


def test_a_twin_shows_the_error_of_rounding() -> None:
    """The difference to the same steps in extended precision is the rounding error: here of 0.1
    added up ten times, 1.1e-16 below one in double precision."""
    twin = Twin([np.array([np.longdouble(0.0)])])
    state = [np.zeros(1)]
    for _ in range(10):
        state = [state[0] + 0.1]
        twin.state = [twin.state[0] + np.longdouble(1) / 10]
    assert twin.part(state)[0][0] == pytest.approx(0.9999999999999999 - 1.0, rel=1e-3)


def test_long_waves_can_be_left_to_the_physics() -> None:
    """With `longest` only waves shorter than so many cells count, whatever the others do."""

    def step(s):
        return [1.1 * s[0]]

    n = 16
    modes = WaveNumbers(step, [(n,)], longest=4.0)
    x = 2.0 * np.pi * np.arange(n) / n
    long, short = np.cos(3 * x), np.cos(6 * x)
    np.testing.assert_allclose(modes.part([long + short])[0], short, atol=1e-12)
