"""Heat gone wrong: forward Euler, central differences, one to three dimensions.

With r = dt conductivity / dx**2 and d axes the symbol is 1 - 4 r sum sin(theta_a / 2)**2, so the
limit is r = 1 / (2 d) and the factor at a share x of it 2 x - 1 (LeVeque 2007, section 9.3).
"""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Family, Run
from tests.corpus.cases.diffusion import block, bump, dome, faces, spread
from tests.corpus.growing import Subspace, WaveNumbers
from tests.corpus.marching import cadence, even, frozen, march, pick, uneven, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("heat")
SIZES = {1: (48, 96), 2: (28, 40), 3: (12, 16)}


def grid(rng: np.random.Generator, dims: int) -> tuple[int, ...]:
    """An even number of cells along every axis."""
    return tuple(2 * pick(rng, *SIZES[dims]) for _ in range(dims))


def everywhere(
    rng: np.random.Generator,
    dims: int,
    excess: float,
    store: str = "f8",
    views: int = 40,
    unequal: bool = False,
    end: float = 30.0,
) -> Run:
    """Above the limit everywhere, on a periodic grid."""
    shape = grid(rng, dims)
    r = (1.0 + excess) / (2 * dims)
    k = faces(np.ones(shape), True)

    def step(s: State) -> State:
        return [s[0] + r * spread(s[0], k, True)]

    modes = WaveNumbers(step, [shape])
    stride = cadence(rng, modes.factor, store, views)
    steps = uneven(rng, stride, 400) if unequal else even(stride, 400)
    recorder = Recorder(store, end=end)
    start = uniform(rng, -3.0, 3.0) + bump(shape, rng)
    march(recorder, [start], frozen(step), steps, ["T"], r, modes)
    return recorder.sick(0, modes.factor)


def somewhere(
    rng: np.random.Generator,
    dims: int,
    excess: float,
    store: str = "f8",
    base: float = 0.0,
    width: tuple[int, int] = (10, 14),
    since: int = 0,
    parts: int = 0,
    hole: bool = False,
) -> Run:
    """Only an insert, which conducts better, exceeds the limit; from step `since` on where its
    conductivity is raised midway. base: added to what is stored. parts: files per snapshot, one of
    which holds the insert. hole: a corner is masked."""
    shape = grid(rng, dims)
    k = np.full(shape, uniform(rng, 0.7, 0.8))
    before = faces(k, False)
    cut = np.linspace(0, shape[0], max(1, parts) + 1).astype(int)
    if parts:
        rank = pick(rng, 0, parts - 1)
        k[cut[rank] + 2 : cut[rank + 1] - 2, block(shape, rng, width)[1]] = 1.0
    else:
        k[block(shape, rng, width, 0.4 if hole else 0.0)] = 1.0
    across = faces(k, False)
    r = (1.0 + excess) / (2 * dims)
    cover = np.zeros(shape, dtype=bool)
    if hole:
        cover[: shape[0] // 5, : shape[1] // 4] = True

    def step(s: State, n: int = since) -> State:
        inside = np.where(cover, 0.0, s[0])
        new = inside + r * spread(inside, across if n >= since else before, False)
        return [np.where(cover, 0.0, new)]

    def view(s: State) -> dict[str, np.ndarray]:
        return {"T": np.where(cover, np.nan, base + s[0])}

    modes = Subspace(step, [shape], symmetric=True)
    stride = cadence(rng, modes.factor, store, 60)
    recorder = Recorder(store, placed=True)
    start = [np.where(cover, 0.0, dome(shape, rng) * uniform(rng, 0.5, 20.0))]
    march(recorder, start, step, even(stride, 400), ["T"], r, modes, since, view=view)
    files = {str(p): slice(int(cut[p]), int(cut[p + 1])) for p in range(parts)}
    return recorder.sick(since, modes.factor, parts=files)


def boundary(rng: np.random.Generator, excess: float) -> Run:
    """Heat transfer at one end of a bar that is too strong for the step, which the inside allows.

    In the end cell 1 - r - t stands for 1 - 2 r. A wave k**j that decays inward then has
    k = -r / s and the value 1 - 2 r - s - r**2 / s with s = t - r, which is set to -1 - excess.
    """
    n, r = 2 * pick(rng, 60, 90), uniform(rng, 0.3, 0.42)
    c = 2.0 - 2.0 * r + excess
    s = 0.5 * (c + np.sqrt(c * c - 4.0 * r * r))
    k = faces(np.ones(n), False)

    def step(state: State) -> State:
        u = state[0]
        new = u + r * spread(u, k, False)
        new[-1] -= s * u[-1]
        return [new]

    modes = Subspace(step, [(n,)])
    stride = cadence(rng, modes.factor)
    recorder = Recorder(placed=True)
    march(recorder, [dome((n,), rng) ** 6], frozen(step), even(stride, 400), ["T"], r, modes)
    return recorder.sick(0, modes.factor)


def longer_step(rng: np.random.Generator, dims: int, excess: float, store: str = "f8") -> Run:
    """The step is lengthened midway."""
    shape = grid(rng, dims)
    limit = 1.0 / (2 * dims)
    short, long = uniform(rng, 0.8, 0.95) * limit, (1.0 + excess) * limit
    k = faces(np.ones(shape), True)
    modes = WaveNumbers(lambda s: [s[0] + long * spread(s[0], k, True)], [shape])
    stride = cadence(rng, modes.factor, store)
    since = stride * pick(rng, 20, 40)

    def step(s: State, n: int) -> State:
        return [s[0] + (long if n >= since else short) * spread(s[0], k, True)]

    recorder = Recorder(store)

    def dt(n: int) -> float:
        return long if n >= since else short

    march(recorder, [bump(shape, rng)], step, even(stride, 400), ["T"], dt, modes, since)
    return recorder.sick(since, modes.factor)


def creeping_step(rng: np.random.Generator, store: str = "f8") -> Run:
    """An adaptive step that grows a little every step and crosses the limit."""
    shape = grid(rng, 2)
    k = faces(np.ones(shape), True)
    first, last, rise = uniform(rng, 0.9, 0.94), uniform(rng, 1.03, 1.05), pick(rng, 2000, 3000)

    def dt(n: int) -> float:
        return (first + (last - first) * min(1.0, n / rise)) / 4.0

    modes = WaveNumbers(lambda s: [s[0] + last / 4.0 * spread(s[0], k, True)], [shape])
    cause = next(n for n in range(rise) if dt(n) * 8.0 - 1.0 > 1.0)
    recorder = Recorder(store)
    stride = pick(rng, 20, 30)
    march(
        recorder,
        [bump(shape, rng)],
        lambda s, n: [s[0] + dt(n) * spread(s[0], k, True)],
        even(stride, 400),
        ["T"],
        dt,
        modes,
        cause,
    )
    return recorder.sick(cause, None, "the factor grows with the step")


def noisy(rng: np.random.Generator) -> Run:
    """Noise to start from, whose grid-scale part decays where it may and grows where it may not."""
    shape = grid(rng, 1)
    r = 0.5 * 1.01
    k = faces(np.ones(shape), True)
    modes = WaveNumbers(lambda s: [s[0] + r * spread(s[0], k, True)], [shape])
    recorder = Recorder("f4")
    start = bump(shape, rng) + 1e-6 * rng.standard_normal(shape)
    stride = pick(rng, 5, 9)
    step = frozen(lambda s: [s[0] + r * spread(s[0], k, True)])
    march(recorder, [start], step, even(stride, 400), ["T"], r, modes)
    return recorder.sick(0, modes.factor)


FAMILY.sick("1d_half_percent", "0.5 % above the limit", partial(everywhere, dims=1, excess=0.005))
FAMILY.sick(
    "1d_one_percent_f4",
    "1 % above, stored in single precision",
    partial(everywhere, dims=1, excess=0.01, store="f4"),
)
FAMILY.sick("1d_double", "100 % above", partial(everywhere, dims=1, excess=1.0))
FAMILY.sick(
    "1d_uneven",
    "1 % above, stored by the clock on the wall",
    partial(everywhere, dims=1, excess=0.01, unequal=True),
)
FAMILY.sick(
    "1d_to_overflow",
    "10 % above, followed until the numbers overflow",
    partial(everywhere, dims=1, excess=0.1, views=14, end=np.inf),
)
FAMILY.sick("1d_noise_f4", "1 % above, from noise of 1e-6", noisy)
FAMILY.sick("1d_boundary", "only at one boundary", partial(boundary, excess=0.05))
FAMILY.sick(
    "2d_ten_percent_f4",
    "10 % above, few snapshots",
    partial(everywhere, dims=2, excess=0.1, store="f4", views=9),
)
FAMILY.sick("2d_two_percent", "2 % above", partial(everywhere, dims=2, excess=0.02))
FAMILY.sick(
    "2d_half_precision",
    "2 % above, float16",
    partial(everywhere, dims=2, excess=0.02, store="f2", views=12),
)
FAMILY.sick("2d_insert", "10 % above in a small insert", partial(somewhere, dims=2, excess=0.1))
FAMILY.sick(
    "2d_insert_300",
    "6 % above in a small insert, around 300 K",
    partial(somewhere, dims=2, excess=0.06, base=300.0),
)
FAMILY.sick(
    "2d_insert_midway",
    "an insert's conductivity is raised midway",
    partial(somewhere, dims=2, excess=0.08, since=600),
)
FAMILY.sick(
    "2d_one_rank",
    "10 % above in one of four files",
    partial(somewhere, dims=2, excess=0.1, parts=4),
)
FAMILY.sick(
    "2d_masked",
    "10 % above in an insert, a corner masked",
    partial(somewhere, dims=2, excess=0.1, hole=True),
)
FAMILY.sick(
    "2d_longer_step",
    "step lengthened to 2 % above midway",
    partial(longer_step, dims=2, excess=0.02),
)
FAMILY.sick("2d_creeping_step", "an adaptive step crosses the limit", creeping_step)
FAMILY.sick("3d_ten_percent", "10 % above", partial(everywhere, dims=3, excess=0.1))
FAMILY.sick(
    "3d_insert",
    "20 % above in a small insert",
    partial(somewhere, dims=3, excess=0.2, width=(8, 9)),
)
