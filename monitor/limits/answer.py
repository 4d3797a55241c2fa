"""What `limit` found, as one record for text and JSON."""

from __future__ import annotations

from dataclasses import dataclass

from probes.limits.cells import Spot
from probes.limits.matrix import MatrixAnswer
from probes.limits.records import Found, Number, Wave


@dataclass(frozen=True)
class Budget:
    """steps, growth: at most this growth in so many steps. dt: the largest step that keeps it."""

    steps: int
    growth: float
    dt: Found


@dataclass(frozen=True)
class SymbolPart:
    """Frozen-coefficient analysis.

    dt: the largest step. wave: the first to grow beyond it. cell: that sets it, () where all are
    alike. factor, allowed, worst: at the judged step, None without one. exceeding: the region that
    grows there, None if there is none. exceeds: whether the judged step is too long anywhere.
    """

    dt: Found
    wave: Wave | None
    cell: tuple[int, ...]
    factor: float | None
    allowed: float | None
    worst: Wave | None
    exceeding: Spot | None
    exceeds: bool


@dataclass(frozen=True)
class LimitAnswer:
    """title: integrator and terms. step: that was asked about, None if none was. judged_at: the
    step that factor, numbers and matrix refer to. dt_max: the largest step. verdict: a word or
    two; why: a sentence. stable: of the given step, True without one.
    """

    title: str
    evaluations: int
    step: float | None
    judged_at: float | None
    dt_max: Found
    symbol: SymbolPart | None
    matrix_dt: Found | None
    matrix: MatrixAnswer | None
    budget: Budget | None
    numbers: tuple[Number, ...]
    verdict: str
    why: str
    stable: bool
    notes: tuple[str, ...]

    @property
    def factor(self) -> float | None:
        """Growth per step at the judged step: the symbol's, or the matrix's radius."""
        if self.symbol is not None and self.symbol.factor is not None:
            return self.symbol.factor
        return self.matrix.radius.value.value if self.matrix is not None else None

    @property
    def wave(self) -> Wave | None:
        """The worst wave at the judged step if that is beyond the limit, else the first to grow."""
        if self.symbol is None:
            return None
        return self.symbol.worst if self.symbol.exceeds else self.symbol.wave
