"""The local factor in every cell of a grid, with that cell's coefficients frozen.

Frozen coefficients exaggerate narrow spots: a growing wave needs room. `Spot` says how wide the
exceeding region is and what a mode confined to that width would do.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from itertools import product

import numpy as np
from numpy.typing import NDArray

from probes.limits.lookup import GrowthTable
from probes.limits.records import Wave
from probes.limits.scheme import Scheme
from probes.limits.symbol import PartSymbol, WaveTable
from probes.limits.vonneumann import OWN, Analysis, Growth, Limit
from probes.limits.wavenumbers import few

Array = NDArray[np.float64]
Indices = NDArray[np.intp]
Measure = Callable[[NDArray[np.complex128]], Array]

# Waves times cells in one block: a few arrays of this size stay in the processor's caches.
_BLOCK = 1 << 16
_CHECKED = 4


@dataclass(frozen=True)
class Spot:
    """The exceeding region around the worst cell.

    cells: how many exceed in all. widths: cells along each axis through the worst one. whole: per
    axis, True where it reaches from end to end. confined: factor of a mode that has only this width
    (the mean of the neighbouring waves that fit into it, as in a box with fixed ends), 1 or less if
    such a spot is too narrow to grow.
    """

    cells: int
    widths: tuple[int, ...]
    whole: tuple[bool, ...]
    confined: float


@dataclass(frozen=True)
class CellMap:
    """What a step does in every cell.

    factor: the grid's shape, largest over a few hundred waves. worst: index of the cell with the
    largest excess; growth: its factor, over all waves. spot: None where nothing exceeds.
    """

    factor: Array
    worst: tuple[int, ...]
    growth: Growth
    spot: Spot | None


@dataclass(frozen=True)
class CellLimit:
    """The largest step that all cells tolerate, and the cell that sets it."""

    limit: Limit
    cell: tuple[int, ...]


class CellAnalysis:
    """Frozen-coefficient analysis of every cell of `scheme`."""

    def __init__(self, scheme: Scheme) -> None:
        self.scheme = scheme
        self._shape = scheme.shape or (1,) * scheme.axes
        self._parts = [PartSymbol(part, scheme) for part in scheme.parts]
        self._cells = self._parts[0].cells
        self._waves = few(scheme.axes)

    def limit(self) -> CellLimit:
        """The smallest of the cells' largest steps: that of the stiffest cell, lowered to the limit
        of the worst ones until no cell exceeds."""
        cell = self._stiffest
        found = Analysis(self.scheme, cell).largest_step()
        if self._cells == 1 or not found.dt.value:
            return CellLimit(found, self._index(cell))
        active = np.arange(self._cells)
        while active.size and found.dt.value:
            active, excess = self._exceeding(found, 1.0 - 1e-7, active)
            cell, found = self._lower(cell, found, active, excess)
        # Coarsely sampled waves may have missed a cell whose limit lies just below.
        if found.dt.value:
            cells, excess = self._exceeding(found, 1.05, np.arange(self._cells))
            cell, found = self._lower(cell, found, cells, excess)
        return CellLimit(found, self._index(cell))

    def own_growth(self) -> float:
        """Fastest growth of the equation itself in any cell, per unit time; at least 0."""
        return float(self._over(1e-300, np.arange(self._cells))[1].max())

    def at(self, dt: float, known: CellLimit | None = None) -> CellMap:
        """The map of the factor at step dt > 0.

        known: the scheme's limit; its wave and its cell are looked at besides.
        """
        wave = known.limit.wave if known is not None else None
        growth, own = self._over(dt, np.arange(self._cells), wave)
        excess = growth - own * dt * OWN
        worst = int(np.argmax(excess))
        if known is not None and excess[worst] <= 0.0 and known.limit.dt.value is not None:
            worst = int(np.ravel_multi_index(known.cell, self._shape))
        analysis = Analysis(self.scheme, worst)
        found = analysis.growth(dt)
        spot = None
        if not found.stable:
            spot = self._spot(analysis, found, excess.reshape(self._shape) > 0.0, worst, dt)
        factor = np.exp(np.minimum(growth, 700.0)).reshape(self._shape)
        return CellMap(factor, self._index(worst), found, spot)

    def _exceeding(self, found: Limit, share: float, cells: Indices) -> tuple[Indices, Array]:
        """Those of `cells` that grow at a share of the found step, worst first."""
        assert found.dt.value is not None  # the caller looked
        excess = self._excess(found.dt.value * share, cells, found.wave)
        order = np.argsort(-excess, kind="stable")
        order = order[: int((excess > 0.0).sum())]
        return cells[order], excess[order]

    def _lower(self, cell: int, found: Limit, cells: Indices, excess: Array) -> tuple[int, Limit]:
        """The smallest limit among the found one and those of the worst of `cells`."""
        assert found.dt.value is not None  # the caller looked
        best = found.dt.value
        # Equal coefficients give equal excess: one cell of each kind is enough.
        kinds = np.unique(excess, return_index=True)[1][::-1][:_CHECKED]
        for other in cells[kinds]:
            limit = Analysis(self.scheme, int(other)).largest_step()
            if limit.dt.value is not None and limit.dt.value < best:
                cell, found, best = int(other), limit, limit.dt.value
        return cell, found

    def _excess(self, dt: float, cells: Indices, wave: Wave | None = None) -> Array:
        growth, own = self._over(dt, cells, wave)
        return np.asarray(growth - own * dt * OWN)

    def _over(self, dt: float, cells: Indices, wave: Wave | None = None) -> tuple[Array, Array]:
        """ln of the largest factor over the waves, and the equation's own growth per unit time, for
        each of the cells."""
        angles = self._waves
        if wave is not None:
            angles = np.column_stack([angles, wave.angles])
        tables = [part.table(angles) for part in self._parts]
        quick = [
            self._quick(part, table, dt) for part, table in zip(self._parts, tables, strict=True)
        ]
        growth, own = np.empty(cells.size), np.zeros(cells.size)
        size = max(1, _BLOCK // angles.shape[1])
        for start in range(0, cells.size, size):
            block = slice(start, start + size)
            if len(self._parts) == 1 and self._parts[0].integrator.levels < 3:
                integrator = self._parts[0].integrator
                steps = self._parts[0].steps(tables[0], dt, cells[block])
                growth[block] = np.max([integrator.largest_growth(z) for z in steps], axis=0)
            else:
                growth[block] = self._many(angles, tables, quick, dt, cells[block])
            for part, table in zip(self._parts, tables, strict=True):
                own[block] += part.own_growth(table, cells[block])
        return growth, own

    def _many(
        self,
        angles: Array,
        tables: list[WaveTable],
        quick: list[Measure],
        dt: float,
        cells: Indices,
    ) -> Array:
        """ln of the largest factor where parts follow each other or roots are costly."""
        total = np.zeros((angles.shape[1], cells.size))
        for part, table, measure in zip(self._parts, tables, quick, strict=True):
            total += _largest(part.steps(table, dt, cells), measure)
        if any(isinstance(measure, GrowthTable) for measure in quick):
            return self._exactly(angles, total.argmax(axis=0), dt, cells)
        return np.asarray(total.max(axis=0))

    def _exactly(self, angles: Array, worst: Indices, dt: float, cells: Indices) -> Array:
        """ln of the factor of one wave for each cell."""
        out = np.empty(cells.size)
        for wave in np.unique(worst):
            here = worst == wave
            total = np.zeros(int(here.sum()))
            for part in self._parts:
                steps = part.steps(part.table(angles[:, [wave]]), dt, cells[here])
                total += _largest(steps, part.integrator.growth)[0]
            out[here] = total
        return out

    def _quick(self, part: PartSymbol, table: WaveTable, dt: float) -> Measure:
        """How growth is measured in many cells: through a table where roots are costly."""
        if part.integrator.levels < 3:
            return part.integrator.growth
        stiffest = np.array([self._stiffest])
        reach = max(float(np.abs(z).max()) for z in part.steps(table, dt, stiffest))
        return GrowthTable(part.integrator, 1.05 * reach) if reach else part.integrator.growth

    @cached_property
    def _stiffest(self) -> int:
        """The cell with the largest |lambda|."""
        if self._cells == 1:
            return 0
        sizes = np.zeros(self._cells)
        # |lambda| varies slowly with the wave: a quarter of them is enough to tell.
        angles = self._waves[:, ::4]
        tables = [part.table(angles) for part in self._parts]
        size = max(1, _BLOCK // angles.shape[1])
        for start in range(0, self._cells, size):
            block = np.arange(start, min(start + size, self._cells))
            for part, table in zip(self._parts, tables, strict=True):
                for z in part.steps(table, 1.0, block):
                    sizes[block] = np.maximum(sizes[block], np.abs(z).max(axis=0))
        return int(np.argmax(sizes))

    def _index(self, cell: int) -> tuple[int, ...]:
        return tuple(int(i) for i in np.unravel_index(cell, self._shape))

    def _spot(
        self, analysis: Analysis, found: Growth, exceeding: NDArray[np.bool_], worst: int, dt: float
    ) -> Spot:
        index = self._index(worst)
        widths, whole = [], []
        for axis in range(exceeding.ndim):
            line = exceeding[tuple(slice(None) if a == axis else i for a, i in enumerate(index))]
            gaps = np.flatnonzero(~line)
            before = gaps[gaps < index[axis]]
            after = gaps[gaps > index[axis]]
            low = int(before[-1]) + 1 if before.size else 0
            high = int(after[0]) if after.size else line.size
            widths.append(max(1, high - low))
            whole.append(high - low == line.size)
        # A box of w cells with fixed ends holds waves that differ by pi / (w + 1) from the worst.
        room = [0.0 if all_ else np.pi / (w + 1) for w, all_ in zip(widths, whole, strict=True)]
        near = np.array(list(product(*((-r, r) for r in room)))).T
        angles = np.asarray(found.wave.angles)[:, None] + near
        confined = float(np.exp(analysis.at(angles, dt).mean()))
        return Spot(int(exceeding.sum()), tuple(widths), tuple(whole), confined)


def _largest(steps: list[NDArray[np.complex128]], measure: Measure) -> Array:
    largest = measure(steps[0])
    for z in steps[1:]:
        np.maximum(largest, measure(z), out=largest)
    return largest
