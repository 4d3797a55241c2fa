"""How much of the field is the growing part, and how long until it ruins or overflows it."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Range:
    """A value with an interval at `coverage`, or a reason why there is none."""

    value: float | None = None
    low: float | None = None
    high: float | None = None
    coverage: float = 0.0
    reason: str = ""

    @classmethod
    def none(cls, reason: str) -> Range:
        return cls(reason=reason)


def steps_until(
    ratio: float, factor: float, low: float, high: float, doubt: float, coverage: float = 0.8
) -> Range:
    """Steps until something that grows by `factor` per step has grown by 1 / ratio.

    ratio: present size over the size that matters (below one). low, high: interval of the factor.
    doubt: factor by which the present size may be wrong either way. The range combines the ends of
    both; with low <= 1 there is no upper end and hence no range, only a reason.
    """
    if not (factor > 1.0 and math.isfinite(factor)):
        return Range.none("nothing grows")
    if ratio >= 1.0:
        return Range(0.0, 0.0, 0.0, coverage)
    if ratio <= 0.0:
        return Range.none("the size of the growing part is not known")
    if low <= 1.0:
        return Range.none("the growth rate's interval reaches down to no growth")
    distance = -math.log(ratio)
    return Range(
        distance / math.log(factor),
        max(0.0, distance - math.log(doubt)) / math.log(high),
        (distance + math.log(doubt)) / math.log(low),
        coverage,
    )
