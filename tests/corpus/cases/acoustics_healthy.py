"""Acoustic waves that are well, alarming as their snapshots may look."""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Run
from tests.corpus.cases.acoustics import FAMILY, grid
from tests.corpus.cases.carrying import bell
from tests.corpus.cases.diffusion import bump, dome, faces
from tests.corpus.cases.sounding import ricker, ring, second_order, staggered
from tests.corpus.marching import even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder


def free(
    rng: np.random.Generator,
    dims: int,
    share: tuple[float, float],
    start: str,
    stride: tuple[int, int],
    store: str = "f8",
    count: int = 150,
) -> Run:
    """Waves on a periodic grid: long ones, a hump that spreads through a quiet field, a ring that
    closes in on its middle, or noise."""
    shape = grid(rng, dims)
    courant = uniform(rng, *share) / np.sqrt(dims)
    k = faces(np.ones(shape), True)
    middle = [uniform(rng, 0.3, 0.7) * n for n in shape]
    now = {
        "waves": lambda: bump(shape, rng),
        "hump": lambda: bell(shape, middle, uniform(rng, 3.0, 5.0)),
        "ring": lambda: ring(shape, middle, 0.4 * min(shape), uniform(rng, 3.0, 4.0)),
        "noise": lambda: bump(shape, rng) + 1e-4 * rng.standard_normal(shape),
    }[start]()
    old = now if start != "ring" else ring(shape, middle, 0.4 * min(shape) + courant, 3.5)
    recorder = Recorder(store)
    step = frozen(lambda s: second_order(s, k, courant**2, True))
    march(recorder, [old, now], step, even(pick(rng, *stride), count), [None, "p"], courant)
    return recorder.healthy()


def sounded(
    rng: np.random.Generator, how: str, store: str = "f8", stride: tuple[int, int] = (2, 6)
) -> Run:
    """At rest until a source begins: a short pulse midway, or a tone that goes on, near which the
    room resounds. With a layer in which sound is faster."""
    shape = grid(rng, 2)
    courant = uniform(rng, 0.55, 0.7)
    stiff = np.ones(shape)
    stiff[: shape[0] // 3] = uniform(rng, 0.3, 0.6)
    place = bell(shape, [uniform(rng, 0.3, 0.7) * n for n in shape], uniform(rng, 2.0, 3.0))
    every, count = pick(rng, *stride), 150
    width = uniform(rng, 8.0, 14.0)
    late = every * pick(rng, 40, 70) + 5.0 * width

    def source(n: int) -> float:
        if how == "pulse":
            return ricker(n, late, width)
        return float(np.sin(2.0 * np.pi * n / (4.0 * width)) * min(1.0, n / 200.0))

    def step(s: State, n: int) -> State:
        p, *moved = staggered(s, courant, stiff)
        return [p + source(n) * place, *moved]

    recorder = Recorder(store)
    state = [np.zeros(shape) for _ in range(3)]
    march(recorder, state, step, even(every, count), ["p", "u", "v"], courant)
    return recorder.healthy()


def swallowed(rng: np.random.Generator) -> Run:
    """A pulse that runs into a layer that swallows it."""
    n = 2 * pick(rng, 90, 120)
    courant = uniform(rng, 0.8, 0.99)
    x = np.arange(n) / n
    damp = np.exp(-0.3 * np.clip((x - 0.75) / 0.25, 0.0, 1.0) ** 2)
    recorder = Recorder("f4")
    step = frozen(lambda s: [damp * a for a in staggered(s, courant)])
    state = [bell((n,), [n / 3], n / 25), np.zeros(n)]
    march(recorder, state, step, even(pick(rng, 2, 5), 150), ["p", "u"], courant)
    return recorder.healthy()


def string(rng: np.random.Generator, stride: tuple[int, int], store: str) -> Run:
    """A string that swings for long, looked at seldom."""
    n, courant = pick(rng, 60, 90), uniform(rng, 0.5, 0.8)
    k = faces(np.ones(n), False)
    start = dome((n,), rng)
    recorder = Recorder(store)
    step = frozen(lambda s: second_order(s, k, courant**2, False))
    march(recorder, [start, start], step, even(pick(rng, *stride), 120), [None, "p"], courant)
    return recorder.healthy()


_WIDE, _NEAR = (0.6, 0.95), (0.99, 0.9901)
for _name, _what, _make in (
    (
        "1d_near_limit",
        "0.99 of the limit",
        partial(free, dims=1, share=_NEAR, start="waves", stride=(2, 9)),
    ),
    (
        "2d_near_limit_f4",
        "0.99 of the limit, f4",
        partial(free, dims=2, share=_NEAR, start="waves", stride=(1, 5), store="f4"),
    ),
    (
        "2d_noise",
        "start with noise that stays",
        partial(free, dims=2, share=_WIDE, start="noise", stride=(1, 5)),
    ),
    (
        "2d_spreading",
        "a wave arrives in quiet tiles",
        partial(free, dims=2, share=_WIDE, start="hump", stride=(1, 2), count=90),
    ),
    (
        "2d_focusing",
        "a ring closes in on its middle",
        partial(free, dims=2, share=_WIDE, start="ring", stride=(1, 2), count=90),
    ),
    (
        "3d_spreading_f4",
        "a wave arrives in quiet tiles, f4",
        partial(free, dims=3, share=_WIDE, start="hump", stride=(1, 1), store="f4", count=60),
    ),
    (
        "3d_focusing",
        "a shell closes in on its middle",
        partial(free, dims=3, share=_WIDE, start="ring", stride=(1, 1), count=60),
    ),
    ("2d_pulse", "a source switched on midway", partial(sounded, how="pulse")),
    ("2d_tone", "a tone fills a layered room from rest", partial(sounded, how="tone")),
    (
        "2d_tone_three_digits",
        "the same, stored in 3 digits",
        partial(sounded, how="tone", store="3 digits"),
    ),
    ("1d_swallowed_f4", "a pulse is swallowed by a layer, f4", swallowed),
    ("1d_string_seldom", "every 50th to 100th step", partial(string, stride=(50, 100), store="f8")),
    ("1d_string_half_precision", "stored in float16", partial(string, stride=(3, 20), store="f2")),
):
    FAMILY.healthy(_name, _what, _make)
