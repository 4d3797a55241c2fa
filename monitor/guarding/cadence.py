"""How often snapshots come: usual spacing in time, stride in steps, and what is missing. Pure."""

from __future__ import annotations

from collections import deque
from statistics import median

# Snapshots that a judgement on the cadence rests on.
_GAPS = 16
# So many equal strides in a row make a stride regular.
REGULAR = 3


class Spacing:
    """Usual seconds between two snapshots, from their files' times of change."""

    def __init__(self) -> None:
        self._last: float | None = None
        self._gaps: deque[float] = deque(maxlen=_GAPS)

    def add(self, mtime: float) -> None:
        """Times going backwards (copied files, a restart) say nothing and are passed over."""
        if self._last is not None and mtime > self._last:
            self._gaps.append(mtime - self._last)
        self._last = mtime

    @property
    def usual(self) -> float | None:
        """Median of the last gaps, None before there are two snapshots."""
        return median(self._gaps) if self._gaps else None


class Strides:
    """Notices snapshots that must have come and gone unseen: a regular stride, then a jump over one
    or more places of it."""

    def __init__(self, steps: tuple[int, ...] = ()) -> None:
        self._steps: deque[int] = deque(steps, maxlen=REGULAR + 1)

    @property
    def steps(self) -> tuple[int, ...]:
        """The last steps, to go on from later."""
        return tuple(self._steps)

    def add(self, step: int | None) -> tuple[int, ...]:
        """Steps missed before this one."""
        if step is None:
            self._steps.clear()
            return ()
        missed: tuple[int, ...] = ()
        if len(self._steps) == REGULAR + 1:
            strides = {b - a for a, b in zip(self._steps, list(self._steps)[1:], strict=False)}
            stride, jump = strides.pop(), step - self._steps[-1]
            if not strides and stride > 0 and jump > stride and jump % stride == 0:
                missed = tuple(range(self._steps[-1] + stride, step, stride))
        self._steps.append(step)
        return missed

    def clear(self) -> None:
        """A new segment."""
        self._steps.clear()
