"""Is a level rising, and since when? Tests on series of ln levels. Pure functions.

The slope of the level is tested over a geometric set of window lengths, a generalised likelihood
ratio for "level until some time, straight rise since" (Page 1954 for the idea of sequential
detection, Lorden 1971 for its optimality). Sums of increments are not used: the increments of a
noisy level form a moving average whose sum telescopes, so that slow growth is never found.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from probes.growth import Fit, fit_line

Array = NDArray[np.float64]

SHORTEST = 6
_WIDER = 1.35
# Growth by decades per snapshot leaves no time for six points: four do if they rise further.
_FAST = 4
_FAST_RISE = 1.5
# Growth by a constant factor settles to its slope from below, by little; where a front forms or a
# field is driven, the last third of the rise is steeper than the whole by more than this.
_QUICKENING = 1.25
# Residual rms, in ln, that no straight line exceeds however far it rises.
_LARGEST_RMS = 0.25


def windows(points: int, shortest: int = SHORTEST) -> Iterator[int]:
    """Window lengths up to `points`, growing by about a third each."""
    n = shortest
    while n <= points:
        yield n
        n = max(n + 1, round(n * _WIDER))


@dataclass(frozen=True, slots=True)
class Rise:
    """A rise found in a window of the last `points` values: its line, and the score (slope over
    its standard error, widened for correlated residuals) with the threshold it had to pass."""

    fit: Fit
    score: float
    threshold: float
    start: int


def correlation(residual: Array) -> float:
    """Lag-one autocorrelation of the noise behind a fitted line's residuals, within 0 and 0.95.

    The estimate from n residuals is too low by about (1 + 4 rho) / n (Kendall 1954; Marriott and
    Pope 1954), the more so after a line has been taken out, and is raised by twice that.
    """
    square = float(residual @ residual)
    if square == 0.0:
        return 0.0
    rho = float(residual[1:] @ residual[:-1]) / square
    raised = rho + 2.0 * (1.0 + 4.0 * max(0.0, rho)) / len(residual)
    return min(0.95, max(0.0, raised))


def threshold(points: int, rho: float, run_length: float, looks: int) -> float:
    """Score that noise exceeds less than once in `run_length` snapshots, at all `looks` window
    lengths together.

    Student's t with as many degrees of freedom as there are independent points,
    points * (1 - rho) / (1 + rho) (Bayley and Hammersley 1946), less two; the chance is divided by
    the looks (Bonferroni; windows overlap, so that the true rate is lower). On noise correlated by
    0.5 rises are found up to three times as often as stated, since rho is estimated (measured, see
    the tests).
    """
    freedom = max(2.0, points * (1.0 - rho) / (1.0 + rho) - 2.0)
    return float(-stdtrit(freedom, 1.0 / run_length / looks))


def rising(x: Array, y: Array, run_length: float) -> Rise | None:
    """The most significant rise among the windows that end now, or None.

    x: (points,) steps or counts; y: (points,) finite ln levels, oldest first.
    """
    best: Rise | None = None
    lengths = list(windows(len(y), 8))
    for n in lengths:
        fit = fit_line(x[-n:], y[-n:])
        if fit.slope <= 0.0:
            continue
        line = y[-n:].mean() + fit.slope * (x[-n:] - x[-n:].mean())
        rho = correlation(y[-n:] - line)
        error = fit.error * math.sqrt((1.0 + rho) / (1.0 - rho))
        score = fit.slope / error if error > 0.0 else math.inf
        limit = threshold(n, rho, run_length, len(lengths))
        if score > limit and (best is None or score / limit > best.score / best.threshold):
            best = Rise(fit, score, limit, len(y) - n)
    return best


def straight_rise(
    x: Array, y: Array, over: NDArray[np.bool_], rise: float, straight: float
) -> Rise | None:
    """The longest window that ends now in which y rises by at least `rise` on a straight line.

    over: (points,) whether a value stands above its floor; the later half of a window must. The
    residual rms may be at most `straight` times the rise, and the line may not quicken.
    """
    best: Rise | None = None
    for n in (*range(_FAST, SHORTEST), *windows(len(y))):
        if n > len(y):
            break
        part = y[-n:]
        if not np.isfinite(part).all() or not over[-(n - n // 2) :].all():
            continue
        fit = fit_line(x[-n:], part)
        needed = rise if n >= SHORTEST else _FAST_RISE * rise
        if fit.rise >= needed and fit.rms <= min(straight * fit.rise, _LARGEST_RMS):
            last = max(3, n // 3)
            if fit_line(x[-last:], y[-last:]).slope > _QUICKENING * fit.slope:
                continue
            score = fit.slope / fit.error if fit.error > 0.0 else math.inf
            best = Rise(fit, score, 0.0, len(y) - n)
    return best
