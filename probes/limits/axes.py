"""How far an integrator is stable along the negative real and the imaginary axis."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from probes.limits.integrators import Integrator
from probes.limits.records import Found, Law

# A limit this small is none: growth is merely below rounding there.
_NONE = 1e-2
_SEARCH_TO = 1e7
_RATIO = 1.02


def first_crossing(stable: Callable[[float], bool], start: float, end: float) -> float | None:
    """Largest x below which `stable` holds, to 1e-12 of it: upwards from `start` by 2 %, then by
    halving. None if it holds up to `end`; 0 if not even at `start`."""
    if not stable(start):
        return 0.0
    low = start
    while True:
        high = low * _RATIO
        if high > end:
            return None
        if not stable(high):
            break
        low = high
    return halved(stable, low, high)


def halved(stable: Callable[[float], bool], low: float, high: float) -> float:
    """The crossing between `low` (stable) and `high` (not), to 1e-12."""
    while high - low > 1e-12 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if stable(middle) else (low, middle)
    return low


def along(integrator: Integrator, direction: complex) -> Found:
    """Largest |z| along a ray up to which no root leaves the unit circle.

    direction: of unit modulus. The value is 0 where every step grows, however small.
    """

    def stable(x: float) -> bool:
        return float(integrator.growth(np.array([x * direction]))[0]) <= 0.0

    x = first_crossing(stable, 1e-5, _SEARCH_TO)
    if x is None:
        return Found.none("no limit along this direction")
    if x <= _NONE:
        return Found.exactly(0.0, 0.0, "grows at every step, however small")
    return Found.exactly(x, 1e-9 * x)


def real_limit(integrator: Integrator) -> Found:
    """Along the negative real axis: damping by diffusion. For u_tt = mu u, of -mu dt**2."""
    return along(integrator, -1.0)


def imaginary_limit(integrator: Integrator) -> Found:
    """Along the imaginary axis, the worse of both halves: waves. For u_tt = mu u it is the square
    root of the real one: omega dt with mu = -omega**2."""
    if integrator.time_order == 2:
        found = real_limit(integrator)
        return found if found.value is None else Found.exactly(found.value**0.5, 1e-9)
    up, down = along(integrator, 1.0j), along(integrator, -1.0j)
    if up.value is None or down.value is None:
        return up if down.value is None else down
    return up if up.value <= down.value else down


def growth_law(integrator: Integrator, direction: complex) -> Law:
    """Leading term of ln|root| along a ray at small |z|, from its values at 0.02 and 0.04."""
    one, other = integrator.growth(np.array([0.02, 0.04]) * direction)
    if one == 0.0 or other == 0.0:
        return Law(0.0, 0.0)
    power = float(np.log2(abs(other) / abs(one)))
    # Whole powers are what theory gives; the second term of the series blurs the estimate.
    power = float(round(power)) if abs(power - round(power)) < 0.1 else power
    return Law(float(one / 0.02**power), power)
