"""Elastic waves: velocities and stresses on staggered grids, in a bar and in a plane.

In the plane (Virieux 1986) the limit is vp dt / dx = 1 / sqrt(2), with the factor of leapfrog above
it: (s + sqrt(s**2 - 1))**2 at a share s.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases.carrying import bell
from tests.corpus.cases.diffusion import bump
from tests.corpus.cases.sounding import flat_top, ricker
from tests.corpus.growing import Subspace, WaveNumbers
from tests.corpus.marching import cadence, even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("elastic")
NAMES = ("vx", "vz", "sxx", "szz", "sxz")


def right(a: Array, axis: int) -> Array:
    return np.roll(a, -1, axis) - a


def left(a: Array, axis: int) -> Array:
    return a - np.roll(a, 1, axis)


def plane(s: State, lam: Array | float, mu: Array | float, r: float) -> State:
    """vx, vz, then the stresses with them; unit density, r = dt / dx, periodic."""
    vx, vz, sxx, szz, sxz = s
    vx = vx + r * (left(sxx, 0) + left(sxz, 1))
    vz = vz + r * (right(sxz, 0) + right(szz, 1))
    ex, ez = right(vx, 0), left(vz, 1)
    sxx = sxx + r * ((lam + 2 * mu) * ex + lam * ez)
    szz = szz + r * ((lam + 2 * mu) * ez + lam * ex)
    sxz = sxz + r * mu * (left(vz, 0) + right(vx, 1))
    return [vx, vz, sxx, szz, sxz]


def bar(s: State, stiff: Array, r: float) -> State:
    """Velocity in n + 1 places and stress between them, both ends held."""
    v, tension = s
    v = v.copy()
    v[1:-1] += r * np.diff(tension)
    return [v, tension + r * stiff * np.diff(v)]


def shape_of(rng: np.random.Generator) -> tuple[int, int]:
    return 2 * pick(rng, 24, 34), 2 * pick(rng, 24, 34)


def pressed(shape: tuple[int, int], rng: np.random.Generator) -> State:
    """At rest under a smooth pressure."""
    p = bump(shape, rng)
    return [np.zeros(shape), np.zeros(shape), p, p.copy(), np.zeros(shape)]


def everywhere(
    rng: np.random.Generator,
    excess: float,
    store: str = "f8",
    views: int = 40,
    midway: bool = False,
) -> Run:
    """Above the limit everywhere; midway: from a longer step on."""
    shape = shape_of(rng)
    mu = uniform(rng, 0.2, 0.4)
    lam = 1.0 - 2.0 * mu
    long, short = (1.0 + excess) / np.sqrt(2.0), uniform(rng, 0.8, 0.95) / np.sqrt(2.0)
    modes = WaveNumbers(lambda s: plane(s, lam, mu, long), [shape] * 5)
    stride = cadence(rng, modes.factor, store, views)
    since = stride * pick(rng, 20, 30) if midway else 0

    def r(n: int) -> float:
        return long if n >= since else short

    recorder = Recorder(store)

    def step(s: State, n: int) -> State:
        return plane(s, lam, mu, r(n))

    march(recorder, pressed(shape, rng), step, even(stride, 400), NAMES, r, modes, since)
    return recorder.sick(since, modes.factor)


def in_single(rng: np.random.Generator, excess: float) -> Run:
    """The solver itself computes in single precision, which seeds what grows a billion times
    more."""
    shape = shape_of(rng)
    mu = uniform(rng, 0.2, 0.4)
    r = np.float32((1.0 + excess) / np.sqrt(2.0))
    lam, mu = np.float32(1.0 - 2.0 * mu), np.float32(mu)
    modes = WaveNumbers(lambda s: plane(s, float(lam), float(mu), float(r)), [shape] * 5)
    stride = cadence(rng, modes.factor, "f4", 20)
    state = [a.astype(np.float32) for a in pressed(shape, rng)]
    recorder = Recorder("f4")
    step = frozen(lambda s: plane(s, lam, mu, r))
    march(recorder, state, step, even(stride, 400), NAMES, float(r), modes)
    return recorder.sick(0, modes.factor)


def stiff_piece(rng: np.random.Generator, excess: float, store: str = "f8") -> Run:
    """A bar with a stiffer piece, with smooth joints, in which waves are too fast."""
    n = pick(rng, 120, 180)
    stiff = uniform(rng, 0.6, 0.75) * np.ones(n)
    stiff += (1.0 - stiff) * flat_top((n,), [uniform(rng, 0.3, 0.7) * n], uniform(rng, 9.0, 12.0))

    def step(s: State) -> State:
        return bar(s, stiff, 1.0 + excess)

    modes = Subspace(step, [(n + 1,), (n,)], reach=2)
    stride = cadence(rng, modes.factor, store)
    recorder = Recorder(store, placed=True)
    state = [np.zeros(n + 1), bell((n,), [0.5 * n], n / 9)]
    march(recorder, state, frozen(step), even(stride, 400), ["v", "s"], 1.0, modes)
    return recorder.sick(0, modes.factor)


def end(rng: np.random.Generator) -> Run:
    """A dashpot at one end of a bar that is too strong for an explicit step."""
    n, r = pick(rng, 120, 180), uniform(rng, 0.7, 0.9)
    strong = uniform(rng, 0.2, 0.3)
    stiff = np.ones(n)

    def step(s: State) -> State:
        v, tension = s
        new = bar(s, stiff, r)[0]
        # Half a cell of mass: force of the bar and of the dashpot, which alone would flip the
        # velocity from step to step.
        new[-1] = v[-1] * (1.0 - 2.0 + r * r - strong) - 2.0 * r * tension[-1]
        return [new, tension + r * stiff * np.diff(new)]

    modes = Subspace(step, [(n + 1,), (n,)], reach=2)
    stride = cadence(rng, modes.factor)
    recorder = Recorder(placed=True)
    state = [np.zeros(n + 1), bell((n,), [0.3 * n], n / 25)]
    march(recorder, state, frozen(step), even(stride, 400), ["v", "s"], 1.0, modes)
    return recorder.sick(0, modes.factor)


def shot(
    rng: np.random.Generator,
    share: tuple[float, float],
    stride: tuple[int, int],
    store: str = "f8",
    layered: bool = False,
    late: bool = False,
) -> Run:
    """An explosion sends waves through a quiet plane, also a layered one, at once or midway."""
    shape = shape_of(rng)
    mu = uniform(rng, 0.2, 0.4) * np.ones(shape)
    lam = 1.0 - 2.0 * mu
    if layered:
        for modulus in (lam, mu):
            modulus[shape[0] // 2 :] *= 0.4
    r = uniform(rng, *share) / np.sqrt(2.0)
    place = bell(shape, [uniform(rng, 0.3, 0.7) * n for n in shape], 2.5)
    every = pick(rng, *stride)
    centre = 40.0 + (every * pick(rng, 40, 60) if late else 0)

    def step(s: State, n: int) -> State:
        vx, vz, sxx, szz, sxz = plane(s, lam, mu, r)
        push = 0.3 * ricker(n, centre, 9.0) * place
        return [vx, vz, sxx + push, szz + push, sxz]

    recorder = Recorder(store)
    state = [np.zeros(shape) for _ in range(5)]
    march(recorder, state, step, even(every, 130), NAMES, r)
    return recorder.healthy()


def hit(rng: np.random.Generator, store: str) -> Run:
    """One end of a bar is hit; the front runs to and fro."""
    n, r = pick(rng, 120, 200), uniform(rng, 0.9, 0.99)
    stiff = np.ones(n)
    v = np.zeros(n + 1)
    v[: pick(rng, 5, 12)] = 1.0
    recorder = Recorder(store)
    step = frozen(lambda s: bar(s, stiff, r))
    march(recorder, [v, np.zeros(n)], step, even(pick(rng, 3, 8), 150), ["v", "s"], r)
    return recorder.healthy()


for _name, _what, _make in (
    ("plane_half_percent", "0.5 % above", partial(everywhere, excess=0.005)),
    (
        "plane_ten_percent_f4",
        "10 % above, f4, hardly any snapshot before the ruin",
        partial(everywhere, excess=0.1, store="f4"),
    ),
    (
        "plane_longer_step",
        "the step is lengthened to 1 % above midway",
        partial(everywhere, excess=0.01, midway=True),
    ),
    (
        "plane_in_single",
        "computed in single precision, 0.5 % above",
        partial(in_single, excess=0.005),
    ),
    ("bar_stiff_piece", "2 % above in a stiff piece", partial(stiff_piece, excess=0.02)),
    (
        "bar_stiff_piece_f4",
        "1 % above in a stiff piece, f4",
        partial(stiff_piece, excess=0.01, store="f4"),
    ),
    ("bar_dashpot", "only at one boundary", end),
):
    FAMILY.sick(_name, _what, _make)
for _name, _what, _make in (
    (
        "plane_near_limit_f4",
        "0.99 of the limit, f4",
        partial(shot, share=(0.99, 0.9901), stride=(1, 4), store="f4"),
    ),
    (
        "plane_arriving",
        "waves arrive in quiet tiles",
        partial(shot, share=(0.7, 0.9), stride=(1, 2)),
    ),
    (
        "plane_layered",
        "waves in two layers, a late shot",
        partial(shot, share=(0.7, 0.95), stride=(1, 3), layered=True, late=True),
    ),
    (
        "plane_three_digits",
        "stored in 3 digits",
        partial(shot, share=(0.7, 0.95), stride=(1, 3), store="3 digits"),
    ),
    ("bar_hit", "a front that runs to and fro", partial(hit, store="f8")),
    ("bar_hit_half_precision", "the same, stored in float16", partial(hit, store="f2")),
):
    FAMILY.healthy(_name, _what, _make)
