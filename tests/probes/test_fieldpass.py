"""From slabs to blocks: extremes, masks, ghost cells, components, crops."""

from __future__ import annotations

import numpy as np
import pytest

from probes.errors import Refused
from probes.fieldpass import FieldPass, storage_spacing
from probes.masks import MaskBook
from probes.sketch import Layout, levels
from probes.snapshot import FieldInfo
from probes.spec import FieldSpec, SketchSpec
from probes.wire import BlockReply, Crop


def run(
    u: np.ndarray,
    *,
    fortran: bool = False,
    spec: FieldSpec | None = None,
    book: MaskBook | None = None,
    crops: tuple[Crop, ...] = (),
    planes: int = 0,
) -> tuple[list[BlockReply], list[Crop], list[str]]:
    """Feed an array slab by slab, as a reader would."""
    info = FieldInfo("u", u.shape, u.dtype.str, fortran)
    work = FieldPass(info, "u", "", spec or FieldSpec(), SketchSpec(), book or MaskBook(), crops)
    stored = np.ascontiguousarray(u.T if fortran else u)
    step = planes or work.planes
    for i in range(0, stored.shape[0], step):
        work.add(stored[i : i + step])
    return work.finish()


@pytest.mark.parametrize("dtype", ["<f8", ">f8", "<f4", ">f4", "<f2", "<i4", ">i2", "|u1"])
def test_extremes_and_total_are_exact(dtype: str) -> None:
    """Lowest, highest value and sum agree with NumPy on the same numbers."""
    u = np.random.default_rng(606).integers(0, 90, (37, 21)).astype(dtype)
    (block,), _, _ = run(u, planes=5)
    assert (block.low, block.high) == (float(u.min()), float(u.max()))
    assert block.total == float(u.astype(np.float64).sum())
    assert block.bad == block.masked == 0


@pytest.mark.parametrize("fortran", [False, True])
def test_peaks_by_tile(fortran: bool) -> None:
    """Each tile's largest absolute value, in logical tile order."""
    u = np.random.default_rng(9).standard_normal((40, 50, 20))
    (block,), _, _ = run(u, fortran=fortran, planes=3)
    tiling = Layout.of(u.shape, SketchSpec()).tiling
    peaks = block.peak.array()
    for tile in range(tiling.count):
        inside = tuple(slice(a, b) for a, b in tiling.box(tile))
        assert peaks[tile] == np.abs(u[inside]).max()


@pytest.mark.parametrize("fortran", [False, True])
def test_crops_are_the_raw_values(fortran: bool) -> None:
    """A box comes back as it stands in the file, clipped to the grid."""
    u = np.random.default_rng(10).standard_normal((30, 40, 12))
    wanted = Crop(field="u", part="", lo=(3, 35, 2), hi=(8, 60, 9))
    _, crops, _ = run(u, fortran=fortran, crops=(wanted,), planes=4)
    assert crops[0].hi == (8, 40, 9)
    assert crops[0].values is not None
    assert np.array_equal(crops[0].values.array(), u[3:8, 35:40, 2:9])


def test_ghost_cells_components_and_complex() -> None:
    """Ghost cells are cut off; components and complex parts become blocks of their own."""
    u = np.arange(3 * 40 * 50, dtype=float).reshape(3, 40, 50) * (1 + 2j)
    blocks, _, _ = run(u, spec=FieldSpec(components="first", ghost=(2, 1)))
    names = ["u[0,re]", "u[0,im]", "u[1,re]", "u[1,im]", "u[2,re]", "u[2,im]"]
    assert [b.field for b in blocks] == names
    assert blocks[0].shape == (36, 48)
    inner = u[1, 2:-2, 1:-1]
    assert (blocks[3].low, blocks[3].high) == (inner.imag.min(), inner.imag.max())
    last, _, _ = run(np.moveaxis(u, 0, -1), spec=FieldSpec(components="last", ghost=(2, 1)))
    assert [(b.low, b.high) for b in last] == [(b.low, b.high) for b in blocks]


def island() -> np.ndarray:
    """A smooth field with NaN on an island and along one edge."""
    x, y = np.linspace(0, 1, 96)[:, None], np.linspace(0, 1, 130)
    u = np.sin(3 * x + 4 * y)
    u[30:50, 40:80] = np.nan
    u[:, :3] = np.nan
    return u


def test_the_edge_of_a_mask_makes_no_ripple() -> None:
    """Stencils that touch masked cells are left out: a smooth field stays smooth."""
    u = island()
    (block,), _, _ = run(u, planes=7)
    layout = Layout.of(u.shape, SketchSpec())
    level = levels(block.columns.array(), layout, block.positions.array())
    ripple = [g for g, group in enumerate(layout.groups) if group.kind == "r8"]
    assert block.masked == int(np.isnan(u).sum())
    assert block.bad == 0
    assert level[:, ripple].max() < 1e-12


def test_a_mask_is_learnt_and_news_is_told() -> None:
    """NaN beyond the learnt mask and any infinity is bad; a masked cell that is present is told."""
    book, u = MaskBook(), island()
    run(u, book=book, planes=9)
    changed = u.copy()
    changed[31, 41] = 1.0
    changed[3, 8] = np.nan
    changed[4, 9] = np.inf
    (block,), _, _ = run(changed, book=book, planes=5)
    assert (block.bad, block.bad_at, block.unmasked) == (2, (3, 8), 1)


def test_infinity_is_never_masked() -> None:
    """Even in the first snapshot."""
    u = np.ones((20, 20))
    u[4, 5] = np.inf
    (block,), _, _ = run(u)
    assert (block.bad, block.bad_at, block.masked) == (1, (4, 5), 0)


def test_fill_values_are_masked() -> None:
    """A declared fill value counts as missing and not as an extreme."""
    u = np.random.default_rng(77).uniform(1.0, 2.0, (30, 30))
    u[:5, :5] = -9999.0
    (block,), _, _ = run(u, spec=FieldSpec(fill=-9999.0))
    assert block.low >= 1.0
    assert block.masked == 25


def test_doubtful_masks_are_told_until_declared() -> None:
    """A mask over most cells brings a remark, unless it is declared."""
    u = np.full((20, 20), np.nan)
    u[:3] = 1.0
    assert "declare" in run(u)[2][0]
    assert run(u, spec=FieldSpec(mask="declared"))[2] == []


@pytest.mark.parametrize("u", [np.full((9, 9), np.nan), np.zeros((12, 12)), np.ones((1, 1))])
def test_odd_fields_are_described(u: np.ndarray) -> None:
    """All NaN, all zero, a single cell: no error, finite numbers."""
    (block,), _, _ = run(u)
    assert np.isfinite(block.columns.array()).all()
    assert np.isfinite([block.low, block.high, block.total]).all()


def test_what_is_no_grid_is_refused_by_name() -> None:
    """Four axes without a component axis, or ghost cells that leave nothing."""
    with pytest.raises(Refused, match="no grid of one to three axes"):
        run(np.zeros((2, 3, 4, 5)))
    with pytest.raises(Refused, match="no cells left"):
        run(np.zeros((4, 4)), spec=FieldSpec(ghost=2))


def test_spacing_of_storage() -> None:
    """Machine epsilon by type (IEEE 754-2019, table 3.5); integers have no relative spacing."""
    assert storage_spacing("<f8") == 2.0**-52
    assert storage_spacing(">f4") == 2.0**-23
    assert storage_spacing("<f2") == 2.0**-10
    assert storage_spacing("<c8") == 2.0**-23
    assert storage_spacing("<i4") == 0.0
