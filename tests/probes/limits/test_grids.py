"""Difference matrices with boundaries against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from probes.errors import SettingsError
from probes.limits.grids import (
    Box,
    along,
    face_difference,
    faces,
    first_derivative,
    on_faces,
    second_derivative,
    shift,
    upwind_part,
)
from probes.limits.stencils import FIRST, SECOND
from tests.probes.limits.made import CLOSED, FIXED, INFLOW, ROUND, line


@pytest.mark.parametrize(
    ("ends", "by", "want"),
    [
        (ROUND, 1, [2, 3, 4, 1]),
        (ROUND, -2, [3, 4, 1, 2]),
        (FIXED, 1, [2, 3, 4, 0]),
        # One cell beyond stands the node of value zero; beyond that the field comes back negative.
        (FIXED, 2, [3, 4, 0, -4]),
        (FIXED, -3, [-2, -1, 0, 1]),
        (CLOSED, 1, [2, 3, 4, 4]),
        (CLOSED, -2, [2, 1, 1, 2]),
        (INFLOW, -1, [0, 1, 2, 3]),
        (INFLOW, 2, [3, 4, 4, 3]),
    ],
)
def test_what_a_shift_sees_beyond_the_ends(ends: tuple[str, str], by: int, want: list[int]) -> None:
    """The field 1, 2, 3, 4, as the module's rules say."""
    assert (shift(4, by, ends) @ np.arange(1.0, 5.0)).tolist() == want


@pytest.mark.parametrize(
    ("ends", "angle"),
    [
        # Strang 1999: the second difference's eigenvalues are 2 - 2 cos(angle), DST-1 and DCT-2.
        (FIXED, lambda n: np.arange(1, n + 1) * np.pi / (n + 1)),
        (CLOSED, lambda n: np.arange(n) * np.pi / n),
        (ROUND, lambda n: np.arange(n) * 2.0 * np.pi / n),
    ],
)
def test_eigenvalues_of_the_second_difference(ends: tuple[str, str], angle: object) -> None:
    """For each boundary, by NumPy's symmetric eigenvalues."""
    assert callable(angle)
    matrix = second_derivative(SECOND["central2"], 13, ends).toarray()
    want = np.sort(2.0 * np.cos(angle(13)) - 2.0)
    assert np.linalg.eigvalsh(matrix) == pytest.approx(want, abs=1e-12)


@pytest.mark.parametrize("name", ["central4"])
@pytest.mark.parametrize("ends", [FIXED, CLOSED, ROUND])
def test_wide_stencils_see_mirrored_fields(name: str, ends: tuple[str, str]) -> None:
    """With mirrored ends sines, cosines or waves stay eigenvectors of a wide second difference,
    with its symbol as eigenvalue."""
    n, j = 12, np.arange(12)
    theta = {FIXED: 3 * np.pi / 13, CLOSED: 3 * np.pi / 12, ROUND: 6 * np.pi / 12}[ends]
    vector = {
        FIXED: np.sin(theta * (j + 1)),
        CLOSED: np.cos(theta * (j + 0.5)),
        ROUND: np.cos(theta * j),
    }[ends]
    got = second_derivative(SECOND[name], n, ends) @ vector
    assert got == pytest.approx(-SECOND[name].size(np.array([theta]))[0] * vector, abs=1e-13)


@pytest.mark.parametrize("name", FIRST)
def test_first_derivatives_of_waves(name: str) -> None:
    """On a periodic line waves are eigenvectors with i d(theta), and the upwind part's -loss."""
    stencil, n = FIRST[name], 15
    theta = 2.0 * np.pi * 4 / n
    wave = np.exp(1j * theta * np.arange(n))
    got = first_derivative(stencil, n, ROUND) @ wave
    assert np.abs(got - 1j * stencil.phase(np.array([theta]))[0] * wave).max() <= 1e-13
    got = upwind_part(stencil, n, ROUND) @ wave
    assert np.abs(got + stencil.loss(np.array([theta]))[0] * wave).max() <= 1e-13


def test_spectral_second_derivative() -> None:
    """cos(k x) becomes -k**2 cos(k x) exactly."""
    x = 2.0 * np.pi * np.arange(16) / 16
    got = second_derivative(SECOND["spectral"], 16, ROUND) @ np.cos(3 * x)
    assert got * (16 / (2 * np.pi)) ** 2 == pytest.approx(-9.0 * np.cos(3 * x), abs=1e-12)


def test_along_an_axis() -> None:
    """A difference along axis 1 of a box acts on each row by itself (NumPy's roll)."""
    box = Box((3, 5), (CLOSED, ROUND))
    field = np.random.default_rng(7_019).standard_normal((3, 5))
    got = (along(shift(5, 1, ROUND), box, 1) @ field.ravel()).reshape(3, 5)
    assert (got == np.roll(field, -1, axis=1)).all()


@pytest.mark.parametrize(("ends", "count"), [(FIXED, 5), (CLOSED, 3), (ROUND, 4), (INFLOW, 4)])
def test_faces_of_a_line(ends: tuple[str, str], count: int) -> None:
    """Fixed ends have faces of their own, closed ones none."""
    low, high = faces(line(4, ends), 0)
    assert low.size == high.size == count
    assert (low == -1).sum() + (high == -1).sum() == sum(e == "dirichlet" for e in ends)


def test_face_differences_and_means() -> None:
    """Differences over faces, and arithmetic and harmonic means of 1, 3, 6, 6."""
    values = np.array([1.0, 3.0, 6.0, 6.0])
    box = line(4, FIXED)
    assert (face_difference(box, 0) @ values).tolist() == [1.0, 2.0, 3.0, 0.0, -6.0]
    assert on_faces(values, box, 0, "arithmetic").tolist() == [1.0, 2.0, 4.5, 6.0, 6.0]
    assert on_faces(values, box, 0, "harmonic") == pytest.approx([1.0, 1.5, 4.0, 6.0, 6.0])
    assert on_faces(np.zeros(4), box, 0, "harmonic").tolist() == [0.0] * 5


@pytest.mark.parametrize(
    ("make", "said"),
    [
        (lambda: Box((4,), (("open", "open"),)), "known are periodic"),
        (lambda: Box((4,), (("periodic", "neumann"),)), "cannot be periodic alone"),
        (lambda: first_derivative(FIRST["spectral"], 8, FIXED), "periodic ends"),
        (lambda: first_derivative(FIRST["compact4"], 2000, ROUND), "2000 cells"),
    ],
)
def test_what_has_no_matrix(make: object, said: str) -> None:
    """Unknown boundaries, half periodic ones, and stencils that couple too many cells."""
    assert callable(make)
    with pytest.raises(SettingsError, match=said):
        make()
