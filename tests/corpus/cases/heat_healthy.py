"""Heat that is well: forward Euler within its limit, alarming as its snapshots may look."""

from __future__ import annotations

from functools import partial

import numpy as np
import scipy.sparse.linalg

from tests.corpus.assembly import State, matrix_of
from tests.corpus.case import Fields, Run
from tests.corpus.cases.diffusion import bump, dome, faces, spread
from tests.corpus.cases.heat import FAMILY, grid
from tests.corpus.marching import even, frozen, march, pick, uneven, uniform
from tests.corpus.recording import Recorder


def plain(
    rng: np.random.Generator,
    dims: int,
    share: float,
    stride: tuple[int, int],
    store: str = "f8",
    start: str = "smooth",
    unequal: bool = False,
    count: int = 120,
) -> Run:
    """At a share of the limit, from a smooth field, noise, a step or nothing but round-off."""
    shape = grid(rng, dims)
    r = share / (2 * dims)
    k = faces(np.ones(shape), True)
    u = {
        "smooth": lambda: uniform(rng, -3.0, 3.0) + bump(shape, rng),
        "noise": lambda: rng.standard_normal(shape),
        "step": lambda: (bump(shape, rng) > 0.3).astype(float),
    }[start]()
    every = pick(rng, *stride)
    steps = uneven(rng, every, count) if unequal else even(every, count)
    recorder = Recorder(store)
    march(recorder, [u], frozen(lambda s: [s[0] + r * spread(s[0], k, True)]), steps, ["T"], r)
    return recorder.healthy()


def driven(rng: np.random.Generator, how: str, store: str = "f8") -> Run:
    """A plate held at zero that is heated: a source that is switched on midway, one that comes and
    goes, or an edge whose temperature ramps up; or a steady state, held for long at round-off."""
    shape = grid(rng, 2)
    r = uniform(rng, 0.2, 0.245)
    k = faces(uniform(rng, 0.8, 1.0) * np.ones(shape), False)
    place = dome(shape, rng) ** pick(rng, 4, 20)
    stride, count = pick(rng, 5, 15), 150
    on = stride * pick(rng, 50, 70)
    period = stride * uniform(rng, 15.0, 40.0)

    def source(n: int) -> float:
        if how == "switched":
            return 1e-2 if n >= on else 0.0
        return 1e-2 * np.sin(2.0 * np.pi * n / period) if how == "periodic" else 1e-3

    def step(s: State, n: int) -> State:
        edge = 1e-3 * n if how == "ramp" else 0.0
        return [s[0] + r * spread(s[0], k, False, edge) + source(n) * place]

    u = [uniform(rng, 0.1, 3.0) * dome(shape, rng)]
    if how == "steady":
        whole = matrix_of(lambda v: step(v, 0), [shape], 1, False)
        rest = scipy.sparse.identity(whole.shape[0], format="csc") - whole.tocsc()
        u = [scipy.sparse.linalg.spsolve(rest, source(0) * place.ravel()).reshape(shape)]
    recorder = Recorder(store)
    march(recorder, u, step, even(stride, count), ["T"], r)
    return recorder.healthy()


def masked(rng: np.random.Generator) -> Run:
    """A region that is not computed and holds NaN, with steep fields beside it."""
    shape = grid(rng, 2)
    r = 0.24
    k = faces(np.ones(shape), True)
    hole = bump(shape, rng, 2) > 0.9

    def step(s: State) -> State:
        inside = np.where(hole, 1.0, s[0])
        return [np.where(hole, 1.0, inside + r * spread(inside, k, True))]

    recorder = Recorder("f4")

    def view(s: State) -> Fields:
        return {"T": np.where(hole, np.nan, s[0])}

    start = np.where(hole, 1.0, bump(shape, rng))
    march(recorder, [start], frozen(step), even(pick(rng, 10, 30), 120), ["T"], r, view=view)
    return recorder.healthy()


def restarted(rng: np.random.Generator, told: bool) -> Run:
    """Restarted midway from a checkpoint in single precision: from an older step (told by the
    steps, which go back) or without a sign of it."""
    shape = grid(rng, 2)
    r = uniform(rng, 0.2, 0.249)
    k = faces(np.ones(shape), True)
    stride = pick(rng, 8, 20)

    def step(s: State) -> State:
        return [s[0] + r * spread(s[0], k, True)]

    first, second = Recorder(), Recorder()
    steps = even(stride, 70)
    u = march(first, [bump(shape, rng)], frozen(step), steps, ["T"], r)
    u = [u[0].astype(np.float32).astype(np.float64)]
    march(second, u, frozen(step), steps, ["T"], r)
    back = pick(rng, 8, 20) * stride if told else 0
    for s in second.snapshots[1:]:
        first.take(steps[-1] - back + s.step, r * (steps[-1] - back) + s.time, s.fields)
    return first.healthy()


def adaptive(rng: np.random.Generator) -> Run:
    """An adaptive step that swings between half and nearly all of the limit."""
    shape = grid(rng, 2)
    k = faces(np.ones(shape), True)
    period = uniform(rng, 150.0, 400.0)

    def dt(n: int) -> float:
        return 0.25 * (0.74 + 0.25 * np.sin(2.0 * np.pi * n / period))

    recorder = Recorder()

    def step(s: State, n: int) -> State:
        return [s[0] + dt(n) * spread(s[0], k, True)]

    march(recorder, [bump(shape, rng)], step, even(pick(rng, 5, 15), 150), ["T"], dt)
    return recorder.healthy()


for _name, _what, _make in (
    ("1d_near_limit", "0.99 of the limit", partial(plain, dims=1, share=0.99, stride=(5, 30))),
    (
        "2d_near_limit_f4",
        "0.99 of the limit, f4",
        partial(plain, dims=2, share=0.99, stride=(1, 10), store="f4"),
    ),
    (
        "3d_near_limit",
        "0.99 of the limit",
        partial(plain, dims=3, share=0.99, stride=(1, 4), count=80),
    ),
    (
        "1d_noise",
        "start from noise",
        partial(plain, dims=1, share=0.95, stride=(1, 3), start="noise"),
    ),
    (
        "2d_step_start",
        "start from a discontinuity",
        partial(plain, dims=2, share=0.9, stride=(1, 3), start="step"),
    ),
    (
        "2d_three_digits",
        "stored in 3 digits",
        partial(plain, dims=2, share=0.9, stride=(2, 10), store="3 digits"),
    ),
    (
        "1d_half_precision",
        "stored in float16",
        partial(plain, dims=1, share=0.9, stride=(5, 40), store="f2"),
    ),
    (
        "2d_uneven",
        "stored by the clock on the wall",
        partial(plain, dims=2, share=0.9, stride=(5, 20), unequal=True),
    ),
    ("2d_source", "a source switched on midway", partial(driven, how="switched")),
    ("2d_periodic", "periodic forcing", partial(driven, how="periodic", store="f4")),
    ("2d_ramp", "the edge's temperature ramps up", partial(driven, how="ramp")),
    ("2d_steady", "steady state at round-off", partial(driven, how="steady")),
    ("2d_masked_corner", "a masked region", masked),
    ("2d_restart_back", "restarted from an older step", partial(restarted, told=True)),
    ("2d_restart_hidden", "restarted without a sign of it", partial(restarted, told=False)),
    ("2d_adaptive", "an adaptive step", adaptive),
):
    FAMILY.healthy(_name, _what, _make)
