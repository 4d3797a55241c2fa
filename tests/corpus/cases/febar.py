"""An explicit finite-element bar: linear elements of unequal length, lumped masses, central
differences in time, and nodes numbered in any order, so that neighbours in the file are none in the
bar. Only its bulk can be judged.

With the largest eigenvalue w**2 of M^-1 K the limit is dt = 2 / w (Belytschko, Liu and Moran,
Nonlinear Finite Elements, section 6.2, from memory).
"""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Array, Family, Fields, Run
from tests.corpus.cases.sounding import ricker
from tests.corpus.growing import Subspace
from tests.corpus.marching import cadence, even, march, pick, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("febar")


def mesh(rng: np.random.Generator, short: float = 1.0) -> tuple[Array, Array]:
    """Element lengths (n - 1), one of which is `short` times as long, and the order of the n nodes
    in the files."""
    n = pick(rng, 110, 170)
    lengths = rng.uniform(0.8, 1.2, size=n - 1)
    if short != 1.0:
        lengths[pick(rng, n // 4, 3 * n // 4)] = 0.8 * short
    return lengths, rng.permutation(n)


def matrix(lengths: Array, stiff: Array | float = 1.0) -> Array:
    """M^-1 K of the bar with its first node held, in the order of the bar."""
    k = stiff * np.ones(len(lengths)) / lengths
    masses = 0.5 * (np.append(lengths, 0.0) + np.append(0.0, lengths))
    full = np.diag(np.append(k, 0.0) + np.append(0.0, k)) - np.diag(k, 1) - np.diag(k, -1)
    full = full / masses[:, None]
    full[0] = 0.0
    return full


def limit(of: Array) -> float:
    return 2.0 / float(np.sqrt(np.abs(np.linalg.eigvals(of)).max()))


def stretched(rng: np.random.Generator, lengths: Array, order: Array, swing: float) -> Array:
    """A bar that is pulled at its free end, swinging by so much about its rest, in the file's
    order. The pull is `matrix` times this without the swing."""
    x = np.append(0.0, np.cumsum(lengths))
    x /= x[-1]
    wave = np.sin(0.5 * np.pi * x) * (1.0 + uniform(rng, -0.3, 0.3) * np.sin(np.pi * x))
    return (x + swing * wave)[order]


def sick(
    rng: np.random.Generator,
    excess: float,
    store: str = "f8",
    short: float = 1.0,
    midway: bool = False,
    views: int = 60,
) -> Run:
    """Above the limit: everywhere, by one element that is too short, or since the bar stiffened.
    The bar is under tension and hardly moves."""
    lengths, order = mesh(rng, short)
    a = matrix(lengths)[np.ix_(order, order)]
    n = len(order)
    dt = (1.0 + excess) * limit(a)
    softer = uniform(rng, 0.85, 0.95)
    rest = stretched(rng, lengths, order, 0.0)
    modes = Subspace(
        lambda s: [s[1], 2.0 * s[1] - s[0] - dt * dt * (a @ s[1])], [(n,)] * 2, reach=n
    )
    stride = cadence(rng, modes.factor, store, views)
    since = stride * pick(rng, 25, 40) if midway else 0

    def step(s: State, k: int) -> State:
        strength = 1.0 if k >= since else softer
        return [s[1], 2.0 * s[1] - s[0] - strength * dt * dt * (a @ s[1])]

    # What is computed is the deviation from the rest, to which the pull does nothing.
    recorder = Recorder(store, gridded=False)
    start = stretched(rng, lengths, order, 1e-5) - rest

    def view(s: State) -> Fields:
        return {"u": rest + s[1]}

    march(
        recorder, [start, start], step, even(stride, 400), [None, "u"], dt, modes, since, view=view
    )
    return recorder.sick(since, modes.factor)


def healthy(
    rng: np.random.Generator,
    share: tuple[float, float],
    how: str,
    store: str,
    stride: tuple[int, int],
) -> Run:
    """Within the limit: swinging, hit at one end so that a front runs through it, or driven."""
    lengths, order = mesh(rng)
    a = matrix(lengths)[np.ix_(order, order)]
    dt = uniform(rng, *share) * limit(a)
    n = len(order)
    rest = stretched(rng, lengths, order, 0.0)
    start = np.zeros(n)
    if how in ("swinging", "creaking"):
        start = stretched(rng, lengths, order, 0.3 if how == "swinging" else 1e-6) - rest
    end = (order == n - 1).astype(float)
    every = pick(rng, *stride)

    def step(s: State, k: int) -> State:
        push = 0.0
        if how == "hit":
            push = ricker(k, 60.0, 10.0)
        elif how == "driven":
            push = float(np.sin(0.05 * k))
        return [s[1], 2.0 * s[1] - s[0] - dt * dt * (a @ s[1]) + dt * dt * push * end]

    recorder = Recorder(store, gridded=False)

    def view(s: State) -> Fields:
        return {"u": rest + s[1]}

    march(recorder, [start, start], step, even(every, 150), [None, "u"], dt, view=view)
    return recorder.healthy()


for _name, _what, _make in (
    ("one_percent", "1 % above", partial(sick, excess=0.01)),
    ("half_percent_f4", "0.5 % above, f4", partial(sick, excess=0.005, store="f4", views=20)),
    ("short_element", "2 % above in one short element", partial(sick, excess=0.02, short=0.5)),
    ("stiffened", "stiffens to 0.5 % above midway", partial(sick, excess=0.005, midway=True)),
):
    FAMILY.sick(_name, _what, _make)
for _name, _what, _make in (
    (
        "near_limit",
        "0.99 of the limit",
        partial(healthy, share=(0.99, 0.9901), how="swinging", store="f8", stride=(2, 20)),
    ),
    (
        "creaking",
        "0.99 of the limit, hardly moving",
        partial(healthy, share=(0.99, 0.9901), how="creaking", store="f8", stride=(1, 5)),
    ),
    (
        "hit_f4",
        "a front through a bar at rest, f4",
        partial(healthy, share=(0.7, 0.95), how="hit", store="f4", stride=(2, 6)),
    ),
    (
        "driven",
        "driven at one end from rest",
        partial(healthy, share=(0.7, 0.95), how="driven", store="f8", stride=(3, 12)),
    ),
    (
        "swinging_three_digits",
        "stored in 3 digits",
        partial(healthy, share=(0.7, 0.95), how="swinging", store="3 digits", stride=(5, 20)),
    ),
):
    FAMILY.healthy(_name, _what, _make)
