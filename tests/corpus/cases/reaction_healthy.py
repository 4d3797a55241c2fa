"""Reaction and diffusion that is well: fronts, spots, and patterns that wake over decades."""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Run
from tests.corpus.cases.carrying import bell
from tests.corpus.cases.diffusion import bump, dome
from tests.corpus.cases.reaction import FAMILY, gray_scott, laplacian, spots_start
from tests.corpus.marching import even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder


def front(
    rng: np.random.Generator,
    dims: int,
    stride: tuple[int, int],
    store: str = "f8",
    bistable: bool = False,
) -> Run:
    """A front of u (1 - u) that runs into a field at zero (Fisher 1937), or one between two stable
    states."""
    shape = (
        (2 * pick(rng, 120, 160),) if dims == 1 else (2 * pick(rng, 26, 36), 2 * pick(rng, 26, 36))
    )
    dt, d = uniform(rng, 0.08, 0.15), uniform(rng, 0.8, 1.2)
    start = bell(shape, [uniform(rng, 0.3, 0.7) * n for n in shape], 3.0)
    if bistable:
        start = (
            (start > 0.3).astype(float)
            if dims == 1
            else np.where(bump(shape, rng, 2) > 0.0, 1.0, 0.0)
        )

    def step(s: State) -> State:
        u = s[0]
        grown = u * (1.0 - u) * (u - 0.4) * 4.0 if bistable else u * (1.0 - u)
        return [u + dt * (d * laplacian(u) + grown)]

    recorder = Recorder(store)
    march(recorder, [start], frozen(step), even(pick(rng, *stride), 150), ["u"], dt)
    return recorder.healthy()


def moving_spots(rng: np.random.Generator, store: str, stride: tuple[int, int]) -> Run:
    """Spots that grow and divide."""
    shape = (2 * pick(rng, 26, 36), 2 * pick(rng, 26, 36))
    feed, kill = uniform(rng, 0.03, 0.04), uniform(rng, 0.06, 0.063)
    start = spots_start(shape, rng, 4)
    spreading = (uniform(rng, 0.16, 0.22), 0.08)
    recorder = Recorder(store)
    step = frozen(lambda s: gray_scott(s, 1.0, spreading, feed, kill))
    march(recorder, start, step, even(pick(rng, *stride), 200), ["u", "v"], 1.0)
    return recorder.healthy()


def waking(rng: np.random.Generator, store: str, seed: float, dims: int) -> Run:
    """A pattern that grows from weak noise over decades until it saturates (Swift and Hohenberg
    1977): u_t = e u - (1 + laplacian)**2 u - u**3, its waves about eight cells long."""
    shape = (
        (2 * pick(rng, 60, 100),) if dims == 1 else (2 * pick(rng, 24, 32), 2 * pick(rng, 24, 32))
    )
    h2 = (2.0 * np.pi / uniform(rng, 7.0, 8.5)) ** 2
    growth = uniform(rng, 0.8, 1.0)
    # The largest eigenvalue of the linear part, at the shortest wave.
    dt = 0.8 * 2.0 / ((4.0 * dims / h2 - 1.0) ** 2)

    def shifted(u: np.ndarray) -> np.ndarray:
        return u + laplacian(u) / h2

    def step(s: State) -> State:
        u = s[0]
        return [u + dt * (growth * u - shifted(shifted(u)) - u**3)]

    steps = 1.6 * np.log(1.0 / seed) / (growth * dt)
    stride = max(1, min(100, int(steps / 180)))
    recorder = Recorder(store)
    march(recorder, [seed * rng.standard_normal(shape)], frozen(step), even(stride, 200), ["u"], dt)
    return recorder.healthy()


def pulses(rng: np.random.Generator, store: str) -> Run:
    """Pulses in an excitable medium (FitzHugh and Nagumo) that run into what is at rest."""
    n = 2 * pick(rng, 120, 160)
    dt = uniform(rng, 0.15, 0.2)
    u = bell((n,), [n / 4], 5.0)

    def step(s: State) -> State:
        u, w = s
        return [
            u + dt * (laplacian(u) + u * (1.0 - u) * (u - 0.1) - w),
            w + dt * 0.01 * (0.5 * u - w),
        ]

    recorder = Recorder(store)
    march(recorder, [u, np.zeros(n)], frozen(step), even(pick(rng, 5, 15), 150), ["u", "w"], dt)
    return recorder.healthy()


def nearly_stiff(rng: np.random.Generator) -> Run:
    """A relaxation at 0.99 of its limit that flips its sign from step to step and fades, then is
    pushed again and again."""
    shape = (2 * pick(rng, 24, 34), 2 * pick(rng, 24, 34))
    target, period = 3.0 * dome(shape, rng), pick(rng, 150, 250)

    def step(s: State, n: int) -> State:
        push = 0.1 * target if n % period == period // 2 else 0.0
        return [s[0] - 1.98 * (s[0] - target) + push]

    recorder = Recorder("f4")
    march(recorder, [0.5 * target], step, even(2 * pick(rng, 0, 2) + 1, 150), ["c"])
    return recorder.healthy()


for _name, _what, _make in (
    ("1d_front", "a front runs into quiet tiles", partial(front, dims=1, stride=(4, 12))),
    (
        "1d_front_half_precision",
        "the same, stored in float16",
        partial(front, dims=1, stride=(4, 12), store="f2"),
    ),
    (
        "2d_front_f4",
        "a front runs into quiet tiles, f4",
        partial(front, dims=2, stride=(2, 6), store="f4"),
    ),
    ("2d_bistable", "domains that shrink", partial(front, dims=2, stride=(2, 10), bistable=True)),
    ("2d_moving_spots_f4", "moving spots, f4", partial(moving_spots, store="f4", stride=(5, 20))),
    ("2d_moving_spots", "moving spots", partial(moving_spots, store="f8", stride=(5, 20))),
    (
        "1d_waking",
        "a pattern wakes from noise of 1e-12",
        partial(waking, store="f8", seed=1e-12, dims=1),
    ),
    (
        "2d_waking",
        "a pattern wakes from noise of 1e-10",
        partial(waking, store="f8", seed=1e-10, dims=2),
    ),
    (
        "2d_waking_f4",
        "a pattern wakes from noise of 1e-8, f4",
        partial(waking, store="f4", seed=1e-8, dims=2),
    ),
    ("1d_pulses", "pulses in an excitable medium", partial(pulses, store="f8")),
    (
        "2d_nearly_stiff_f4",
        "0.99 of a stiff reaction's limit, pushed now and then, f4",
        nearly_stiff,
    ),
):
    FAMILY.healthy(_name, _what, _make)
