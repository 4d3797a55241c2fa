"""What the limit analyses answer: numbers with their doubt, and words for what was found."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Found:
    """A number with its interval, or the reason why there is none.

    value: None where there is none. low, high: the truth lies between them (None: not known).
    reason: why there is no value, or what restricts it ("" if nothing does).
    """

    value: float | None = None
    low: float | None = None
    high: float | None = None
    reason: str = ""

    @classmethod
    def exactly(cls, value: float, error: float = 0.0, reason: str = "") -> Found:
        """A value known to within `error`."""
        value, error = float(value), float(error)
        return cls(value, value - error, value + error, reason)

    @classmethod
    def none(cls, reason: str) -> Found:
        return cls(reason=reason)


@dataclass(frozen=True, slots=True)
class Wave:
    """A wave on the grid.

    angles: phase per cell along each axis, radians, -pi to pi.
    """

    angles: tuple[float, ...]

    @property
    def cells_per_axis(self) -> tuple[float, ...]:
        """Cells per wavelength along each axis; infinite along an axis without variation."""
        return tuple(2.0 * math.pi / abs(a) if a else math.inf for a in self.angles)

    @property
    def cells(self) -> float:
        """Cells per wavelength across the wave's crests, 2 pi / |theta|."""
        size = math.sqrt(math.fsum(a * a for a in self.angles))
        return 2.0 * math.pi / size if size else math.inf


@dataclass(frozen=True, slots=True)
class Number:
    """One term's own dimensionless step.

    term: the term's name. name: "advective Courant number" and so on. value: at the step that was
    asked about (or at the limit). alone: its value at the limit if this term were the only one,
    None where nothing limits it.
    """

    term: str
    name: str
    value: float
    alone: float | None = None


@dataclass(frozen=True, slots=True)
class Law:
    """Growth per step at small steps, ln G = coefficient * z**power with z = |lambda| dt."""

    coefficient: float
    power: float
