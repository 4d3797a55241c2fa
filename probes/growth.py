"""Levels of successive differences, their floors, factors, wavelengths and straight lines.

Levels are natural logarithms of an rms; factors are per step or per snapshot as named. All
functions are pure.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def difference_gain(order: int) -> float:
    """Rms that the normalised p-th difference leaves of unit white noise: sqrt(C(2p, p)) / 2**p.

    The sum of squared binomial coefficients is C(2p, p) (Vandermonde's identity).
    """
    return math.sqrt(math.comb(2 * order, order)) / 2.0**order


def spacing(peak: Array, relative: float) -> Array:
    """Distance of neighbouring numbers of the storage type at `peak` (ulp, same shape).

    relative: spacing at one (2**-52 for float64); 0 means integers, whose spacing is one.
    Reference: IEEE 754-2019, section 3.3 (ulp = eps * 2**exponent).
    """
    if relative == 0.0:
        return np.ones_like(peak)
    exponent = np.frexp(np.maximum(peak, np.finfo(np.float64).tiny))[1] - 1
    return relative * np.exp2(exponent.astype(np.float64))


def rounding_floor(peak: Array, relative: float, order: int) -> Array:
    """Rms that rounding to storage alone gives the p-th difference of a snapshot difference.

    Uniform rounding errors of +-1/2 ulp have variance ulp**2 / 12, a difference of two snapshots
    twice that (common practice for quantisation noise: Widrow, Kollar and Liu 1996).
    """
    return spacing(peak, relative) * math.sqrt(2.0 / 12.0) * difference_gain(order)


def pool(levels: Array, positions: Array) -> float:
    """Rms over tiles: levels (tiles,) weighted with their positions (tiles,); 0 where none."""
    total = float(positions.sum())
    size = float(np.abs(levels).max(initial=0.0))
    if total == 0.0 or size == 0.0 or not math.isfinite(size):
        return size if not math.isfinite(size) else 0.0
    return size * math.sqrt(float(np.dot((levels / size) ** 2, positions)) / total)


def pool_many(levels: Array, positions: Array) -> float:
    """The same over several groups at once: levels and positions (tiles, groups)."""
    return pool(levels.ravel(), positions.ravel())


def half_angle(low: float, high: float, p: int, q: int) -> float:
    """theta in radians per cell of a wave from its levels at orders p < q; 0 where unseen.

    The p-th normalised difference multiplies a wave by sin(theta / 2)**p, hence
    sin(theta / 2) = (high / low)**(1 / (q - p)); a ratio above one is the grid limit, theta = pi.
    """
    if low <= 0.0 or high <= 0.0:
        return 0.0
    return 2.0 * math.asin(min(1.0, (high / low) ** (1.0 / (q - p))))


def cells_per_wavelength(angles: tuple[float, ...]) -> float | None:
    """2 pi / |theta| over all axes; None where no axis shows a wave."""
    size = math.sqrt(math.fsum(a * a for a in angles))
    return 2.0 * math.pi / size if size > 0.0 else None


@dataclass(frozen=True, slots=True)
class Fit:
    """Straight line through levels: slope per unit of x, its standard error, the rise over the
    window and the rms of the residuals (both in units of y), and the number of points."""

    slope: float
    error: float
    rise: float
    rms: float
    points: int


def fit_line(x: Array, y: Array) -> Fit:
    """Least squares line. Needs at least three points with different x, else ValueError."""
    n = len(x)
    if n < 3 or float(np.ptp(x)) == 0.0:
        raise ValueError("a line with residuals needs three points at different x")
    centred = x - x.mean()
    square = float(centred @ centred)
    slope = float(centred @ y) / square
    residual = y - y.mean() - slope * centred
    rms = math.sqrt(float(residual @ residual) / n)
    error = math.sqrt(float(residual @ residual) / (n - 2) / square)
    return Fit(slope, error, slope * float(x[-1] - x[0]), rms, n)


def late_slope(x: Array, y: Array) -> tuple[float, float, float]:
    """Slope that a rise settles to, with a range: (slope, low, high), per unit of x.

    x, y: (points,), four at least. The slope of the later half (three points at least): what comes
    before still holds other parts, and with many modes close to the largest factor the slope
    approaches its logarithm from below, as dim / (4 steps) does (Laplace's method). So the range
    reaches up three times as far as the slope rose from the first half to the second, enough for a
    growth that had begun as long before as the rise lasts, but not less than two standard errors;
    down to the slope of the whole, or two standard errors.
    """
    half = max(3, len(x) // 2 + 1)
    early, late, whole = (
        fit_line(x[a:b], y[a:b]) for a, b in ((0, half), (len(x) - half, len(x)), (0, len(x)))
    )
    doubt = 2.0 * max(late.error, whole.error)
    high = late.slope + max(doubt, 3.0 * (late.slope - early.slope))
    return late.slope, min(late.slope - doubt, whole.slope), high


def fit_lines(y: Array) -> tuple[Array, Array]:
    """Slopes per row index and residual rms of many series at once: y (points, series)."""
    n = y.shape[0]
    x = np.arange(n) - (n - 1) / 2.0
    centred = y - y.mean(axis=0)
    slope = x @ centred / float(x @ x)
    residual = centred - x[:, None] * slope
    return slope, np.sqrt((residual**2).mean(axis=0))
