"""Burgers' equation: central differences with viscosity, and upwind differences of its flux."""

from __future__ import annotations

from functools import partial

import numpy as np

from tests.corpus.assembly import State
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases.smooth import PI, double, hump, places, waves
from tests.corpus.growing import Twin
from tests.corpus.marching import even, frozen, march, pick, uneven, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("burgers")


def viscous(u: Array, c: float, r: Array | float) -> Array:
    """Forward Euler, central differences; c = dt / dx, r: viscosity times dt / dx**2, per axis
    alike (each axis carries itself: u (u_x + u_y))."""
    out = u.copy()
    for a in range(u.ndim):
        ahead, behind = np.roll(u, -1, a), np.roll(u, 1, a)
        out += r * (ahead - 2.0 * u + behind) - 0.25 * c * (ahead * ahead - behind * behind)
    return out


def rising_flux(u: Array, c: float) -> Array:
    """First order, the flux looking to the left: for flow to the right only."""
    flux = 0.5 * u * u
    return u - c * (flux - np.roll(flux, 1))


def godunov(u: Array, c: float) -> Array:
    """First order with the exact flux between two cells (LeVeque 2002, section 12.2)."""
    right = np.roll(u, -1)
    flux = 0.5 * np.maximum(np.maximum(u, 0.0) ** 2, np.minimum(right, 0.0) ** 2)
    return u - c * (flux - np.roll(flux, 1))


def too_viscous(
    rng: np.random.Generator,
    dims: int,
    excess: float,
    store: str,
    views: tuple[int, int],
    patch: bool = False,
) -> Run:
    """Viscosity beyond the limit of forward Euler, everywhere or in a patch."""
    shape = tuple(2 * pick(rng, *((70, 110) if dims == 1 else (22, 30))) for _ in range(dims))
    limit = 0.5 / dims
    r: Array | float = limit * (1.0 + excess)
    if patch:
        middle = [uniform(rng, 0.3, 0.7) * n for n in shape]
        r = limit * (0.6 + (0.4 + excess) * hump(shape, middle, 9.0).astype(np.float64))
    start = [1.0 + 0.3 * waves(shape, rng, 2)]
    c = uniform(rng, 0.02, 0.04) if patch else uniform(rng, 0.15, 0.25)
    recorder = Recorder(store, floor=1e-12, placed=patch)
    twin = Twin(start)
    steps = even(pick(rng, *views), 400)
    march(recorder, double(start), frozen(lambda s: [viscous(s[0], c, r)]), steps, ["u"], c, twin)
    return recorder.sick(0, None, "the coefficients move with the flow", linear=False)


def accelerated(rng: np.random.Generator, store: str) -> Run:
    """A force drives the flow until upwind differences exceed their limit at the crest."""
    n = 2 * pick(rng, 70, 100)
    start = [1.0 + 0.002 * waves((n,), rng, 1)]
    c, force = 0.8, uniform(rng, 2e-4, 3e-4)
    recorder = Recorder(store, floor=1e-12)
    twin = Twin(start)
    state = double(start)

    def step(s: State, n: int) -> State:
        return [rising_flux(s[0], c) + force]

    # The crest moves with the mean flow; what passes 1 / c first is the cause.
    u, cause = state[0].copy(), 0
    while u.max() * c <= 1.0:
        u, cause = rising_flux(u, c) + force, cause + 1
    march(recorder, state, step, even(pick(rng, 6, 10), 400), ["u"], c, twin, cause)
    return recorder.sick(cause, None, "the factor grows with the flow", linear=False)


def turned(rng: np.random.Generator) -> Run:
    """A force turns the flow, and the flux goes on looking to the side it came from."""
    n = 2 * pick(rng, 70, 100)
    start = [0.1 + 0.001 * waves((n,), rng, 1)]
    c, force = 0.8, -uniform(rng, 1.0e-4, 1.5e-4)
    recorder = Recorder(floor=1e-12)
    twin, state = Twin(start), double(start)
    u, cause = state[0].copy(), 0
    while u.min() > 0.0:
        u, cause = rising_flux(u, c) + force, cause + 1

    def step(s: State, n: int) -> State:
        return [rising_flux(s[0], c) + force]

    march(recorder, state, step, even(pick(rng, 15, 25), 400), ["u"], c, twin, cause)
    return recorder.sick(cause, None, "the factor grows with the flow", linear=False)


def leaping(rng: np.random.Generator) -> Run:
    """Leapfrog without viscosity: the squares of short waves feed shorter ones, and what should be
    a front blows up, though the step is below the linear limit (Phillips 1959)."""
    n = 2 * pick(rng, 80, 110)
    c = uniform(rng, 0.3, 0.4)
    start = 0.8 + 0.35 * waves((n,), rng, 2, 3).astype(np.float64)

    def step(s: State) -> State:
        old, now = s
        return [now, old - c * now * (np.roll(now, -1) - np.roll(now, 1))]

    first = [start, start - 0.5 * c * start * (np.roll(start, -1) - np.roll(start, 1))]
    recorder = Recorder()
    march(recorder, first, frozen(step), even(pick(rng, 1, 3), 400), [None, "u"], c)
    return recorder.sick(0, None, "non-linear blow-up", linear=False)


def shock(
    rng: np.random.Generator,
    start: str,
    stride: tuple[int, int],
    store: str = "f8",
    unequal: bool = False,
) -> Run:
    """Fronts form, travel and merge, held by the flux of Godunov."""
    n = 2 * pick(rng, 80, 130)
    x = places((n,))[0].astype(np.float64)
    u = {
        "wave": lambda: (
            uniform(rng, 0.0, 0.5) + np.sin(2.0 * float(PI) * x + rng.uniform(0.0, 6.0))
        ),
        "waves": lambda: waves((n,), rng, 5).astype(np.float64),
        "pulse": lambda: hump((n,), [n / 4], n / 30).astype(np.float64),
        "rest": lambda: np.zeros(n),
    }[start]()
    c = 0.9 / max(1.0, float(np.abs(u).max()))
    push = 2e-3 * np.sin(2.0 * float(PI) * x) if start == "rest" else 0.0
    every = pick(rng, *stride)
    steps = uneven(rng, every, 150) if unequal else even(every, 150)
    recorder = Recorder(store)
    march(
        recorder,
        [u],
        frozen(lambda s: [godunov(s[0], c) + push * (np.abs(s[0]) < 1.0)]),
        steps,
        ["u"],
        c,
    )
    return recorder.healthy()


def thick_fronts(rng: np.random.Generator, dims: int, store: str) -> Run:
    """Viscous fronts that the grid resolves, with a step that follows the largest speed."""
    shape = tuple(2 * pick(rng, *((80, 120) if dims == 1 else (30, 44))) for _ in range(dims))
    u = waves(shape, rng, 2).astype(np.float64)
    nu = 0.4 * float(np.abs(u).max())
    share = uniform(rng, 0.6, 0.9)
    dt = [0.0]

    def step(s: State, n: int) -> State:
        # Cell size one; limits of diffusion and of advection with diffusion.
        top = float(np.abs(s[0]).max())
        dt[0] = share * min(0.5 / (dims * nu), 2.0 * nu / max(top * top * dims, 1e-9))
        return [viscous(s[0], dt[0], nu * dt[0])]

    recorder = Recorder(store)
    march(recorder, [u], step, even(pick(rng, 2, 10), 150), ["u"], lambda n: dt[0])
    return recorder.healthy()


for _name, _what, _make in (
    (
        "1d_viscous",
        "1 % above the limit of diffusion",
        partial(too_viscous, dims=1, excess=0.01, store="f8", views=(15, 25)),
    ),
    (
        "1d_viscous_f4",
        "2 % above the limit of diffusion, f4",
        partial(too_viscous, dims=1, excess=0.02, store="f4", views=(3, 6)),
    ),
    (
        "2d_viscous_patch",
        "12 % above in a patch",
        partial(too_viscous, dims=2, excess=0.12, store="f8", views=(4, 6), patch=True),
    ),
    ("1d_accelerated", "the velocity grows across the limit", partial(accelerated, store="f8")),
    ("1d_turned", "upwind on the wrong side after the flow turns", turned),
    ("1d_leaping", "non-linear blow-up", leaping),
):
    FAMILY.sick(_name, _what, _make)
for _name, _what, _make in (
    ("1d_shock", "a front forms and travels", partial(shock, start="wave", stride=(1, 8))),
    (
        "1d_shocks_f4",
        "fronts form and merge, f4",
        partial(shock, start="waves", stride=(1, 6), store="f4"),
    ),
    (
        "1d_pulse",
        "a pulse steepens and runs into quiet tiles",
        partial(shock, start="pulse", stride=(2, 6)),
    ),
    (
        "1d_driven_from_rest",
        "driven from rest until fronts form",
        partial(shock, start="rest", stride=(4, 12)),
    ),
    (
        "1d_shock_uneven",
        "a front, stored by the clock on the wall",
        partial(shock, start="wave", stride=(4, 10), unequal=True),
    ),
    (
        "1d_thick_fronts",
        "resolved fronts, adaptive step",
        partial(thick_fronts, dims=1, store="f8"),
    ),
    (
        "2d_thick_fronts_f4",
        "resolved fronts, adaptive step, f4",
        partial(thick_fronts, dims=2, store="f4"),
    ),
):
    FAMILY.healthy(_name, _what, _make)
