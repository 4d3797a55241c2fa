"""Von Neumann analysis of one cell's coefficients: growth at a step, and the largest stable step.

The largest step is the infimum over all waves of the step at which that wave first grows. Growth is
judged against that of the equation itself, exp(C dt) with C >= 0 its fastest growth at any
wavelength (von Neumann's condition; Strikwerda 2004, chapter 2): a growth that the space
discretisation adds, as differences on the wrong side do, is not excused by it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from probes.limits.records import Found, Wave
from probes.limits.scheme import Scheme
from probes.limits.symbol import PartSymbol, WaveTable
from probes.limits.terms import Angles
from probes.limits.wavenumbers import LONGEST, around, candidates, few

Array = NDArray[np.float64]
Cause = Literal["", "space", "time"]

# Which waves (waves,) grow more than is allowed, at one step or each at its own.
_Grows = Callable[[list[WaveTable], float | Array], NDArray[np.bool_]]

# Steps are tried from this share of the fastest rate's time upwards by this ratio.
_START, _RATIO = 1e-3, 1.1
# Below this z a neutral wave's first growth is an effect of rounding: its true limit is zero.
_NEUTRAL = 1e-2
_SEEDS = 4
_ONE_CELL = slice(0, 1)
# Discretised, the equation's own growth may come out a little faster; any constant C will do.
OWN = 1.05
_TRIES = 150  # steps of a pattern search


@dataclass(frozen=True, slots=True)
class Growth:
    """Growth per step at a given step.

    factor: largest root modulus over all waves. allowed: what the equation itself makes of its
    fastest growing wave, at least 1. wave: where it is largest.
    """

    factor: float
    allowed: float
    wave: Wave

    @property
    def stable(self) -> bool:
        return self.factor <= float(self.allowed**OWN) * (1.0 + 1e-12)


@dataclass(frozen=True, slots=True)
class Limit:
    """The largest stable step.

    dt: with its interval, or why there is none. wave: the first to grow beyond it. cause: why no
    step is stable where dt is 0: "space" (the discretised equations grow themselves) or "time"
    (the integrator amplifies waves that nothing damps).
    """

    dt: Found
    wave: Wave | None
    cause: Cause = ""


class Analysis:
    """One scheme with coefficients that are numbers, or one cell of a scheme with fields.

    Raises IndexError for a cell that does not exist.
    """

    def __init__(self, scheme: Scheme, cell: int = 0) -> None:
        self.scheme = scheme.cell(cell)
        self._parts = [PartSymbol(part, self.scheme) for part in self.scheme.parts]
        self._angles = candidates(scheme.axes)
        self._tables = self._table(self._angles)

    def growth(self, dt: float) -> Growth:
        """The worst wave at step dt > 0, refined between the candidates."""
        values = self._excess(self._tables, dt)
        best = self._angles[:, int(np.argmax(values))]
        top = float(values.max())
        reach = 0.25
        for _ in range(_TRIES):
            near = around(best, reach)
            values = self._excess(self._table(near), dt)
            if float(values.max()) > top:
                best, top = near[:, int(np.argmax(values))], float(values.max())
            else:
                reach *= 0.5
        own = self._own(self._tables)
        return Growth(float(np.exp(top)), float(np.exp(own * dt)), _wave(best))

    def at(self, angles: Angles, dt: float) -> Array:
        """ln of the factor of each wave (waves,) at step dt."""
        return self._excess(self._table(angles), dt)

    def largest_step(self, budget: float = 0.0) -> Limit:
        """The largest step at which no wave grows by more than the equation itself and `budget`
        (ln of a factor per step)."""
        scale = self._fastest()
        if scale == 0.0:
            return Limit(Found.none("nothing in the scheme limits the step"), None)
        own = self._own(self._tables)

        def grows(tables: list[WaveTable], dt: float | Array) -> NDArray[np.bool_]:
            allowed = np.ravel(dt) * own * OWN + budget
            return np.asarray(self._excess(tables, dt) > allowed)

        low = _START / scale
        while grows(self._tables, low).any() and low * scale > 1e-13:
            low *= 0.1
        if low * scale <= 1e-13:
            return self._none(low)
        # A few waves tell roughly where all have to be tried.
        coarse = self._first(grows, self._table(few(self.scheme.axes)), low, 1e9 / scale)
        if coarse < np.inf and not grows(self._tables, 0.5 * coarse).any():
            low = max(low, 0.5 * coarse)
        low = self._first(grows, self._tables, low, 1e9 / scale)
        if low == np.inf:
            return Limit(Found.none("no limit found: nothing grows at any step tried"), None)
        high = low * _RATIO
        # Waves that grow soon after the first one may, between the candidates, be the first.
        seeds = np.flatnonzero(grows(self._tables, high * _RATIO))
        first = _crossings(grows, self._table(self._angles[:, seeds]), low, high * _RATIO)
        order = np.argsort(first)[:_SEEDS]
        best = [self._refine(grows, self._angles[:, seeds[i]], float(first[i]), low) for i in order]
        dt, angles = min(best, key=lambda found: found[0])
        return self._judged(dt, angles, budget)

    @staticmethod
    def _first(grows: _Grows, tables: list[WaveTable], low: float, end: float) -> float:
        """The last step before any wave grows, upwards from `low` by a ratio; infinite if none."""
        while not grows(tables, low * _RATIO).any():
            low *= _RATIO
            if low > end:
                return np.inf
        return low

    def _judged(self, dt: float, angles: Array, budget: float) -> Limit:
        """A crossing where the wave was neutral all along, at tiny z, is the onset of a growth that
        rounding hides below it: the limit is zero."""
        table = self._table(angles[:, None])
        before = float(self._excess(table, 0.5 * dt)[0])
        z = max(
            float(np.abs(step).max())
            for part, one in zip(self._parts, table, strict=True)
            for step in part.steps(one, dt, _ONE_CELL)
        )
        if before == 0.0 and budget == 0.0 and z <= _NEUTRAL:
            reason = "the integrator amplifies waves that nothing damps, at any step"
            return Limit(Found.exactly(0.0, 0.0, reason), _wave(angles), "time")
        if budget == 0.0 and 0.0 < np.abs(angles).max() <= 2.0 * LONGEST:
            # The limit of waves ten times shorter tells whether it tends to zero with the length.
            shorter = self._table(10.0 * angles[:, None])
            if not self._excess(shorter, 2.0 * dt)[0] > 2.0 * dt * self._own(shorter):
                reason = "long waves grow at any step, the longer the more slowly"
                return Limit(Found.exactly(0.0, 0.0, reason), _wave(angles), "time")
        return Limit(Found.exactly(dt, 1e-9 * dt), _wave(angles))

    def _none(self, dt: float) -> Limit:
        values = self._excess(self._tables, dt)
        worst = slice(int(np.argmax(values)), int(np.argmax(values)) + 1)
        angles = self._angles[:, worst]
        # To first order in dt the growth is that of the discretised equations, Re lambda dt.
        pure = max(
            float(z.real.max())
            for part, table in zip(self._parts, self._table(angles), strict=True)
            for z in part.steps(table, dt, _ONE_CELL)
        )
        if pure > 0.0:
            reason = "the discretised equations grow by themselves, whatever the step"
            return Limit(Found.exactly(0.0, 0.0, reason), _wave(angles[:, 0]), "space")
        reason = "the integrator has a root that grows at any step"
        return Limit(Found.exactly(0.0, 0.0, reason), _wave(angles[:, 0]), "time")

    def _refine(self, grows: _Grows, wave: Array, dt: float, low: float) -> tuple[float, Array]:
        """Smaller first crossings near a wave, by a pattern search."""
        reach = 0.25
        for _ in range(_TRIES):
            near = around(wave, reach)
            enough = dt * (1.0 - 1e-8)
            earlier = near[:, grows(self._table(near), enough)]
            if earlier.shape[1]:
                found = _crossings(grows, self._table(earlier), low, enough)
                best = int(np.argmin(found))
                wave, dt = earlier[:, best], float(found[best])
            elif reach > 1e-5:
                reach *= 0.5
            else:
                break
        return dt, wave

    def _table(self, angles: Angles) -> list[WaveTable]:
        return [part.table(angles) for part in self._parts]

    def _excess(self, tables: list[WaveTable], dt: float | Array) -> Array:
        """ln factor per wave, the parts one after the other. dt: a number or (waves,)."""
        column = dt if isinstance(dt, float) else np.asarray(dt)[:, None]
        total = np.zeros(tables[0].rate.shape[0])
        for part, table in zip(self._parts, tables, strict=True):
            steps = part.steps(table, column, _ONE_CELL)
            total += np.max([part.integrator.growth(z)[:, 0] for z in steps], axis=0)
        return total

    def _own(self, tables: list[WaveTable]) -> float:
        return float(
            sum(
                part.own_growth(table, _ONE_CELL)[0]
                for part, table in zip(self._parts, tables, strict=True)
            )
        )

    def _fastest(self) -> float:
        """max |lambda| over the candidates (its root for second-order methods), per unit time."""
        sizes = []
        for part, table in zip(self._parts, self._tables, strict=True):
            z = max(float(np.abs(s).max()) for s in part.steps(table, 1.0, _ONE_CELL))
            sizes.append(np.sqrt(z) if part.integrator.time_order == 2 else z)
        return float(max(sizes))


def _crossings(grows: _Grows, tables: list[WaveTable], low: float, high: float) -> Array:
    """First steps between `low`, where no wave grows, and `high` at which each wave does; infinite
    where it does not grow at `high`. By halving, to 1e-11."""
    beyond = grows(tables, high)
    lows, highs = np.full(beyond.shape, low), np.full(beyond.shape, high)
    if low < 0.8 * high:  # mostly the crossing is near the upper end
        early = grows(tables, 0.8 * high)
        lows[~early], highs[early] = 0.8 * high, 0.8 * high
    for _ in range(60):
        middle = 0.5 * (lows + highs)
        up = grows(tables, middle)
        highs = np.where(up, middle, highs)
        lows = np.where(up, lows, middle)
        if np.all(highs - lows <= 1e-11 * highs):
            break
    return np.where(beyond, lows, np.inf)


def _wave(angles: Array) -> Wave:
    return Wave(tuple(float(a) for a in angles))
