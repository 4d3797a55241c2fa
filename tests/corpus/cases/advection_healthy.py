"""Advection that is well, alarming as its snapshots may look."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np

from tests.corpus.case import Array, Run
from tests.corpus.cases import carrying
from tests.corpus.cases.advection import FAMILY, grid, split
from tests.corpus.cases.carrying import bell, packet, shifted
from tests.corpus.cases.diffusion import bump
from tests.corpus.marching import even, frozen, march, pick, uneven, uniform
from tests.corpus.recording import Recorder

Scheme = Callable[[np.random.Generator], Callable[[Array], Array]]


def carried(
    rng: np.random.Generator,
    scheme: Scheme,
    start: str,
    stride: tuple[int, int],
    store: str = "f8",
    unequal: bool = False,
    count: int = 150,
) -> Run:
    """A stable scheme in one dimension, from waves, a square or a packet that has yet to arrive."""
    (n,) = grid(rng, 1)
    if start == "packet":
        n *= 3
    advance = scheme(rng)
    u = {
        "waves": lambda: uniform(rng, -2.0, 2.0) + bump((n,), rng, 8),
        "square": lambda: (bump((n,), rng, 2) > 0.2).astype(float),
        "packet": lambda: packet(n, n / 6, n / 30, 2 * np.pi / uniform(rng, 8.0, 12.0)),
        "noise": lambda: bump((n,), rng) + 1e-3 * rng.standard_normal(n),
    }[start]()
    every = pick(rng, *stride)
    steps = uneven(rng, every, count) if unequal else even(every, count)
    recorder = Recorder(store)
    march(recorder, [u], frozen(lambda s: [advance(s[0])]), steps, ["c"])
    return recorder.healthy()


def cloud(rng: np.random.Generator, dims: int, store: str, stride: tuple[int, int]) -> Run:
    """A cloud carried by a steady wind, in a field that is at rest elsewhere."""
    shape = grid(rng, dims)
    nus = split(rng, dims, uniform(rng, 0.7, 0.99))
    u = bell(shape, [uniform(rng, 0.2, 0.8) * n for n in shape], uniform(rng, 2.5, 6.0))
    recorder = Recorder(store)
    step = frozen(lambda s: [carrying.upwind(s[0], nus)])
    march(recorder, [u], step, even(pick(rng, *stride), 120), ["c"])
    return recorder.healthy()


def swirl(rng: np.random.Generator) -> Run:
    """A patch with sharp edges carried round in a vortex, towards where the flow goes."""
    shape = grid(rng, 2)
    x, y = np.meshgrid(*[np.arange(n) / n for n in shape], indexing="ij")
    speed = uniform(rng, 0.3, 0.49)
    nus = [
        -speed * np.cos(2 * np.pi * x) * np.sin(2 * np.pi * y),
        speed * np.sin(2 * np.pi * x) * np.cos(2 * np.pi * y),
    ]
    u = (bell(shape, [0.4 * n for n in shape], shape[0] / 8) > 0.5).astype(float)
    recorder = Recorder()
    step = frozen(lambda s: [carrying.upwind_either_side(s[0], nus)])
    march(recorder, [u], step, even(pick(rng, 2, 6), 150), ["c"])
    return recorder.healthy()


def window(rng: np.random.Generator, gain: float, seed: float, store: str = "f8") -> Run:
    """A non-normal operator: what is carried through a window there grows `gain` times, resolved
    by the grid, and leaves. Nothing grows for ever. seed: noise about the steady state, beside
    that of the rounding."""
    n, nu, r = 2 * pick(rng, 120, 160), uniform(rng, 0.25, 0.35), uniform(rng, 0.2, 0.25)
    x = np.arange(n) / n
    inside = ((x > 0.3) & (x < 0.7)).astype(float)
    # The rate along the way through 0.4 n cells makes up the gain.
    rate = np.log(gain) * nu / (0.4 * n) * inside
    calm = uniform(rng, 1.0, 5.0) + 0.2 * np.cos(2 * np.pi * x)
    forcing = calm - (carrying.central(calm, nu, r) + rate * calm)

    def advance(u: Array) -> Array:
        new = carrying.central(u, nu, r) + rate * u + forcing
        new[:2] = calm[:2]
        new[-1] = calm[-1] + 0.5 * (shifted(u, -1)[-1] - calm[-2])
        return new

    smooth = np.convolve(rng.standard_normal(n), np.hanning(15), mode="same")
    recorder = Recorder(store)
    start = [calm + seed * smooth * (x < 0.3)]
    march(recorder, start, frozen(lambda s: [advance(s[0])]), even(pick(rng, 4, 12), 200), ["c"])
    return recorder.healthy()


def _scheme(make: Callable[..., Array], *values: tuple[float, float]) -> Scheme:
    """A scheme whose numbers are drawn from ranges."""

    def draw(rng: np.random.Generator) -> Callable[[Array], Array]:
        numbers = [uniform(rng, low, high) for low, high in values]
        return lambda u: make(u, *numbers)

    return draw


_UPWIND = _scheme(lambda u, nu: carrying.upwind(u, [nu]), (0.99, 0.9901))
_LAX_WENDROFF = _scheme(carrying.lax_wendroff, (0.5, 0.95))
_NEAR = _scheme(carrying.lax_wendroff, (0.99, 0.9901))
_THIRD = _scheme(carrying.third_order, (0.8, 1.5))
_CENTRAL = _scheme(carrying.central, (0.4, 0.6), (0.2, 0.49))

for _name, _what, _make, *_apart in (
    (
        "1d_upwind_near_limit",
        "0.99 of the limit",
        partial(carried, scheme=_UPWIND, start="waves", stride=(3, 20)),
    ),
    (
        "1d_lax_wendroff_near_limit",
        "0.99 of the limit, from noise",
        partial(carried, scheme=_NEAR, start="noise", stride=(1, 9)),
    ),
    (
        "1d_square_ringing",
        "a square that rings",
        partial(carried, scheme=_LAX_WENDROFF, start="square", stride=(1, 8)),
    ),
    (
        "1d_third_order_f4",
        "long waves, f4",
        partial(carried, scheme=_THIRD, start="waves", stride=(5, 25), store="f4"),
    ),
    (
        "1d_arriving",
        "a packet arrives in quiet tiles",
        partial(carried, scheme=_LAX_WENDROFF, start="packet", stride=(2, 6)),
    ),
    (
        "1d_arriving_f4",
        "a packet arrives in quiet tiles, f4",
        partial(carried, scheme=_THIRD, start="packet", stride=(2, 4), store="f4"),
    ),
    (
        "1d_central_damped_enough",
        "central with enough diffusion",
        partial(carried, scheme=_CENTRAL, start="waves", stride=(2, 10)),
    ),
    (
        "1d_uneven",
        "stored by the clock on the wall",
        partial(carried, scheme=_THIRD, start="waves", stride=(8, 20), unequal=True),
    ),
    (
        "1d_three_digits",
        "stored in 3 digits",
        partial(carried, scheme=_THIRD, start="waves", stride=(2, 12), store="3 digits"),
    ),
    ("2d_cloud", "a cloud in still air", partial(cloud, dims=2, store="f8", stride=(1, 6))),
    ("3d_cloud_f4", "a cloud in still air, f4", partial(cloud, dims=3, store="f4", stride=(1, 3))),
    ("2d_swirl", "a patch wound up by a vortex", swirl),
    (
        "1d_window_100",
        "non-normal, grows a hundredfold from round-off",
        partial(window, gain=1e2, seed=0.0),
    ),
    (
        "1d_window_10000",
        "non-normal, grows 1e4 times from round-off",
        partial(window, gain=1e4, seed=1e-14),
    ),
    (
        "1d_window_10000_seeded",
        "non-normal, grows 1e4 times from noise of 1e-7, f4",
        partial(window, gain=1e4, seed=1e-7, store="f4"),
    ),
    (
        "1d_window_1e8",
        "non-normal, grows 1e8 times",
        partial(window, gain=1e8, seed=1e-13),
        "transient growth above 1e4",
    ),
):
    FAMILY.healthy(_name, _what, _make, **({"apart": _apart[0]} if _apart else {}))
