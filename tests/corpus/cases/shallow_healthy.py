"""Shallow water that is well, alarming as its snapshots may look."""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Run
from tests.corpus.cases.carrying import bell
from tests.corpus.cases.diffusion import bump
from tests.corpus.cases.shallow import FAMILY, NAMES, linear, rusanov, shape_of
from tests.corpus.marching import even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder


def basin(
    rng: np.random.Generator,
    how: str,
    stride: tuple[int, int],
    store: str = "f8",
    share: tuple[float, float] = (0.6, 0.95),
) -> Run:
    """Waves in a periodic sea: long ones, a splash, or a tide that drives them."""
    shape = shape_of(rng)
    r = uniform(rng, *share) / np.sqrt(2.0)
    depth = 0.6 + 0.4 * bell(shape, [n / 2 for n in shape], 9.0)
    eta = {
        "waves": lambda: bump(shape, rng),
        "splash": lambda: bell(shape, [n / 3 for n in shape], 3.0),
        "tide": lambda: np.zeros(shape),
    }[how]()
    period = uniform(rng, 200.0, 500.0)
    place = bump(shape, rng, 1)

    def step(s: State, n: int) -> State:
        eta, u, v = linear(s, r, depth)
        if how == "tide":
            eta = eta + 1e-3 * np.sin(2.0 * np.pi * n / period) * place
        return [eta, u, v]

    recorder = Recorder(store)
    march(
        recorder,
        [eta, np.zeros(shape), np.zeros(shape)],
        step,
        even(pick(rng, *stride), 150),
        NAMES,
        r,
    )
    return recorder.healthy()


def channel(rng: np.random.Generator, how: str, stride: tuple[int, int], store: str = "f8") -> Run:
    """A channel with walls: a dam breaks, water sloshes, or a lake rests over a rough bed."""
    n = 2 * pick(rng, 70, 110)
    x = np.arange(n) / n
    bed = 0.2 * bump((n,), rng, 6) if how == "rest" else np.zeros(n)
    surface = {
        "dam": np.where(x < uniform(rng, 0.3, 0.5), 1.0, uniform(rng, 0.2, 0.5)),
        "slosh": 1.0 + 0.3 * np.cos(np.pi * x),
        "rest": np.ones(n),
    }[how]
    c = uniform(rng, 0.3, 0.45)
    recorder = Recorder(store)

    def step(s: State) -> State:
        return list(rusanov(s[0], s[1], c, bed))

    march(
        recorder,
        [surface - bed, np.zeros(n)],
        frozen(step),
        even(pick(rng, *stride), 150),
        ["h", "q"],
        c,
    )
    return recorder.healthy()


for _name, _what, _make in (
    (
        "2d_near_limit",
        "0.99 of the limit",
        partial(basin, how="waves", stride=(1, 6), share=(0.99, 0.9901)),
    ),
    (
        "2d_splash_f4",
        "waves arrive in quiet tiles, f4",
        partial(basin, how="splash", stride=(1, 3), store="f4"),
    ),
    ("2d_tide", "periodic forcing from rest", partial(basin, how="tide", stride=(3, 10))),
    (
        "2d_three_decimals",
        "stored in 3 decimals",
        partial(basin, how="waves", stride=(1, 6), store="3 decimals"),
    ),
    ("1d_dam_break", "a bore runs through a channel", partial(channel, how="dam", stride=(2, 6))),
    (
        "1d_dam_break_f4",
        "a bore runs through a channel, f4",
        partial(channel, how="dam", stride=(1, 4), store="f4"),
    ),
    ("1d_sloshing", "water sloshes between walls", partial(channel, how="slosh", stride=(4, 15))),
    (
        "1d_lake_at_rest",
        "nothing moves but the rounding",
        partial(channel, how="rest", stride=(3, 20)),
    ),
    (
        "2d_seldom_f4",
        "every 20th to 40th step, f4",
        partial(basin, how="waves", stride=(20, 40), store="f4"),
    ),
):
    FAMILY.healthy(_name, _what, _make)
