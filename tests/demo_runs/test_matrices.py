"""The assembled matrices are those of the steps, and their limits those of the books."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.sparse as sp

from demo_runs import basin, channel, pipe, plate, waves
from tests.demo_runs.running import FAULTS, SOLVERS, flat, shaped


def matrix(name: str, step_factor: float, fault: str | None) -> sp.csr_matrix:
    """The step's matrix, as each module assembles it."""
    if name == "plate":
        return _euler(plate.operator(fault), step_factor * plate.limit_step())
    if name == "channel":
        return _euler(channel.operator(fault), step_factor * channel.limit_step())
    return sp.csr_matrix(SOLVERS[name].step_matrix(step_factor, fault))


def _euler(operator: sp.csr_matrix, dt: float) -> sp.csr_matrix:
    return sp.csr_matrix(sp.identity(operator.shape[0]) + dt * operator)


@pytest.mark.parametrize(("name", "fault"), [*((name, None) for name in SOLVERS), *FAULTS])
def test_a_step_is_a_product_with_the_matrix(name: str, fault: str | None, tmp_path: Path) -> None:
    """One step of any state equals the matrix times it, to 1e-12 of the largest value."""
    cast = SOLVERS[name].build(1.02, fault, tmp_path)
    steady = plate.WALL if name == "plate" else 0.0
    size = [np.abs(values - steady).max() for values in cast.state.values()]
    rng = np.random.default_rng(24_421)
    off = {
        field: largest * rng.standard_normal(values.shape)
        for largest, (field, values) in zip(size, cast.state.items(), strict=True)
    }
    stepped = cast.step({field: steady + values for field, values in off.items()})
    product = shaped(matrix(name, 1.02, fault) @ flat(off), off)
    for field, values in stepped.items():
        largest = np.abs(values).max()
        assert np.abs(values - steady - product[field]).max() <= 1e-12 * largest, field


def test_heat_in_a_uniform_plate(monkeypatch: pytest.MonkeyPatch) -> None:
    """Without the insert the eigenvalues are 2 k / h**2 times (cos(p pi / (n + 1)) - 1) summed
    over the axes (LeVeque 2007, sections 2.10 and 3.4); their largest gives the limit."""
    monkeypatch.setattr(plate, "conductivity", lambda: np.full(plate.SHAPE, plate.STEEL))
    monkeypatch.setattr(plate, "operator", plate.operator.__wrapped__)
    n, m = plate.SHAPE
    largest = 2.0 * plate.STEEL / plate.SPACING**2
    largest *= 2.0 - np.cos(n * np.pi / (n + 1)) - np.cos(m * np.pi / (m + 1))
    assert plate.limit_step.__wrapped__() == pytest.approx(2.0 / largest, rel=1e-10)


@pytest.mark.parametrize(("wave", "across"), [(0, 0), (3, 1), (40, 31), (27, 16)])
def test_dye_in_a_uniform_channel(wave: int, across: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """With uniform mixing and stream, waves along and cosines across are eigenvectors with
    -i u sin(theta) / h - 4 D / h**2 (sin(theta / 2)**2 + sin(phi / 2)**2), the symbol of central
    differences (Strikwerda 2004, section 6.4; the cosines: Strang 1999, DCT-2)."""
    monkeypatch.setattr(channel, "diffusivity", lambda: np.full(channel.SHAPE, channel.MIXING))
    monkeypatch.setattr(channel, "stream", lambda: np.full(channel.SHAPE[0], channel.STREAM))
    n, m = channel.SHAPE
    h, mixing = channel.SPACING, channel.MIXING
    theta, phi = 2.0 * np.pi * wave / m, np.pi * across / n
    rows, columns = np.arange(n) + 0.5, np.arange(m)
    vector = np.outer(np.cos(phi * rows), np.exp(1j * theta * columns)).ravel()
    value = -1j * channel.STREAM * np.sin(theta) / h
    value -= 4.0 * mixing / h**2 * (np.sin(theta / 2) ** 2 + np.sin(phi / 2) ** 2)
    got = channel.operator.__wrapped__(None) @ vector
    assert np.abs(got - value * vector).max() <= 1e-13


def test_waves_in_a_uniform_closed_pipe() -> None:
    """The frequencies are 2 c / h sin(j pi / (2 n)), j < n (eigenvalues of the closed second
    difference: Strang 1999, DCT-2)."""
    n, h, c = 37, 0.5, 3.0
    operator, _ = waves.operator((n,), h, np.full(n, c**2), [np.ones(n - 1)])
    want = (2.0 * c / h * np.sin(np.arange(n) * np.pi / (2 * n))) ** 2
    assert np.linalg.eigvalsh(operator.toarray()) == pytest.approx(want, abs=1e-11)
    assert waves.fastest(operator)[0] == pytest.approx(np.sqrt(want[-1]), rel=1e-10)


@pytest.mark.parametrize("half_phase", [0.1, 0.9, 1.0, 1.001, 1.02, 1.7])
def test_leapfrog_roots(half_phase: float) -> None:
    """The factor is the largest root modulus of z**2 - (2 - (omega dt)**2) z + 1 (Strikwerda 2004,
    chapter 4: the schemes' polynomials), with omega dt twice the half phase."""
    roots = np.roots([1.0, -(2.0 - 4.0 * half_phase**2), 1.0])
    assert waves.leapfrog_factor(half_phase) == pytest.approx(np.abs(roots).max(), rel=1e-7)


@pytest.mark.parametrize(
    ("name", "uniform"),
    [
        # Diffusion number D dt / h**2 <= 1 / 4 (LeVeque 2007, section 9.3, in two dimensions).
        ("plate", plate.SPACING**2 / (4.0 * plate.COPPER)),
        ("channel", channel.SPACING**2 / (4.0 * channel.STIRRED)),
        # Courant number c dt / h <= 1 / sqrt(2), in one dimension <= 1 (Strikwerda 2004, ch. 8).
        ("basin", basin.SPACING / np.sqrt(2.0 * basin.GRAVITY * basin.DEEP)),
        ("pipe", pipe.SPACING / pipe.FAST),
    ],
)
def test_limits_stand_above_those_of_uniform_grids(name: str, uniform: float) -> None:
    """A grid as fast everywhere as in its fastest cells has the book's limit; the insert, being
    narrow, allows a little more, but never less."""
    assert 1.0 <= SOLVERS[name].limit_step() / uniform <= 1.2


def shrink(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """The same solver on a grid small enough for dense eigenvalues."""
    solver = SOLVERS[name]
    for key, value in {
        "plate": {"SHAPE": (16, 24), "INSERT": ((2, 7), (3, 9))},
        "basin": {"SHAPE": (12, 16), "CORNER": (7.0, 10.0), "SLOPE": 1.0},
        "channel": {"SHAPE": (12, 24), "MIXER": (4.0, 15.0), "REACH": 3.0},
        "pipe": {"CELLS": 90, "STEEL": (50, 62)},
    }[name].items():
        monkeypatch.setattr(solver, key, value)
    for key in ("operator", "_matrix", "limit_step", "growth"):
        if hasattr(solver, key):
            monkeypatch.setattr(solver, key, getattr(solver, key).__wrapped__)


@pytest.mark.parametrize("name", SOLVERS)
def test_the_limit_is_that_of_all_eigenvalues(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """NumPy's dense eigenvalues of the step's matrix: none outside the circle at 0.999 of the
    limit, one outside at 1.001, and at 1.02 the largest modulus is the growth that is told."""
    shrink(name, monkeypatch)
    radius = {
        factor: np.abs(np.linalg.eigvals(matrix(name, factor, None).toarray())).max()
        for factor in (0.999, 1.001, 1.02)
    }
    assert radius[0.999] <= 1.0 + 1e-12
    assert radius[1.001] > 1.0 + 1e-4
    assert SOLVERS[name].growth(1.02).factor == pytest.approx(radius[1.02], rel=1e-9)
    assert SOLVERS[name].growth(0.999).factor <= 1.0 + 1e-12


@pytest.mark.parametrize(("name", "fault"), FAULTS)
def test_a_fault_grows_at_any_step(name: str, fault: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """NumPy's dense eigenvalues: outside the circle at half and at nine tenths of the limit, and as
    far as the growth that is told."""
    shrink(name, monkeypatch)
    for factor in (0.5, 0.9):
        radius = np.abs(np.linalg.eigvals(matrix(name, factor, fault).toarray())).max()
        assert radius > 1.001
        assert SOLVERS[name].growth(factor, fault).factor == pytest.approx(radius, rel=1e-9)


def test_the_reversed_edge_in_closed_form() -> None:
    """Beside the reversed wall a mode that halves from cell to cell grows at
    k / h**2 (1 / 2 - 4 sin(pi / (2 (m + 1)))**2): put T = 2**(j - n) sin(pi i / (m + 1)) into the
    scheme of the edge and of the interior."""
    m = plate.SHAPE[1]
    rate = plate.STEEL / plate.SPACING**2 * (0.5 - 4.0 * np.sin(np.pi / (2 * (m + 1))) ** 2)
    factor = 1.0 + 0.9 * plate.limit_step() * rate
    assert plate.growth(0.9, "reversed-edge").factor == pytest.approx(factor, rel=1e-10)
