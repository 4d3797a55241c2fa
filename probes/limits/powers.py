"""How large the powers of a step become: max over k of the norm of A**k, and at which k.

At a few k the vector that grows most is sought by a Lanczos iteration on the transposed power times
the power (its eigenvalue's root is the norm). These vectors are followed over all steps; where one
is largest the search is repeated. What is found is a growth that really occurs: a lower bound, as
close as the iteration has settled.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from probes.limits.records import Found
from probes.limits.stepping import Step

Array = NDArray[np.float64]

_SEED = 40_829
_PROBES = (1, 2, 5, 12, 30, 80, 200, 500, 1200, 3000)
_ROUNDS = 4
_SWEEPS = 12  # iterations where the largest is; a third of them elsewhere
# Longer than this after the largest one, and this much below it: it will not come back.
_FALLEN = math.log(1e3)
_SETTLED = 0.002
_ALIKE = 1e-6


@dataclass(frozen=True)
class Transient:
    """largest: max over 0 <= k <= steps of the norm of A**k. at: its k. steps: how far it was
    followed. rising: the largest is at the end, so that it may still grow. logarithm: ln of the
    value, which may be beyond the largest number.
    """

    largest: Found
    at: int
    steps: int
    rising: bool
    logarithm: float


def transient(step: Step, steps: int) -> Transient:
    """Follow the powers for `steps` steps, fewer once they have fallen for good."""
    start = np.random.default_rng(_SEED).standard_normal(step.size)
    start /= np.linalg.norm(start)
    seeds = [start]
    best, at, change = 0.0, 0, 0.0
    for k in (p for p in _PROBES if p <= steps):
        level, v, moved = _sharpened(step, seeds[-1], k, _SWEEPS // 3)
        seeds.append(v)
        if level > best + _ALIKE:
            best, at, change = level, k, moved
    vectors = np.column_stack(seeds[::-1])
    for _ in range(_ROUNDS):
        curve = _follow(step, vectors, steps)
        # The first of several that are alike: a level that is kept is not rising.
        top = curve.max(axis=1)
        k = int(np.argmax(top >= top.max() - _ALIKE))
        column = int(np.argmax(curve[k]))
        if k == 0 or curve[k, column] <= best:
            break
        level, v, moved = _sharpened(step, vectors[:, column], k, _SWEEPS)
        vectors = v[:, None]
        settled = level <= best + _SETTLED and at == k
        if level > best:
            best, at, change = level, k, moved
        if settled:
            break
    if at > 0:
        best, at, change = _uphill(step, vectors[:, 0], steps, (best, at, change))
    value = math.exp(min(best, 709.0))
    reason = "" if change <= 0.05 else f"a lower bound, settled to {change:.0%}"
    found = Found(value, value, value * (1.0 + change) if change <= 0.05 else None, reason)
    return Transient(found, at, steps, at >= steps - 1 and at > 0, best)


def _uphill(
    step: Step, v: Array, steps: int, found: tuple[float, int, float]
) -> tuple[float, int, float]:
    """At another k another vector grows most: look around the largest for a larger one."""
    best, at, change = found
    for part in (8, 16, 32):
        reach = max(1, at // part)
        for k in (at + reach, at - reach):
            if 0 < k <= steps:
                level, moved, settled = _sharpened(step, v, k, _SWEEPS // 3)
                if level > best + _ALIKE:
                    best, at, change, v = level, k, settled, moved
    return best, at, change


def _follow(step: Step, vectors: Array, steps: int) -> Array:
    """ln of the norms of A**k v for each column: (k, columns), k = 0 first."""
    state = vectors
    total = np.zeros(vectors.shape[1])
    levels = [total]
    for _ in range(steps):
        state = step.forward(state)
        size = np.linalg.norm(state, axis=0)
        if not (np.isfinite(size) & (size > 0.0)).all():
            break
        state = state / size
        total = total + np.log(size)
        levels.append(total)
        if (total < np.max(levels, axis=0) - _FALLEN).all():
            break
    return np.array(levels)


def _sharpened(step: Step, v: Array, k: int, sweeps: int) -> tuple[float, Array, float]:
    """ln of the norm of A**k, a vector that attains it, and its relative residual.

    Lanczos iteration from v on the transposed power times the power, its numbers scaled by their
    first size: they may be beyond the largest number.
    """
    basis, diagonal, off = [v], [], []
    scale = 0.0
    for n in range(sweeps):
        moved, up = _power(step.forward, basis[n], k)
        if math.isinf(up):
            return -math.inf, v, 0.0
        try:
            back, down = _power(step.back, moved, k)
        except NotImplementedError:
            return up, v, 1.0
        scale = up + down if n == 0 else scale
        w = back * math.exp(min(600.0, up + down - scale))
        diagonal.append(float(w @ basis[n]))
        for _ in range(2):  # once more, against rounding
            for old in basis:
                w = w - float(w @ old) * old
        beta = float(np.linalg.norm(w))
        off.append(beta)
        if beta <= 1e-10 * diagonal[0] or n == sweeps - 1:
            break
        basis.append(w / beta)
    values, vectors = scipy.linalg.eigh_tridiagonal(diagonal, off[:-1])
    top, weights = float(values[-1]), vectors[:, -1]
    residual = 0.5 * off[-1] * abs(float(weights[-1])) / top
    best = np.column_stack(basis) @ weights
    return 0.5 * (scale + math.log(top)), best, residual


def _power(apply: Callable[[Array], Array], v: Array, k: int) -> tuple[Array, float]:
    """The direction of apply**k v and ln of its growth."""
    total = 0.0
    for _ in range(k):
        v = apply(v)
        size = float(np.linalg.norm(v))
        if size == 0.0:
            return v, -math.inf
        v = v / size
        total += math.log(size)
    return v, total
