"""Stencils: their symbols are what they do to a wave, and their orders are the books'."""

from __future__ import annotations

import numpy as np
import pytest

from probes.limits.stencils import FIRST, HALF, SECOND, First, square

THETA = np.linspace(-3.0, 3.0, 13)


@pytest.mark.parametrize("name", [n for n, s in FIRST.items() if not s.spectral])
def test_a_first_derivative_of_a_wave(name: str) -> None:
    """Weights applied to exp(i theta j), the left side of compact ones included, give
    i d(theta) minus the upwind damping for a positive velocity."""
    stencil = FIRST[name]
    for theta in THETA:
        right = sum(
            w * (np.exp(1j * k * theta) - np.exp(-1j * k * theta))
            for k, w in enumerate(stencil.odd, 1)
        )
        left = 1.0 + stencil.implicit * 2.0 * np.cos(theta)
        assert 1j * stencil.phase(np.array([theta]))[0] == pytest.approx(right / left, abs=1e-14)


@pytest.mark.parametrize(
    ("name", "offsets", "weights"),
    [
        # u_x from the left: first order (LeVeque 2007, section 10.4), third and fifth order
        # upwind-biased (Hirsch 2007, section 8.2; Shu 1998, section 2.2; from memory).
        ("upwind1", (-1, 0), (-1.0, 1.0)),
        ("upwind3", (-2, -1, 0, 1), (1 / 6, -1.0, 1 / 2, 1 / 3)),
        (
            "weno5",
            (-3, -2, -1, 0, 1, 2),
            (-2 / 60, 15 / 60, -60 / 60, 20 / 60, 30 / 60, -3 / 60),
        ),
    ],
)
def test_upwind_stencils_are_the_published_ones(
    name: str, offsets: tuple[int, ...], weights: tuple[float, ...]
) -> None:
    """The one-sided stencil's symbol is i d + loss."""
    stencil = FIRST[name]
    want = np.exp(1j * np.outer(THETA, offsets)) @ np.array(weights)
    got = 1j * stencil.phase(THETA) + stencil.loss(THETA)
    assert np.abs(got - want).max() <= 1e-14


@pytest.mark.parametrize(
    ("name", "order"),
    [
        ("central2", 2),
        ("central4", 4),
        ("compact4", 4),
        ("upwind1", 2),
        ("upwind3", 4),
        ("weno5", 6),
    ],
)
def test_order_of_the_phase(name: str, order: int) -> None:
    """d(theta) - theta is of order theta**(order + 1)."""
    one, other = (abs(FIRST[name].phase(np.array([t]))[0] - t) for t in (0.2, 0.1))
    assert np.log2(one / other) == pytest.approx(order + 1, abs=0.05)


def test_second_derivatives() -> None:
    """2 - 2 cos(theta), and (30 - 32 cos(theta) + 2 cos(2 theta)) / 12 (Fornberg 1988, table)."""
    assert SECOND["central2"].size(THETA) == pytest.approx(2.0 - 2.0 * np.cos(THETA), abs=1e-14)
    want = (30.0 - 32.0 * np.cos(THETA) + 2.0 * np.cos(2.0 * THETA)) / 12.0
    assert SECOND["central4"].size(THETA) == pytest.approx(want, abs=1e-13)


def test_staggered_derivatives() -> None:
    """2 sin(theta / 2), and fourth order with 27 / 24 and -1 / 24 (Levander 1988)."""
    assert HALF["central2"].phase(THETA) == pytest.approx(2.0 * np.sin(THETA / 2.0), abs=1e-15)
    one, other = (abs(HALF["central4"].phase(np.array([t]))[0] - t) for t in (0.2, 0.1))
    assert np.log2(one / other) == pytest.approx(5.0, abs=0.05)


def test_long_waves_keep_their_digits() -> None:
    """The damping of fifth-order upwinding, theta**6 / 60, is right to 1e-9 at theta = 1e-4."""
    theta = np.array([1e-4])
    assert FIRST["weno5"].loss(theta)[0] == pytest.approx(1e-24 / 60.0, rel=1e-8)
    assert square(theta)[0] == pytest.approx(1e-8, rel=1e-8)


def test_central_stencils_do_not_damp() -> None:
    """Their loss is zero for every wave."""
    assert not First("x", (0.5,)).loss(THETA).any()
