"""Shallow water: depth in the cells, velocities on the faces (Arakawa's C grid), forward-backward.

Linear waves have the factor and the limit of staggered acoustics, sqrt(g H) dt / dx = 1 / sqrt(2)
in the plane.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from probes.spec import FieldSpec
from tests.corpus.assembly import State
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases.carrying import bell
from tests.corpus.cases.diffusion import bump, faces, spread
from tests.corpus.cases.smooth import double, hump, waves
from tests.corpus.cases.sounding import flat_top
from tests.corpus.growing import Swings, Twin, WaveNumbers
from tests.corpus.marching import cadence, even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("shallow")
NAMES = ("eta", "u", "v")


def linear(s: State, r: float, depth: Array | float = 1.0) -> State:
    """Surface and velocities, periodic; r = sqrt(g H) dt / dx where the depth is one."""
    eta, u, v = s
    u = u - r * (np.roll(eta, -1, 0) - eta)
    v = v - r * (np.roll(eta, -1, 1) - eta)
    hu = 0.5 * (depth + np.roll(depth, -1, 0)) * u if isinstance(depth, np.ndarray) else depth * u
    hv = 0.5 * (depth + np.roll(depth, -1, 1)) * v if isinstance(depth, np.ndarray) else depth * v
    return [eta - r * (hu - np.roll(hu, 1, 0) + hv - np.roll(hv, 1, 1)), u, v]


def rusanov(h: Array, q: Array, c: float, floor: Array | float = 0.0) -> tuple[Array, Array]:
    """Depth and discharge in one dimension with the largest wave speed as dissipation, dt / dx = c,
    gravity one, bed height `floor` balanced so that a lake stays at rest. Walls at both ends."""
    surface = h + floor

    def pad(a: Array, sign):
        return np.concatenate([[sign * a[0]], a, [sign * a[-1]]])

    h2, q2, s2 = pad(h, 1.0), pad(q, -1.0), pad(surface, 1.0)
    u = q2 / np.maximum(h2, 1e-12)
    speed = float((np.abs(u) + np.sqrt(np.maximum(h2, 0.0))).max())
    mass = 0.5 * (q2[1:] + q2[:-1]) - 0.5 * speed * np.diff(s2)
    push = 0.5 * (q2[1:] * u[1:] + q2[:-1] * u[:-1]) - 0.5 * speed * np.diff(q2)
    slope = h * (s2[2:] - s2[:-2]) * 0.5
    return h - c * np.diff(mass), q - c * (np.diff(push) + slope)


def shape_of(rng: np.random.Generator) -> tuple[int, int]:
    return 2 * pick(rng, 22, 34), 2 * pick(rng, 22, 34)


def everywhere(rng: np.random.Generator, excess: float, store: str = "f8", views: int = 40) -> Run:
    """Above the limit everywhere."""
    shape = shape_of(rng)
    r = (1.0 + excess) / np.sqrt(2.0)
    modes = WaveNumbers(lambda s: linear(s, r), [shape] * 3)
    stride = cadence(rng, modes.factor, store, views)
    state = [bump(shape, rng), np.zeros(shape), np.zeros(shape)]
    recorder = Recorder(store)
    march(recorder, state, frozen(lambda s: linear(s, r)), even(stride, 400), NAMES, r, modes)
    return recorder.sick(0, modes.factor)


def filling(rng: np.random.Generator, store: str) -> Run:
    """A tide fills the basin until its waves are too fast for the step."""
    shape = shape_of(rng)
    first, last, rise = uniform(rng, 0.88, 0.94), uniform(rng, 1.01, 1.02), pick(rng, 500, 800)
    # Depth as the square of the share of the limit.

    def depth(n: int) -> float:
        return (first + (last - first) * min(1.0, n / rise)) ** 2

    r = 1.0 / np.sqrt(2.0)
    cause = next(n for n in range(rise + 1) if depth(n) > 1.0)
    modes = WaveNumbers(lambda s: linear(s, r, last**2), [shape] * 3)
    state = [0.1 * bump(shape, rng), np.zeros(shape), np.zeros(shape)]
    recorder = Recorder(store)

    def step(s: State, n: int) -> State:
        return linear(s, r, depth(n))

    march(recorder, state, step, even(pick(rng, 2, 4), 400), NAMES, r, modes, cause)
    return recorder.sick(cause, None, "the factor grows with the depth")


class Surface:
    """Growing part of the surface alone: with the velocities eliminated it obeys new = 2 now - old
    + r**2 divergence of depth gradient, and the level before follows from the velocities."""

    def __init__(self, r: float, depth: Array) -> None:
        shape = depth.shape
        self._r, self._across = r, faces(depth, True)
        self._swings = Swings(
            lambda s: [r * r * spread(s[0], self._across, True)], shape, periodic=True
        )
        self.factor = self._swings.factor

    def part(self, state: State) -> State:
        eta, *moved = state
        flow = [h * u for h, u in zip(self._across, moved, strict=True)]
        out = sum(q - np.roll(q, 1, a) for a, q in enumerate(flow))
        grown = self._swings.part([eta + self._r * out, eta])[1]
        return [grown, np.zeros_like(grown), np.zeros_like(grown)]


def deep_hole(rng: np.random.Generator, store: str) -> Run:
    """A deep hole in the bed, the waves over which are too fast."""
    shape = shape_of(rng)
    low = uniform(rng, 0.5, 0.65)
    middle = [uniform(rng, 0.35, 0.65) * n for n in shape]
    depth = low + (1.0 - low) * flat_top(shape, middle, uniform(rng, 7.5, 9.0))
    r = uniform(rng, 1.012, 1.02) / np.sqrt(2.0)
    modes = Surface(r, depth)
    while modes.factor < 1.001:
        # A narrow hole lets its waves leak out: their limit lies above that of its depth.
        r *= 1.005
        modes = Surface(r, depth)
    stride = cadence(rng, modes.factor, store)
    state = [bump(shape, rng, 1), np.zeros(shape), np.zeros(shape)]
    recorder = Recorder(store, placed=True)
    step = frozen(lambda s: linear(s, r, depth))
    march(recorder, state, step, even(stride, 400), NAMES, r, modes, judged=["eta"])
    return recorder.sick(0, modes.factor)


def turning(rng: np.random.Generator) -> Run:
    """The Coriolis force taken explicitly by forward Euler: all inertial motion grows slowly,
    smooth in space and resolved in time."""
    shape = shape_of(rng)
    turn = uniform(rng, 0.15, 0.2)
    r = 0.02

    def step(s: State) -> State:
        eta, u, v = s
        return linear([eta, u + turn * v, v - turn * u], r)

    modes = WaveNumbers(step, [shape] * 3)
    recorder = Recorder()
    state = [bump(shape, rng), 0.01 * bump(shape, rng), 0.01 * bump(shape, rng)]
    march(recorder, state, frozen(step), even(pick(rng, 4, 9), 150), NAMES, r, modes)
    return recorder.sick(0, modes.factor)


def rotating(rng: np.random.Generator, store: str) -> Run:
    """An exact rotation of the velocities by the Coriolis force, but of two that do not stand at
    the same place: short waves gain from it."""
    shape = shape_of(rng)
    angle, r = uniform(rng, 0.04, 0.08), uniform(rng, 0.3, 0.5)
    cos, sin = np.cos(angle), np.sin(angle)

    def step(s: State) -> State:
        eta, u, v = s
        return linear([eta, cos * u + sin * v, cos * v - sin * u], r)

    modes = WaveNumbers(step, [shape] * 3)
    stride = cadence(rng, modes.factor, store)
    state = [0.1 * bump(shape, rng), np.zeros(shape), np.zeros(shape)]
    recorder = Recorder(store)
    march(recorder, state, frozen(step), even(stride, 400), NAMES, r, modes)
    return recorder.sick(0, modes.factor)


def dragging(rng: np.random.Generator) -> Run:
    """Bottom drag c |u| u / h taken explicitly: over a shoal it is too stiff for the step and flips
    the velocity there from step to step."""
    n = 2 * pick(rng, 60, 90)
    # A steady current over a bed, one velocity per place, driven by a slope; smooth in space.
    shoal = hump((n,), [uniform(rng, 0.3, 0.7) * n], uniform(rng, 4.0, 6.0))
    depth = 1.0 - uniform(rng, 0.93, 0.95) * shoal
    drive = 0.02 + 0.002 * waves((n,), rng, 2)
    # About the steady current the step multiplies by 1 - 2 sqrt(drag drive / depth).
    drag = uniform(rng, 1.03, 1.06) ** 2 / (drive / depth).max()
    start = [np.sqrt(drive * depth / drag)]

    def step(s: State) -> State:
        u = s[0]
        return [u + drive - drag * np.abs(u) * u / depth]

    recorder = Recorder(floor=1e-11, placed=True)
    march(
        recorder, double(start), frozen(step), even(pick(rng, 2, 4), 300), ["u"], 1.0, Twin(start)
    )
    return recorder.sick(0, None, "non-linear drag", linear=False)


def draining(rng: np.random.Generator, dtype: str) -> Run:
    """A basin that is drained through a sink until the depth is negative in a cell: nothing grows
    before it."""
    cells = 2 * pick(rng, 50, 80)
    h = 1.0 + 0.1 * bump((cells,), rng)
    q = np.zeros(cells)
    sink = bell((cells,), [uniform(rng, 0.3, 0.7) * cells], 1.5) * uniform(rng, 0.03, 0.05)

    def step(s: State) -> State:
        h, q = rusanov(s[0], s[1], 0.3)
        return [h - sink, q]

    bounds = {"h": FieldSpec(min=0.0), "q": FieldSpec()}
    recorder = Recorder(dtype)
    stride, state, n = pick(rng, 2, 4), [h, q], 0
    while True:
        recorder.take(n, 0.3 * n, {"h": state[0], "q": state[1]})
        if state[0].min() < 0.0:
            return recorder.broken(n, bounds, "negative depth without a precursor")
        for _ in range(stride):
            state = step(state)
        n += stride


for _name, _what, _make, *_apart in (
    ("2d_half_percent", "0.5 % above", partial(everywhere, excess=0.005)),
    (
        "2d_three_percent_f4",
        "3 % above, f4, few snapshots",
        partial(everywhere, excess=0.03, store="f4", views=20),
    ),
    ("2d_filling", "the depth grows across the limit", partial(filling, store="f8")),
    ("2d_filling_f4", "the depth grows across the limit, f4", partial(filling, store="f4")),
    ("2d_deep_hole", "only over a deep hole", partial(deep_hole, store="f8")),
    ("2d_rotating", "a rotation that mixes places", partial(rotating, store="f8")),
    ("1d_dragging", "stiff drag over a shoal, non-linear", dragging),
    ("1d_draining", "negative depth without a precursor", partial(draining, dtype="f8")),
    ("1d_draining_f4", "negative depth without a precursor, f4", partial(draining, dtype="f4")),
    (
        "2d_turning",
        "explicit Coriolis force",
        turning,
        "smooth in space and resolved in time: reported as resolved growth",
    ),
):
    FAMILY.sick(_name, _what, _make, **({"apart": _apart[0]} if _apart else {}))
