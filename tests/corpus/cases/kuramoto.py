"""Kuramoto-Sivashinsky: u_t = -u u_x - u_xx - u_xxxx, periodic, central differences.

Its long waves are unstable by the physics (growth k**2 - k**4, at most 1/4) and end in chaos with a
largest Lyapunov exponent of about 0.1 (Edson, Bunder, Mattner and Roberts 2019). Forward Euler is
limited by the fourth derivative, dt <= 2 / (16 / dx**4 - 4 / dx**2). A twin tells nothing here, for
the chaos feeds the shortest waves in both alike; the growing part is that of the linear terms'
unstable waves shorter than four cells, and what the chaos gives them is its floor.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases.smooth import waves
from tests.corpus.growing import WaveNumbers
from tests.corpus.marching import even, march, pick, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("kuramoto")


def slope(u: Array, dx: float) -> Array:
    """Right-hand side; the advection as the difference of the flux."""
    right, left = np.roll(u, -1), np.roll(u, 1)
    second = (right - 2.0 * u + left) / dx**2
    fourth = (np.roll(u, -2) - 4.0 * right + 6.0 * u - 4.0 * left + np.roll(u, 2)) / dx**4
    return -(right * right - left * left) / (4.0 * dx) - second - fourth


def linear(u: Array, dx: float) -> Array:
    """The same about rest."""
    tiny = 1e-150
    return slope(tiny * u, dx) / tiny


def limit(dx: float) -> float:
    return 2.0 / (16.0 / dx**4 - 4.0 / dx**2)


def grid(rng: np.random.Generator, low: float, high: float) -> tuple[int, float]:
    """Cells and their size; the physical waves are about nine long."""
    return 2 * pick(rng, 48, 80), uniform(rng, low, high)


def settled(start: Array, dx: float, steps: int) -> Array:
    """The state after a while at half the limit, computed in the precision of `start`."""
    dt = 0.5 * limit(dx)
    for _ in range(steps):
        start = start + dt * slope(start, dx)
    return start


def sick(
    rng: np.random.Generator,
    excess: float,
    store: str,
    every: tuple[int, int],
    midway: bool = False,
) -> Run:
    """Chaos, computed with a step beyond the limit, from the start or from midway on."""
    n, dx = grid(rng, 0.5, 0.62)
    start = settled(waves((n,), rng, 6, 6).astype(np.float64), dx, 3000)
    stride = pick(rng, *every)
    long, short = (1.0 + excess) * limit(dx), uniform(rng, 0.8, 0.9) * limit(dx)
    since = stride * pick(rng, 30, 45) if midway else 0

    def dt(k: int) -> float:
        return long if k >= since else short

    modes = WaveNumbers(lambda s: [s[0] + long * linear(s[0], dx)], [(n,)], longest=4.0)
    recorder = Recorder(store)

    def step(s: State, k: int) -> State:
        return [s[0] + dt(k) * slope(s[0], dx)]

    march(recorder, [start], step, even(stride, 400), ["u"], dt, modes, since)
    first = since // stride
    recorder.floor = max(recorder.contamination[first : first + 3])
    return recorder.sick(since, None, "the coefficients move with the flow", linear=False)


def chaos(
    rng: np.random.Generator,
    store: str,
    share: tuple[float, float],
    every: tuple[int, int],
    count: int = 250,
) -> Run:
    """Chaos for a long time."""
    n, dx = grid(rng, 0.75, 0.95)
    u = settled(waves((n,), rng, 6, 6).astype(np.float64), dx, 1500)
    dt = uniform(rng, *share) * limit(dx)
    recorder = Recorder(store)

    def step(s: State, k: int) -> State:
        return [s[0] + dt * slope(s[0], dx)]

    march(recorder, [u], step, even(pick(rng, *every), count), ["u"], dt)
    return recorder.healthy()


def awakening(rng: np.random.Generator, store: str, seed: float) -> Run:
    """From weak noise: the unstable long waves, which the grid resolves, grow over decades and
    saturate in chaos."""
    n, dx = grid(rng, 0.75, 0.95)
    u = seed * rng.standard_normal(n)
    dt = uniform(rng, 0.7, 0.95) * limit(dx)
    # Twice the time from the seed to the size of chaos, at the largest physical rate.
    whole = 2.0 * np.log(1.0 / seed) / 0.25 / dt
    recorder = Recorder(store)

    def step(s: State, k: int) -> State:
        return [s[0] + dt * slope(s[0], dx)]

    march(recorder, [u], step, even(max(1, int(whole / 200)), 200), ["u"], dt)
    return recorder.healthy()


for _name, _what, _make in (
    ("one_percent", "1 % above", partial(sick, excess=0.01, store="f8", every=(18, 25))),
    ("two_percent_f4", "2 % above, f4", partial(sick, excess=0.02, store="f4", every=(4, 7))),
    (
        "longer_step",
        "the step is lengthened to 4 % above midway",
        partial(sick, excess=0.04, store="f8", every=(6, 9), midway=True),
    ),
):
    FAMILY.sick(_name, _what, _make)
for _name, _what, _make in (
    (
        "chaos",
        "chaos for a long time",
        partial(chaos, store="f8", share=(0.6, 0.95), every=(10, 60)),
    ),
    (
        "chaos_near_limit_f4",
        "chaos at 0.99 of the limit, f4",
        partial(chaos, store="f4", share=(0.99, 0.9901), every=(3, 10)),
    ),
    (
        "awakening",
        "resolved instability from noise of 1e-10 to chaos",
        partial(awakening, store="f8", seed=1e-10),
    ),
    (
        "awakening_f4",
        "the same, stored in single precision",
        partial(awakening, store="f4", seed=1e-8),
    ),
    (
        "awakening_three_digits",
        "the same, stored in 3 digits",
        partial(awakening, store="3 digits", seed=1e-6),
    ),
):
    FAMILY.healthy(_name, _what, _make)
