"""How long until a quantity that nears a bound gets there, as a range or a reason. Pure functions.

Unlike a growing error, what breaks a bound (a depth, a density) need not move exponentially: the
distance to the bound is taken to go on shrinking about as it did last.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from probes.forecast import Range
from probes.growth import fit_line
from probes.onset import correlation, rising

Array = NDArray[np.float64]

# An approach is told when the bound lies no farther ahead, at the slower end of the range, than so
# many times the stretch on which it was seen. With twice that, what relaxes towards a bound and
# never gets there was told too.
AHEAD = 1.0
# A pace that changes is taken to change on, for so many times the change from the first half of the
# stretch to its second.
_CHANGE = 3.0
_COVERAGE = 0.8


@dataclass(frozen=True, slots=True)
class Approach:
    """The shrinking of a distance: seen over `span` (in units of x) and `points` values; `left` is
    what of x remains until the bound, `near` whether that is soon enough to be told."""

    span: float
    points: int
    left: Range
    near: bool


def approach(x: Array, gap: Array, run_length: float) -> Approach | None:
    """The approach that ends with the last value; None where the distance does not shrink.

    x: (points,) steps or counts, increasing; gap: (points,) finite distances to the bound, the last
    above zero. run_length: average number of values of pure noise to a false find (see
    `probes.onset.rising`).

    Distance and pace are those of a line through the later half of the stretch. The range's ends
    take two standard errors of both (and the scatter, since the noisy value itself breaks the
    bound), or, where that is more, a pace that goes on changing as it did from the first half of
    the stretch to its second. A pace that would come to rest before the bound gives no upper end,
    hence no range but a reason.
    """
    found = rising(x, -gap, run_length)
    if found is None:
        return None
    xs, ys = x[found.start :], -gap[found.start :]
    half = max(4, len(xs) // 2)
    early, late = fit_line(xs[:half], ys[:half]), fit_line(xs[-half:], ys[-half:])
    line = ys[-half:].mean() + late.slope * (xs[-half:] - xs[-half:].mean())
    rho = correlation(ys[-half:] - line)
    error = late.error * math.sqrt((1.0 + rho) / (1.0 - rho))
    span, reach = float(xs[-1] - xs[0]), float(xs[-1] - xs[-half:].mean())
    distance = max(0.0, -float(line[-1]))
    doubt, change = 2.0 * error, _CHANGE * (late.slope - early.slope)
    slow = late.slope - max(doubt, -change)
    fast = late.slope + max(doubt, change)
    if slow <= 0.0:
        slowing = Range.none("it slows down and may come to rest before")
        return Approach(span, len(xs), slowing, near=False)
    off = late.rms + doubt * reach
    low, high = max(0.0, distance - off) / fast, (distance + off) / slow
    return Approach(
        span,
        len(xs),
        Range(distance / late.slope, low, high, _COVERAGE),
        near=high <= AHEAD * span,
    )
