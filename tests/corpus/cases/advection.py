"""Advection gone wrong: central, upwind, Lax-Wendroff, third order, leapfrog."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np

from tests.corpus.assembly import State, Step
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases import carrying
from tests.corpus.cases.carrying import bell, packet
from tests.corpus.cases.diffusion import bump
from tests.corpus.growing import Subspace, WaveNumbers
from tests.corpus.marching import cadence, even, frozen, march, pick, uneven, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("advection")
SIZES = {1: (60, 110), 2: (28, 44), 3: (12, 16)}


def grid(rng: np.random.Generator, dims: int) -> tuple[int, ...]:
    """An even number of cells along every axis."""
    return tuple(2 * pick(rng, *SIZES[dims]) for _ in range(dims))


def split(rng: np.random.Generator, dims: int, total: float) -> list[float]:
    """Velocities along the axes whose nu add up to `total`."""
    shares = rng.uniform(0.5, 1.5, size=dims)
    return [float(s) for s in total * shares / shares.sum()]


def steady(
    rng: np.random.Generator,
    scheme: Callable[[np.random.Generator], tuple[tuple[int, ...], Step, int]],
    store: str = "f8",
    views: int = 40,
    unequal: bool = False,
    smooth: int = 3,
) -> Run:
    """A scheme with constant coefficients that amplifies some waves. scheme: draws the grid, the
    step and the number of time levels, the last of which is stored."""
    shape, step, levels = scheme(rng)
    modes = WaveNumbers(step, [shape] * levels)
    stride = cadence(rng, modes.factor, store, views)
    steps = uneven(rng, stride, 400) if unequal else even(stride, 400)
    recorder = Recorder(store)
    start = uniform(rng, -2.0, 2.0) + bump(shape, rng, smooth)
    names = [None] * (levels - 1) + ["c"]
    march(recorder, [start.copy() for _ in range(levels)], frozen(step), steps, names, 1.0, modes)
    return recorder.sick(0, modes.factor)


def one_axis(step: Callable[[np.random.Generator], Callable[[Array], Array]]) -> Callable:
    """A scheme in one dimension and one time level."""

    def scheme(rng: np.random.Generator) -> tuple[tuple[int, ...], Step, int]:
        shape, advance = grid(rng, 1), step(rng)
        return shape, lambda s: [advance(s[0])], 1

    return scheme


def upwind(dims: int, total: float) -> Callable:
    def scheme(rng: np.random.Generator) -> tuple[tuple[int, ...], Step, int]:
        shape, nus = grid(rng, dims), split(rng, dims, total)
        return shape, lambda s: [carrying.upwind(s[0], nus)], 1

    return scheme


def third_order(rng: np.random.Generator) -> Callable[[Array], Array]:
    limit = carrying.limit_of(lambda nu: lambda s: [carrying.third_order(s[0], nu)], 1.0, 2.5)
    return lambda u: carrying.third_order(u, 1.02 * limit)


def lagging(rng: np.random.Generator) -> tuple[tuple[int, ...], Step, int]:
    nu, r = uniform(rng, 0.2, 0.5), uniform(rng, 0.003, 0.006)
    return grid(rng, 1), lambda s: carrying.leapfrog(s, nu, r), 2


def turning(rng: np.random.Generator) -> Run:
    """The flow turns and the scheme goes on looking to the side it came from."""
    shape = grid(rng, 1)
    first, last = uniform(rng, 0.3, 0.6), -uniform(rng, 0.015, 0.025)
    turn, over = pick(rng, 300, 500), pick(rng, 60, 100)

    def nu(n: int) -> float:
        return max(last, first * (1.0 - n / turn)) if n < turn + over else last

    cause = next(n for n in range(2 * turn) if nu(n) < 0.0)
    modes = WaveNumbers(lambda s: [carrying.upwind(s[0], [last])], [shape])
    recorder = Recorder()
    stride = cadence(rng, modes.factor)

    def step(s: State, n: int) -> State:
        return [carrying.upwind(s[0], [nu(n)])]

    start = [uniform(rng, 1.0, 3.0) + bump(shape, rng)]
    march(recorder, start, step, even(stride, 400), ["c"], 1.0, modes, cause)
    return recorder.sick(cause, modes.factor)


def hastening(rng: np.random.Generator, store: str) -> Run:
    """The velocity grows until upwind differences pass their limit."""
    shape = grid(rng, 1)
    first, last, rise = uniform(rng, 0.85, 0.95), uniform(rng, 1.03, 1.06), pick(rng, 1200, 2000)

    def nu(n: int) -> float:
        return first + (last - first) * min(1.0, n / rise)

    cause = next(n for n in range(rise) if nu(n) > 1.0)
    modes = WaveNumbers(lambda s: [carrying.upwind(s[0], [last])], [shape])
    recorder = Recorder(store)

    def step(s: State, n: int) -> State:
        return [carrying.upwind(s[0], [nu(n)])]

    start = [2.0 + bump(shape, rng)]
    march(recorder, start, step, even(pick(rng, 10, 16), 400), ["c"], 1.0, modes, cause)
    return recorder.sick(cause, None, "the factor grows with the velocity")


def travelling(rng: np.random.Generator, store: str) -> Run:
    """A packet of zigzags grows while it travels, about a cell a step, through a long channel."""
    n, nu = 2 * pick(rng, 180, 220), 1.0 + uniform(rng, 0.012, 0.02)
    modes = WaveNumbers(lambda s: [carrying.upwind(s[0], [nu])], [(n,)])
    stride = cadence(rng, modes.factor, store, 50)
    seed = 1e-12 if store == "f8" else 1e-8
    start = 1.5 + bump((n,), rng, 2) + seed * packet(n, n / 2, uniform(rng, 5.0, 8.0), np.pi)
    recorder = Recorder(store, placed=True)
    step = frozen(lambda s: [carrying.upwind(s[0], [nu])])
    march(recorder, [start], step, even(stride, 400), ["c"], 1.0, modes)
    return recorder.sick(0, modes.factor)


def outflow(rng: np.random.Generator) -> Run:
    """A wrong sign in the condition at the outflow, felt only there."""
    n, nu, wrong = 2 * pick(rng, 140, 170), uniform(rng, 0.6, 0.8), uniform(rng, 0.3, 0.5)

    def step(s: State) -> State:
        new = carrying.lax_wendroff(s[0], nu)
        new[0] = 1.0
        new[-1] = s[0][-1] + wrong * (s[0][-1] - s[0][-2])
        return [new]

    modes = Subspace(step, [(n,)])
    stride = cadence(rng, modes.factor)
    recorder = Recorder(placed=True)
    start = [1.0 + bell((n,), [n / 3], n / 30) + 1e-13 * rng.standard_normal(n)]
    march(recorder, start, frozen(step), even(stride, 400), ["c"], 1.0, modes)
    return recorder.sick(0, modes.factor)


def two_tracers(rng: np.random.Generator) -> Run:
    """Of two tracers the one that also sinks is too fast for the step."""
    shape = grid(rng, 2)
    slow, fast = split(rng, 2, uniform(rng, 0.5, 0.9)), split(rng, 2, 1.02)

    def step(s: State) -> State:
        return [carrying.upwind(s[0], slow), carrying.upwind(s[1], fast)]

    modes = WaveNumbers(step, [shape, shape])
    stride = cadence(rng, modes.factor, "f4", 60)
    recorder = Recorder("f4")
    start = [3.0 + bump(shape, rng), 1.0 + bump(shape, rng)]
    march(
        recorder,
        start,
        frozen(step),
        even(stride, 400),
        ["dust", "rain"],
        1.0,
        modes,
        judged=["rain"],
    )
    return recorder.sick(0, modes.factor)


def _central(rng: np.random.Generator) -> Callable[[Array], Array]:
    nu = uniform(rng, 0.18, 0.28)
    return lambda u: carrying.central(u, nu)


def _central_damped(rng: np.random.Generator) -> Callable[[Array], Array]:
    nu, r = uniform(rng, 0.38, 0.42), uniform(rng, 0.03, 0.04)
    return lambda u: carrying.central(u, nu, r)


def _lax_wendroff(nu: float) -> Callable:
    return one_axis(lambda rng: lambda u: carrying.lax_wendroff(u, nu))


for _name, _what, _make in (
    (
        "1d_central",
        "central differences with forward Euler",
        partial(steady, scheme=one_axis(_central)),
    ),
    (
        "1d_central_damped",
        "the same with too little diffusion, 6 to 10 cells long",
        partial(steady, scheme=one_axis(_central_damped)),
    ),
    ("1d_upwind_half", "upwind, 0.5 % above", partial(steady, scheme=upwind(1, 1.005))),
    (
        "1d_upwind_ten",
        "upwind, 10 % above, few snapshots",
        partial(steady, scheme=upwind(1, 1.1), views=9),
    ),
    (
        "1d_lax_wendroff_f4",
        "Lax-Wendroff, 1 % above, f4",
        partial(steady, scheme=_lax_wendroff(1.01), store="f4"),
    ),
    (
        "1d_lax_wendroff_uneven",
        "Lax-Wendroff, 2 % above, by the clock on the wall",
        partial(steady, scheme=_lax_wendroff(1.02), unequal=True),
    ),
    ("1d_third_order", "third order, 2 % above", partial(steady, scheme=one_axis(third_order))),
    (
        "1d_leapfrog_lagging",
        "diffusion at the middle level of leapfrog: odd and even steps part",
        partial(steady, scheme=lagging),
    ),
    ("1d_wrong_side", "upwind on the wrong side after the flow turns", turning),
    ("1d_hastening", "the velocity grows across the limit", partial(hastening, store="f8")),
    ("1d_hastening_f4", "the velocity grows across the limit, f4", partial(hastening, store="f4")),
    ("1d_packet", "a travelling packet", partial(travelling, store="f8")),
    ("1d_packet_f4", "a travelling packet, f4", partial(travelling, store="f4")),
    ("1d_outflow", "only at one boundary", outflow),
    ("2d_upwind", "upwind, 2 % above", partial(steady, scheme=upwind(2, 1.02))),
    ("2d_two_tracers", "one field of two, f4", two_tracers),
    (
        "3d_upwind_f4",
        "upwind, 5 % above, f4",
        partial(steady, scheme=upwind(3, 1.05), store="f4", views=18),
    ),
):
    FAMILY.sick(_name, _what, _make)
