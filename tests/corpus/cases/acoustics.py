"""Acoustic waves gone wrong: second-order and staggered leapfrog, one to three dimensions."""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Family, Run
from tests.corpus.cases.diffusion import block, bump, dome, faces, spread
from tests.corpus.cases.sounding import flat_top, second_order, staggered
from tests.corpus.growing import Subspace, Swings, WaveNumbers
from tests.corpus.marching import cadence, even, frozen, march, pick, uneven, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("acoustics")
SIZES = {1: (60, 110), 2: (24, 36), 3: (11, 15)}


def grid(rng: np.random.Generator, dims: int) -> tuple[int, ...]:
    """An even number of cells along every axis."""
    return tuple(2 * pick(rng, *SIZES[dims]) for _ in range(dims))


def everywhere(
    rng: np.random.Generator,
    dims: int,
    excess: float,
    store: str = "f8",
    views: int = 40,
    stagger: bool = False,
    unequal: bool = False,
) -> Run:
    """Above the limit everywhere, on a periodic grid."""
    shape = grid(rng, dims)
    courant = (1.0 + excess) / np.sqrt(dims)
    k = faces(np.ones(shape), True)
    start, offset = bump(shape, rng), uniform(rng, -1.0, 1.0)
    if stagger:

        def step(s: State) -> State:
            return staggered(s, courant)

        state = [offset + start, *(np.zeros(shape) for _ in range(dims))]
        names = ["p", *("u", "v", "w")[:dims]]
    else:

        def step(s: State) -> State:
            return second_order(s, k, courant**2, True)

        state, names = [offset + start, offset + start], [None, "p"]
    modes = WaveNumbers(step, [shape] * len(state))
    stride = cadence(rng, modes.factor, store, views)
    steps = uneven(rng, stride, 400, 0.6) if unequal else even(stride, 400)
    recorder = Recorder(store)
    march(recorder, state, frozen(step), steps, names, courant, modes)
    return recorder.sick(0, modes.factor)


def inclusion(
    rng: np.random.Generator, excess: float, store: str = "f8", parts: int = 0, sharp: bool = True
) -> Run:
    """Sound is faster in a small inclusion, with a sharp edge or a smooth one, and only there too
    fast."""
    shape = grid(rng, 2)
    cut = np.linspace(0, shape[0], max(1, parts) + 1).astype(int)
    stiff = np.full(shape, uniform(rng, 0.6, 0.75))
    where = block(shape, rng, (8, 10))
    if parts:
        rank = pick(rng, 0, parts - 1)
        where = (slice(int(cut[rank]) + 2, int(cut[rank + 1]) - 2), where[1])
    if sharp:
        stiff[where] = 1.0
    else:
        middle = [0.5 * (cut.start + cut.stop) for cut in where]
        stiff += (1.0 - stiff) * flat_top(shape, middle, uniform(rng, 7.0, 8.5))
    k = faces(stiff, False)
    r = (1.0 + excess) ** 2 / 2.0

    def step(s: State) -> State:
        return second_order(s, k, r, False)

    modes = Swings(lambda s: [r * spread(s[0], k, False)], shape)
    stride = cadence(rng, modes.factor, store, 60)
    start = dome(shape, rng)
    recorder = Recorder(store, placed=True)
    march(recorder, [start, start], frozen(step), even(stride, 400), [None, "p"], 1.0, modes)
    files = {str(p): slice(int(cut[p]), int(cut[p + 1])) for p in range(parts)}
    return recorder.sick(0, modes.factor, parts=files)


def stiffened(rng: np.random.Generator, store: str) -> Run:
    """The medium stiffens midway, at once, so that its waves become too fast."""
    shape = grid(rng, 2)
    k = faces(np.ones(shape), True)
    before, after = 0.5 * uniform(rng, 0.8, 0.95) ** 2, 0.5 * 1.01**2
    modes = WaveNumbers(lambda s: second_order(s, k, after, True), [shape, shape])
    stride = cadence(rng, modes.factor, store)
    since = stride * pick(rng, 30, 50)

    def step(s: State, n: int) -> State:
        return second_order(s, k, after if n >= since else before, True)

    start = bump(shape, rng)
    recorder = Recorder(store)
    march(recorder, [start, start], step, even(stride, 400), [None, "p"], 1.0, modes, since)
    return recorder.sick(since, modes.factor)


def echo(rng: np.random.Generator) -> Run:
    """A one-way condition with a wrong coefficient at one end of a tube: it reflects more than
    comes in."""
    n, courant = 2 * pick(rng, 60, 90), uniform(rng, 0.75, 0.9)
    k = faces(np.ones(n), False)
    wrong = uniform(rng, 1.1, 1.2)

    def step(s: State) -> State:
        old, now = s
        new = 2.0 * now - old + courant**2 * spread(now, k, False)
        new[-1] = now[-2] + wrong * (new[-2] - now[-1])
        return [now, new]

    modes = Subspace(step, [(n,), (n,)])
    stride = cadence(rng, modes.factor)
    start = dome((n,), rng) ** 8
    recorder = Recorder(placed=True)
    march(recorder, [start, start], frozen(step), even(stride, 400), [None, "p"], 1.0, modes)
    return recorder.sick(0, modes.factor)


def warmed(rng: np.random.Generator, store: str) -> Run:
    """Sound within its limit, and a temperature beside it whose diffusion is beyond its own."""
    shape = grid(rng, 2)
    courant, r = uniform(rng, 0.5, 0.68), 0.25 * 1.02
    k = faces(np.ones(shape), True)

    def step(s: State) -> State:
        *sound, warmth = s
        return [*staggered(sound, courant), warmth + r * spread(warmth, k, True)]

    modes = WaveNumbers(step, [shape] * 4)
    stride = cadence(rng, modes.factor, store)
    state = [bump(shape, rng), np.zeros(shape), np.zeros(shape), 20.0 + bump(shape, rng)]
    recorder = Recorder(store)
    names = ["p", "u", "v", "T"]
    march(recorder, state, frozen(step), even(stride, 400), names, 1.0, modes, judged=["T"])
    return recorder.sick(0, modes.factor)


def damped(rng: np.random.Generator) -> Run:
    """Damping by the rate of strain, taken from the step before, which lowers the limit."""
    shape, courant = grid(rng, 1), uniform(rng, 0.85, 0.92)
    k = faces(np.ones(shape), True)
    # At the shortest wave z**2 - (2 - 4 c**2 - 4 d) z + 1 - 4 d = 0 has the root -1 where d is
    # (1 - c**2) / 2.
    d = 0.5 * (1.0 - courant**2) * 1.05

    def step(s: State) -> State:
        old, now = s
        new = 2.0 * now - old + courant**2 * spread(now, k, True)
        return [now, new + d * spread(now - old, k, True)]

    modes = WaveNumbers(step, [shape, shape])
    stride = cadence(rng, modes.factor)
    start = bump(shape, rng)
    recorder = Recorder()
    march(recorder, [start, start], frozen(step), even(stride, 400), [None, "p"], 1.0, modes)
    return recorder.sick(0, modes.factor)


for _name, _what, _make in (
    ("1d_half_percent", "0.5 % above", partial(everywhere, dims=1, excess=0.005)),
    ("1d_ten_percent", "10 % above: gone within 40 steps", partial(everywhere, dims=1, excess=0.1)),
    (
        "1d_staggered",
        "staggered, 1 % above",
        partial(everywhere, dims=1, excess=0.01, stagger=True),
    ),
    ("1d_damped", "a damping that lowers the limit", damped),
    ("1d_echo", "only at one boundary", echo),
    (
        "2d_one_percent_f4",
        "1 % above, f4",
        partial(everywhere, dims=2, excess=0.01, store="f4", views=20),
    ),
    (
        "2d_uneven",
        "0.5 % above, by the clock on the wall",
        partial(everywhere, dims=2, excess=0.005, unequal=True, views=30),
    ),
    (
        "2d_staggered",
        "staggered, 2 % above",
        partial(everywhere, dims=2, excess=0.02, stagger=True),
    ),
    (
        "2d_staggered_few",
        "staggered, 0.5 % above, few snapshots",
        partial(everywhere, dims=2, excess=0.005, stagger=True, views=8),
    ),
    ("2d_inclusion", "2.5 % above in a small inclusion", partial(inclusion, excess=0.025)),
    (
        "2d_smooth_inclusion",
        "2 % above in the middle of a smooth inclusion",
        partial(inclusion, excess=0.02, sharp=False),
    ),
    (
        "2d_smooth_inclusion_f4",
        "2 % above in the middle of a smooth inclusion, f4",
        partial(inclusion, excess=0.02, sharp=False, store="f4"),
    ),
    (
        "2d_one_rank",
        "2 % above in one of four files",
        partial(inclusion, excess=0.02, parts=4, sharp=False),
    ),
    ("2d_stiffened", "stiffened to 1 % above midway", partial(stiffened, store="f8")),
    ("2d_warmed_f4", "one field of four, f4", partial(warmed, store="f4")),
    ("3d_two_percent", "2 % above", partial(everywhere, dims=3, excess=0.02, views=60)),
    (
        "3d_staggered_f4",
        "staggered, 0.5 % above, f4",
        partial(everywhere, dims=3, excess=0.005, stagger=True, store="f4", views=16),
    ),
):
    FAMILY.sick(_name, _what, _make)
