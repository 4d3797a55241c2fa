"""Bending of beams and plates, whose step is limited by the square of the cell size, and a creeping
film, limited by its fourth power.

The fourth difference has the symbol (4 sum sin(theta / 2)**2)**2, (4 d)**2 at the shortest wave.
Leapfrog of a beam is stable up to r = dt / dx**2 = 1 / 2, of a plate up to 1 / 4; forward Euler of
a film up to r = dt / dx**4 = 1 / 8.
"""

from __future__ import annotations

from functools import partial

import numpy as np
import scipy.optimize

from tests.corpus.assembly import State, Step, matrix_of
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases.carrying import bell, packet
from tests.corpus.cases.diffusion import bump, dome, faces, spread
from tests.corpus.cases.sounding import flat_top, ricker
from tests.corpus.growing import Swings, WaveNumbers
from tests.corpus.marching import cadence, even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("bending")


def fourth(w: Array, across: list[Array], periodic: bool, stiff: Array | float = 1.0) -> Array:
    """Minus the Laplacian of stiffness times Laplacian; supported ends where not periodic."""
    return -spread(stiff * spread(w, across, periodic), across, periodic)


def swing(
    s: State, across: list[Array], r: float, periodic: bool, stiff: Array | float = 1.0
) -> State:
    old, now = s
    return [now, 2.0 * now - old + r * r * fourth(now, across, periodic, stiff)]


def grid(rng: np.random.Generator, dims: int) -> tuple[int, ...]:
    low, high = {1: (60, 100), 2: (24, 34)}[dims]
    return tuple(2 * pick(rng, low, high) for _ in range(dims))


def everywhere(
    rng: np.random.Generator,
    dims: int,
    excess: float,
    store: str = "f8",
    views: int = 40,
    midway: bool = False,
) -> Run:
    """Above the limit everywhere; midway: from a longer step on."""
    shape = grid(rng, dims)
    k = faces(np.ones(shape), True)
    long, short = (1.0 + excess) * 0.5 / dims, uniform(rng, 0.8, 0.95) * 0.5 / dims
    modes = WaveNumbers(lambda s: swing(s, k, long, True), [shape] * 2)
    stride = cadence(rng, modes.factor, store, views)
    since = stride * pick(rng, 20, 30) if midway else 0

    def r(n: int) -> float:
        return long if n >= since else short

    recorder = Recorder(store)
    start = bump(shape, rng)

    def step(s: State, n: int) -> State:
        return swing(s, k, r(n), True)

    march(recorder, [start, start], step, even(stride, 400), [None, "w"], r, modes, since)
    return recorder.sick(since, modes.factor)


def film(rng: np.random.Generator, excess: float, store: str = "f8") -> Run:
    """A film that levels out by the fourth derivative, forward Euler."""
    shape = grid(rng, 1)
    k = faces(np.ones(shape), True)
    r = 0.125 * (1.0 + excess)

    def step(s: State) -> State:
        return [s[0] + r * fourth(s[0], k, True)]

    modes = WaveNumbers(step, [shape])
    stride = cadence(rng, modes.factor, store)
    recorder = Recorder(store)
    start = [1.0 + 0.2 * bump(shape, rng, 2)]
    march(recorder, start, frozen(step), even(stride, 400), ["h"], r, modes)
    return recorder.sick(0, modes.factor)


def stiff_piece(rng: np.random.Generator, store: str = "f8") -> Run:
    """A beam that is thicker somewhere, where its waves are too fast for the step."""
    (n,) = grid(rng, 1)
    k = faces(np.ones(n), False)
    low = uniform(rng, 0.5, 0.65)
    stiff = low + (1.0 - low) * flat_top(
        (n,), [uniform(rng, 0.3, 0.7) * n], uniform(rng, 10.0, 13.0)
    )
    r = 0.5 * uniform(rng, 1.03, 1.05)
    modes = Swings(lambda s: [r * r * fourth(s[0], k, False, stiff)], (n,), reach=2)
    stride = cadence(rng, modes.factor, store)
    recorder = Recorder(store, placed=True)
    start = dome((n,), rng)
    step = frozen(lambda s: swing(s, k, r, False, stiff))
    march(recorder, [start, start], step, even(stride, 400), [None, "w"], r, modes)
    return recorder.sick(0, modes.factor)


def spring(rng: np.random.Generator) -> Run:
    """A spring under one end of a beam, too stiff for the step."""
    (n,) = grid(rng, 1)
    k = faces(np.ones(n), False)
    r = 0.5 * uniform(rng, 0.75, 0.9)
    excess, under = uniform(rng, 0.01, 0.03), np.eye(n)[-1]

    def bent(push: float) -> Step:
        return lambda s: [r * r * fourth(s[0], k, False) - push * under * s[0]]

    def lowest(push: float) -> float:
        return float(np.linalg.eigvalsh(matrix_of(bent(push), [(n,)], 2, False).toarray())[0])

    push = scipy.optimize.brentq(lambda p: lowest(p) + 4.0 * (1.0 + excess), 0.0, 8.0, xtol=1e-9)
    modes = Swings(bent(push), (n,), reach=2)
    step = frozen(lambda s: [s[1], 2.0 * s[1] - s[0] + bent(push)([s[1]])[0]])
    stride = cadence(rng, modes.factor)
    recorder = Recorder(placed=True)
    start = bell((n,), [n / 3], n / 30)
    march(recorder, [start, start], step, even(stride, 400), [None, "w"], r, modes)
    return recorder.sick(0, modes.factor)


def free(
    rng: np.random.Generator,
    dims: int,
    share: tuple[float, float],
    start: str,
    stride: tuple[int, int],
    store: str = "f8",
) -> Run:
    """Within the limit: plucked, or a packet whose short waves run ahead of the long ones."""
    shape = grid(rng, dims)
    k = faces(np.ones(shape), False)
    r = uniform(rng, *share) * 0.5 / dims
    x = (np.arange(shape[0]) + 1.0) / (shape[0] + 1.0)
    w = {
        "dome": lambda: dome(shape, rng),
        "plucked": lambda: np.minimum(x / 0.4, (1.0 - x) / 0.6),
        "packet": lambda: packet(
            shape[0], shape[0] / 4, shape[0] / 25, 2 * np.pi / uniform(rng, 10.0, 16.0)
        ),
        "hump": lambda: bell(shape, [n / 2 for n in shape], 3.0),
    }[start]()
    recorder = Recorder(store)
    step = frozen(lambda s: swing(s, k, r, False))
    march(recorder, [w, w], step, even(pick(rng, *stride), 150), [None, "w"], r)
    return recorder.healthy()


def struck(rng: np.random.Generator) -> Run:
    """A plate at rest that is struck midway."""
    shape = grid(rng, 2)
    k = faces(np.ones(shape), False)
    r = uniform(rng, 0.7, 0.95) * 0.25
    every = pick(rng, 2, 8)
    when = every * pick(rng, 40, 60) + 60.0
    place = bell(shape, [n / 3 for n in shape], 3.0)

    def step(s: State, n: int) -> State:
        return [s[1], swing(s, k, r, False)[1] + 1e-2 * ricker(n, when, 12.0) * place]

    recorder = Recorder("f4")
    state = [1e-3 * dome(shape, rng)] * 2
    march(recorder, state, step, even(every, 150), [None, "w"], r)
    return recorder.healthy()


for _name, _what, _make in (
    ("beam_half_percent", "0.5 % above", partial(everywhere, dims=1, excess=0.005)),
    (
        "beam_longer_step",
        "the step is lengthened to 1 % above midway",
        partial(everywhere, dims=1, excess=0.01, midway=True),
    ),
    ("beam_stiff_piece", "only in a thick piece", stiff_piece),
    ("beam_stiff_piece_f4", "only in a thick piece, f4", partial(stiff_piece, store="f4")),
    ("beam_spring", "only at one boundary", spring),
    (
        "plate_f4",
        "0.5 % above, f4",
        partial(everywhere, dims=2, excess=0.005, store="f4", views=20),
    ),
    ("film_one_percent", "1 % above", partial(film, excess=0.01)),
    ("film_two_percent_f4", "2 % above, f4", partial(film, excess=0.02, store="f4")),
):
    FAMILY.sick(_name, _what, _make)
_NEAR, _WIDE = (0.99, 0.9901), (0.6, 0.95)
for _name, _what, _make in (
    (
        "beam_near_limit",
        "0.99 of the limit",
        partial(free, dims=1, share=_NEAR, start="dome", stride=(2, 30)),
    ),
    (
        "beam_plucked",
        "a kink that spreads in all wave lengths",
        partial(free, dims=1, share=_WIDE, start="plucked", stride=(3, 30)),
    ),
    (
        "beam_packet",
        "a packet whose short waves run ahead",
        partial(free, dims=1, share=_WIDE, start="packet", stride=(2, 10)),
    ),
    (
        "plate_hump_f4",
        "waves arrive in quiet tiles, short ones first, f4",
        partial(free, dims=2, share=_WIDE, start="hump", stride=(1, 4), store="f4"),
    ),
    ("plate_struck", "struck midway", struck),
):
    FAMILY.healthy(_name, _what, _make)
