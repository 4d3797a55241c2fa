"""Where: tiles with a straight rise, faces, and boxes on the cells."""

from __future__ import annotations

import math

import numpy as np

from probes import locality
from probes.tiling import Tiling


def test_the_growing_tile_is_found() -> None:
    """Among noisy tiles the one whose level rises on a line is named, with its slope."""
    rng = np.random.default_rng(2468)
    level = rng.normal(-20.0, 0.5, (60, 30))
    level[:, 17] = -30.0 + 0.2 * np.arange(60)
    floor = np.full(level.shape[1], -40.0)
    still = np.zeros_like(level)
    found = locality.straightest_tile(level, still, floor, math.log(100), 0.02, 1.8)
    assert found is not None
    assert found[0] == 17
    assert math.isclose(found[2], 0.2, rel_tol=1e-6)


def test_no_tile_below_the_floor() -> None:
    """A rise up to just above the rounding floor does not count."""
    level = (-30.0 + 0.2 * np.arange(60))[:, None]
    floor = level[-1] - 1.0
    still = np.zeros_like(level)
    assert locality.straightest_tile(level, still, floor, math.log(100), 0.02, 1.8) is None


def test_no_tile_whose_bulk_rises_along() -> None:
    """A wave that arrives raises the ripple and all the rest alike; that is no growth of ripple."""
    level = (-30.0 + 0.2 * np.arange(60))[:, None]
    floor = np.array([-40.0])
    assert locality.straightest_tile(level, level + 9.0, floor, math.log(100), 0.02, 1.8) is None


def test_face_shares() -> None:
    """Energy in the first layer along axis 0 belongs to that face; thin grids have no faces."""
    tiling = Tiling((40, 40), (10, 10))
    energy = np.zeros(16)
    energy[1] = 3.0
    energy[9] = 1.0
    assert locality.face_shares(energy, tiling) == {"axis 0 low": 0.75}
    assert locality.face_shares(np.ones(4), Tiling((20, 20), (10, 10))) == {}
    assert locality.face_shares(np.zeros(16), tiling) == {}


def test_box_is_cut_on_the_cells() -> None:
    """With crops of the outer layers the box is as narrow as the patch, else as the tiles."""
    tiling = Tiling((60, 60), (10, 10))
    patch = np.zeros((60, 60))
    patch[23:36, 27:34] = np.where(np.indices((13, 7)).sum(axis=0) % 2, 1.0, -1.0)
    energy = np.array(
        [(patch[tuple(slice(a, b) for a, b in tiling.box(t))] ** 2).sum() for t in range(36)]
    )
    assert locality.quantile_box(energy, tiling, {}) == ((20, 40), (20, 40))
    profiles = {}
    for tile in np.flatnonzero(energy):
        box = tiling.box(int(tile))
        inside = tuple(slice(a, b) for a, b in box)
        profiles[int(tile)] = (box, patch[inside] ** 2)
    (a, b), (c, d) = locality.quantile_box(energy, tiling, profiles) or ((0, 0), (0, 0))
    assert abs(a - 23) <= 1
    assert abs(b - 36) <= 1
    assert abs(c - 27) <= 1
    assert abs(d - 34) <= 1
    assert locality.quantile_box(np.zeros(36), tiling, {}) is None


def test_cell_energy_sees_the_zigzag_and_the_boundary() -> None:
    """The energy of a change sits where it alternates, up to the edge; NaN is left out."""
    before, now = np.zeros((16, 16)), np.zeros((16, 16))
    now[:, :3] = np.where(np.arange(16) % 2, 1.0, -1.0)[:, None]
    now[0, 15] = np.nan
    energy = locality.cell_energy(before, now)
    assert energy[:, :4].sum() > 0.9 * energy.sum()
    assert energy[:2].sum() > 0.0
    assert np.isfinite(energy).all()
    assert locality.cell_energy(before, before).sum() == 0.0


def test_cell_energy_beside_an_overflow() -> None:
    """Cells that became infinite, or changed by more than can be told, count nothing."""
    before, now = np.zeros((8, 8)), np.zeros((8, 8))
    before[:, :2], now[:, :2] = np.inf, np.inf
    before[:, 2], now[:, 2] = -1e308, 1e308
    now[:, 5] = np.where(np.arange(8) % 2, 1.0, -1.0)
    energy = locality.cell_energy(before, now)
    assert np.isfinite(energy).all()
    assert energy[:, 3:].sum() == energy.sum() > 0.0
