"""Which step to restart with, from the scheme's own limit or from the growth that was seen.

A growth G per step belongs to some z = lambda dt with a root of that modulus. A smaller step moves
z towards the origin on its ray; where its roots meet the unit circle is the mode's own limit.
For forward Euler and a mode on the negative real axis that ratio is 2 / (1 + G), for a staggered
leapfrog 2 sqrt(G) / (1 + G): which ray it is decides, so both are given unless it is known.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from probes.limits.axes import first_crossing, halved
from probes.limits.integrators import Integrator
from probes.limits.records import Found
from probes.limits.vonneumann import Limit

Ray = Literal["damped", "wave"]

# Nearer to a limit than this nothing is advised.
MOST = 0.95
_LARGEST = 1e4


@dataclass(frozen=True, slots=True)
class RestartStep:
    """ratio: new step over the failed one, at most `MOST`, with the range of the mode's own limit;
    or why there is none. curable: False where no smaller step helps. assumes: what this rests on.
    """

    ratio: Found
    curable: bool
    assumes: str


def from_limit(limit: Limit, step: float) -> RestartStep:
    """Advice where the scheme is known. limit: of the scheme; step: that failed."""
    assumes = "the scheme's own limit, from the configured terms"
    dt = limit.dt.value
    if dt is None:
        return RestartStep(Found.none(limit.dt.reason), False, assumes)
    if dt == 0.0:
        return RestartStep(
            Found.none(f"no smaller step cures it: {limit.dt.reason}"), False, assumes
        )
    if dt >= step:
        reason = (
            f"the failed step was {step / dt:.1%} of the scheme's limit: what grew is not of the "
            "configured terms (a boundary, another term, a coefficient that changed)"
        )
        return RestartStep(Found.none(reason), False, assumes)
    ratio = dt / step
    return RestartStep(Found(min(MOST, MOST * ratio), None, ratio), True, assumes)


def from_growth(
    integrator: Integrator, low: float, high: float, ray: Ray | None = None
) -> RestartStep:
    """Advice where only the integrator and the growth are known.

    low, high: the factor per step lies between them, both over 1. ray: where lambda lies, if known;
    else both rays are taken and the stricter one is advised.
    """
    rays: tuple[Ray, ...] = (ray,) if ray else _rays(integrator)
    found = [(r, limit_ratio(integrator, g, r)) for r in rays for g in (low, high)]
    known = [ratio for _, ratio in found if ratio is not None]
    kinds = " or ".join(_WORDS[r] for r in rays)
    assumes = f"{integrator.title} with a mode that is {kinds}"
    if not known:
        reason = f"{integrator.title} gives no such growth to a mode that is {kinds}"
        return RestartStep(Found.none(reason), False, assumes)
    if min(known) == 0.0:
        worst = ", ".join(sorted({_WORDS[r] for r, ratio in found if ratio == 0.0}))
        reason = f"a smaller step does not cure it if the mode is {worst}"
        curable = [ratio for ratio in known if ratio > 0.0]
        if not curable:
            return RestartStep(Found.none(reason), False, assumes)
        value = MOST * min(curable)
        return RestartStep(Found(value, 0.0, max(curable), reason), True, assumes)
    return RestartStep(Found(MOST * min(known), min(known), max(known)), True, assumes)


def limit_ratio(integrator: Integrator, factor: float, ray: Ray) -> float | None:
    """The mode's stable step over the one at which it grows by `factor` > 1.

    0 where every step grows; None where the integrator never grows by that much on this ray.
    """
    direction = -1.0 if ray == "damped" or integrator.time_order == 2 else 1.0j
    target = math.log(factor)

    def stable(x: float) -> bool:
        return float(integrator.growth(np.array([x * direction]))[0]) <= 0.0

    def below(x: float) -> bool:
        return float(integrator.growth(np.array([x * direction]))[0]) < target

    at = first_crossing(below, 1e-6, _LARGEST)
    limit = first_crossing(stable, 1e-5, _LARGEST)
    if at is None or limit is None:
        return None
    at = halved(below, at, at * 1.02)
    if limit <= 1e-2:  # grows at any step, below rounding at small ones
        return 0.0
    ratio = min(1.0, limit / at)
    return math.sqrt(ratio) if integrator.time_order == 2 else ratio


_WORDS: dict[Ray, str] = {"damped": "damped without oscillating", "wave": "an undamped wave"}


def _rays(integrator: Integrator) -> tuple[Ray, ...]:
    return ("wave",) if integrator.time_order == 2 else ("damped", "wave")
