"""Maps of characters and close-ups."""

from __future__ import annotations

import base64

import numpy as np
import pytest

from monitor.guarding.pictures import (
    CLOSE_CELLS,
    LEVELS,
    MAP_CELLS,
    closeup_values,
    map_values,
    pool,
)
from monitor.measure import CloseUpCrops, TileGrid
from probes.tiling import Tiling

RANDOM = np.random.default_rng(77191)


def grid(values: np.ndarray) -> TileGrid:
    tiling = Tiling(tuple(8 * n for n in values.shape), (8,) * values.ndim)
    return TileGrid("T", "", tiling, values.ravel())


def test_a_map_can_be_read_back() -> None:
    """Each character gives its tile's value to half a level; tiles without value are dots."""
    values = RANDOM.normal(size=(6, 5))
    values[2, 3] = np.nan
    values[0, 0] = -np.inf
    made = map_values(grid(values), 7)
    assert (made["of"], made["f"], made["shape"]) == (7, "T", (6, 5))
    step = (made["high"] - made["low"]) / (len(LEVELS) - 1)
    for character, value in zip(made["cells"], values.ravel(), strict=True):
        if character == ".":
            assert not np.isfinite(value)
        else:
            read = made["low"] + step * LEVELS.index(character)
            assert abs(read - value) <= 0.5001 * step


@pytest.mark.parametrize("shape", [(3000,), (60, 61), (17, 18, 19)])
def test_large_maps_are_pooled_by_the_largest(shape: tuple[int, ...]) -> None:
    """At most MAP_CELLS cells, and the strongest growth is still to be seen."""
    values = RANDOM.normal(size=shape)
    pooled = pool(values)
    assert pooled.size <= MAP_CELLS
    assert pooled.max() == values.max()
    assert pooled.ndim == values.ndim


def test_a_map_of_nothing() -> None:
    """No tile has a value yet."""
    made = map_values(grid(np.full((2, 2), np.nan)), 1)
    assert made["cells"] == "...."


def test_a_map_of_equal_values() -> None:
    """No division by zero."""
    assert map_values(grid(np.full((2, 2), 0.25)), 1)["cells"] == "0000"


def decoded(text: str, lo: tuple[int, ...], hi: tuple[int, ...]) -> np.ndarray:
    shape = tuple(b - a for a, b in zip(lo, hi, strict=True))
    return np.frombuffer(base64.b64decode(text), dtype="<f4").reshape(shape)


@pytest.mark.parametrize("shape", [(40,), (24, 20), (90, 90), (24, 24, 24), (5000,)])
def test_a_closeup_holds_the_cells_of_its_box(shape: tuple[int, ...]) -> None:
    """Both snapshots, C order, cut to the middle where they are too large."""
    before, now = RANDOM.normal(size=shape), RANDOM.normal(size=shape)
    lo = tuple(range(3, 3 + len(shape)))
    hi = tuple(a + n for a, n in zip(lo, shape, strict=True))
    made = closeup_values(CloseUpCrops("T", "p", lo, hi, before, now), 9)
    box = tuple(slice(a - c, b - c) for a, b, c in zip(made["lo"], made["hi"], lo, strict=True))
    assert now[box].size <= CLOSE_CELLS
    np.testing.assert_array_equal(
        decoded(made["now"], made["lo"], made["hi"]), now[box].astype("f4")
    )
    np.testing.assert_array_equal(
        decoded(made["before"], made["lo"], made["hi"]), before[box].astype("f4")
    )
    if now.size <= CLOSE_CELLS:
        assert (made["lo"], made["hi"]) == (lo, hi)
