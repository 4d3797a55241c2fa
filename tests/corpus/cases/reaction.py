"""Reaction and diffusion: fronts, spots, waking patterns, stiff reactions."""

from __future__ import annotations

from functools import partial

import numpy as np
import scipy.sparse.linalg

from tests.corpus.assembly import State, Step, matrix_of
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases.carrying import bell
from tests.corpus.cases.diffusion import dome, faces, spread
from tests.corpus.cases.smooth import double, hump, waves
from tests.corpus.growing import Subspace, Twin, WaveNumbers
from tests.corpus.marching import Splits, cadence, even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("reaction")


def laplacian(u: Array) -> Array:
    """Second differences over all axes, periodic, in the precision of u."""
    return sum(np.roll(u, 1, a) + np.roll(u, -1, a) - 2 * u for a in range(u.ndim))


def gray_scott(s: State, dt: float, d: tuple[float, float], feed: float, kill: float) -> State:
    """Forward Euler (Pearson 1993), cell size one."""
    u, v = s
    eaten = u * v * v
    return [
        u + dt * (d[0] * laplacian(u) - eaten + feed * (1.0 - u)),
        v + dt * (d[1] * laplacian(v) + eaten - (feed + kill) * v),
    ]


def spots_start(shape: tuple[int, ...], rng: np.random.Generator, count: int) -> State:
    """Humps of v in a sea of u."""
    sea = np.ones(shape)
    for _ in range(count):
        sea *= 1.0 - bell(shape, [uniform(rng, 0.0, n) for n in shape], 4.0)
    return [0.5 + 0.5 * sea, 0.25 * (1.0 - sea)]


def spots(
    rng: np.random.Generator,
    excess: float,
    store: str,
    every: tuple[int, int],
    midway: bool = False,
) -> Run:
    """Spots that divide; the diffusion of u alone is beyond the limit of the step. The growing part
    is that of the linear terms' waves shorter than four cells; its floor is what spots have
    there."""
    shape = (2 * pick(rng, 22, 28), 2 * pick(rng, 22, 28))
    feed, kill = uniform(rng, 0.03, 0.04), uniform(rng, 0.06, 0.063)
    dt = uniform(rng, 0.15, 0.2)
    fast, slow = 0.25 * (1.0 + excess) / dt, uniform(rng, 0.2, 0.235) / dt
    stride = pick(rng, *every)
    since = stride * pick(rng, 25, 40) if midway else 0

    def bare(s: State) -> State:
        return [s[0] + dt * (fast * laplacian(s[0]) - feed * s[0]), s[1]]

    modes = WaveNumbers(bare, [shape] * 2, longest=4.0)

    def step(s: State, n: int) -> State:
        return gray_scott(s, dt, (fast if n >= since else slow, 0.4 * slow), feed, kill)

    recorder = Recorder(store)
    state = spots_start(shape, rng, 4)
    march(recorder, state, step, even(stride, 300), ["u", "v"], dt, modes, since, judged=["u"])
    first = since // stride
    recorder.floor = max(recorder.contamination[first : first + 3])
    return recorder.sick(since, None, "the reaction moves the factor", linear=False)


def overcooked(rng: np.random.Generator, store: str) -> Run:
    """Logistic growth u (1 - u / k) that has reached k but is too stiff for the step: the values
    swing about k, smooth in space, until they jump between two states."""
    n = 2 * pick(rng, 70, 110)
    rate = 2.0 + uniform(rng, 0.04, 0.08)
    k = 1.0 + 0.05 * waves((n,), rng, 2)
    seed = (1e-11 if store == "f8" else 1e-9) * waves((n,), rng, 1)

    def step(s: State) -> State:
        return [s[0] + rate * s[0] * (1.0 - s[0] / k.astype(s[0].dtype))]

    recorder = Recorder(store, floor=1e-13)
    stride = 2 * pick(rng, 2, 4) + 1
    march(recorder, double([k + seed]), frozen(step), even(stride, 200), ["u"], 1.0, Twin([k]))
    return recorder.sick(0, rate - 1.0, linear=False)


def relaxing(rng: np.random.Generator, place: bool, store: str, even_stride: bool = False) -> Run:
    """A value that relaxes to a smooth target faster than the step allows, everywhere alike or in a
    small part of a plate (there with a little diffusion). Smooth in space, its sign alternates from
    step to step, which even strides do not show."""
    shape = (2 * pick(rng, 24, 34), 2 * pick(rng, 24, 34))
    target = 3.0 * dome(shape, rng)
    k = faces(np.ones(shape), False)
    if place:
        middle = [uniform(rng, 0.3, 0.7) * n for n in shape]
        stiff = 0.4 + (uniform(rng, 2.06, 2.1) - 0.4) * hump(shape, middle, 6.0).astype(float)
        r = uniform(rng, 0.001, 0.003)
    else:
        stiff, r = np.full(shape, 2.0 + uniform(rng, 0.02, 0.04)), 0.0
    # Without its source the step is linear and symmetric.

    def bare(s: State) -> State:
        return [(1.0 - stiff) * s[0] + r * spread(s[0], k, False)]

    rest = resting(bare, stiff * target)
    modes = Subspace(bare, [shape], symmetric=True) if place else Everything(stiff.max() - 1.0)
    stride = cadence(rng, modes.factor, store)
    stride += (stride + even_stride + 1) % 2
    seed = (1e-11 if store == "f8" else 1e-9) * dome(shape, rng)
    recorder = Recorder(store, placed=place)
    step = frozen(lambda s: [bare(s)[0] + stiff * target])
    march(recorder, [rest + seed], step, even(stride, 400), ["c"], 1.0, About(modes, rest))
    return recorder.sick(0, modes.factor)


class Everything:
    """Growing part where everything grows alike."""

    def __init__(self, factor: float) -> None:
        self.factor = float(factor)

    def part(self, state: State) -> State:
        return state


class About:
    """Growing part of the deviation from a state of rest."""

    def __init__(self, modes: Splits, rest: Array) -> None:
        self._modes, self._rest = modes, rest

    def part(self, state: State) -> State:
        return self._modes.part([state[0] - self._rest])


def resting(bare: Step, source: Array) -> Array:
    """The state x = A x + source that a step with a source keeps."""
    a = matrix_of(bare, [source.shape], 1, False)
    eye = scipy.sparse.identity(a.shape[0], format="csc")
    return scipy.sparse.linalg.spsolve((eye - a).tocsc(), source.ravel()).reshape(source.shape)


for _name, _what, _make, *_apart in (
    (
        "2d_spots_one_field",
        "spots; one field of two beyond its limit",
        partial(spots, excess=0.02, store="f8", every=(8, 12)),
    ),
    (
        "2d_spots_one_field_f4",
        "spots; one field of two beyond its limit, f4",
        partial(spots, excess=0.03, store="f4", every=(3, 6)),
    ),
    (
        "2d_spots_midway",
        "spots; diffusion raised to 4 % above midway",
        partial(spots, excess=0.04, store="f8", every=(7, 11), midway=True),
    ),
    (
        "1d_overcooked",
        "a stiff non-linear reaction, smooth in space",
        partial(overcooked, store="f8"),
    ),
    (
        "2d_relaxing",
        "a stiff reaction everywhere, smooth in space",
        partial(relaxing, place=False, store="f8"),
    ),
    (
        "2d_relaxing_f4",
        "a stiff reaction everywhere, smooth in space, f4",
        partial(relaxing, place=False, store="f4"),
    ),
    (
        "2d_relaxing_place",
        "a stiff reaction in a small place",
        partial(relaxing, place=True, store="f8"),
    ),
    (
        "2d_relaxing_even",
        "a stiff reaction, looked at in even strides",
        partial(relaxing, place=False, store="f8", even_stride=True),
        "smooth in space, and an even stride hides the sign: looks like resolved growth",
    ),
):
    FAMILY.sick(_name, _what, _make, **({"apart": _apart[0]} if _apart else {}))
