"""Tiles cover a grid once, are few enough, and can be found again by number and by cell."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from probes.tiling import Tiling, choose

SHAPES = st.lists(st.integers(1, 70), min_size=1, max_size=3).map(tuple)


@given(SHAPES)
def test_tiles_cover_every_cell_once(shape: tuple[int, ...]) -> None:
    """The boxes of all tiles have as many cells as the grid, and each cell knows its tile."""
    tiling = choose(shape)
    cells = 0
    for tile in range(tiling.count):
        box = tiling.box(tile)
        size = 1
        for lo, hi in box:
            size *= hi - lo
        assert size > 0
        cells += size
        assert tiling.holding([lo for lo, _ in box]) == tile
        assert tiling.holding([hi - 1 for _, hi in box]) == tile
    total = 1
    for n in shape:
        total *= n
    assert cells == total


@given(SHAPES, st.integers(1, 200))
def test_never_more_tiles_than_allowed(shape: tuple[int, ...], most: int) -> None:
    """The edge grows until the tiles are few enough."""
    assert choose(shape, max_tiles=most).count <= most


def test_places_and_numbers_are_inverse() -> None:
    """Numbering is C order of the tile grid."""
    tiling = Tiling((20, 30, 40), (10, 10, 10))
    places = list(itertools.product(range(2), range(3), range(4)))
    assert [tiling.place(i) for i in range(tiling.count)] == places
    assert [tiling.number(p) for p in places] == list(range(tiling.count))


@pytest.mark.parametrize("shape", [(), (2, 2, 2, 2), (0, 5)])
def test_no_tiling_without_a_grid(shape: tuple[int, ...]) -> None:
    """Anything but one to three axes with cells is refused."""
    with pytest.raises(ValueError, match="one to three axes"):
        choose(shape)
