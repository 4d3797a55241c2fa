"""Incompressible flow in the plane: vorticity, spectral in space and periodic.

Four Runge-Kutta stages for the advection, forward Euler for the viscosity, whose limit is
nu k**2 dt = 2 at the largest wave number.
"""

from __future__ import annotations

from functools import partial

import numpy as np
import scipy.fft

from tests.corpus.assembly import State
from tests.corpus.case import Array, Family, Run
from tests.corpus.cases.diffusion import bump
from tests.corpus.growing import WaveNumbers
from tests.corpus.marching import even, frozen, march, pick, uniform
from tests.corpus.recording import Recorder

FAMILY = Family("vorticity")


class Flow:
    """The step of one grid. cut: share of the wave numbers that the advection keeps."""

    def __init__(
        self, shape: tuple[int, int], dt: float, nu: float, cut: float = 2.0 / 3.0
    ) -> None:
        kx = 2.0 * np.pi * np.fft.fftfreq(shape[0])[:, None]
        ky = 2.0 * np.pi * np.fft.rfftfreq(shape[1])[None, :]
        self._kx, self._ky, self._shape = kx, ky, shape
        self.k2 = kx**2 + ky**2
        self._inverse = np.where(self.k2 > 0.0, 1.0 / np.where(self.k2 > 0.0, self.k2, 1.0), 0.0)
        self._kept = (np.abs(kx) <= cut * np.pi) & (np.abs(ky) <= cut * np.pi)
        self._damp = 1.0 - dt * nu * self.k2
        self._dt = dt

    def velocity(self, w: Array) -> tuple[Array, Array]:
        psi = w * self._inverse
        u = scipy.fft.irfft2(1j * self._ky * psi, self._shape)
        return u, scipy.fft.irfft2(-1j * self._kx * psi, self._shape)

    def advection(self, w: Array) -> Array:
        u, v = self.velocity(w)
        wx, wy = (scipy.fft.irfft2(1j * k * w, self._shape) for k in (self._kx, self._ky))
        return -scipy.fft.rfft2(u * wx + v * wy) * self._kept

    def step(self, s: State) -> State:
        w = scipy.fft.rfft2(s[0])
        one = self.advection(w)
        two = self.advection(w + 0.5 * self._dt * one)
        three = self.advection(w + 0.5 * self._dt * two)
        four = self.advection(w + self._dt * three)
        change = self._dt / 6.0 * (one + 2.0 * two + 2.0 * three + four)
        return [scipy.fft.irfft2(self._damp * w + change, self._shape)]

    def resting(self, s: State) -> State:
        """The same step without motion: what the linear truth rests on."""
        return [scipy.fft.irfft2(self._damp * scipy.fft.rfft2(s[0]), self._shape)]


def shape_of(rng: np.random.Generator) -> tuple[int, int]:
    return 2 * pick(rng, 24, 32), 2 * pick(rng, 24, 32)


def viscous_limit(shape: tuple[int, int]) -> float:
    """Largest nu dt."""
    return 2.0 / float(Flow(shape, 0.0, 0.0).k2.max())


def unit_speed(w: Array) -> Array:
    """The same vorticity without mean, scaled so that the flow moves a cell in a unit of time."""
    w = w - w.mean()
    u, v = Flow(w.shape, 0.0, 0.0).velocity(scipy.fft.rfft2(w))
    return w / np.sqrt(u * u + v * v).max()


def eddies(shape: tuple[int, int], rng: np.random.Generator) -> Array:
    """Vorticity of a few large eddies."""
    return unit_speed(bump(shape, rng, 3))


def sick(
    rng: np.random.Generator,
    excess: float,
    store: str,
    every: tuple[int, int],
    midway: bool = False,
) -> Run:
    """Eddies with a viscosity beyond the limit of the step, from the start or from midway on."""
    shape = shape_of(rng)
    dt, limit = 0.3, viscous_limit(shape)
    stride = pick(rng, *every)
    since = stride * pick(rng, 25, 40) if midway else 0
    long, short = (Flow(shape, dt, share * limit / dt) for share in (1.0 + excess, 0.6))
    modes = WaveNumbers(long.resting, [shape], longest=4.0)
    recorder = Recorder(store)

    def step(s: State, n: int) -> State:
        return (long if n >= since else short).step(s)

    march(recorder, [eddies(shape, rng)], step, even(stride, 300), ["w"], dt, modes, since)
    first = since // stride
    recorder.floor = max(recorder.contamination[first : first + 3])
    return recorder.sick(since, modes.factor)


def aliased(rng: np.random.Generator) -> Run:
    """Without viscosity and with all wave numbers kept, what should cascade away piles up at the
    grid and blows up."""
    shape = shape_of(rng)
    flow = Flow(shape, uniform(rng, 0.3, 0.5), 0.0, cut=1.0)
    recorder = Recorder()
    march(recorder, [eddies(shape, rng)], frozen(flow.step), even(pick(rng, 3, 5), 400), ["w"], 1.0)
    return recorder.sick(0, None, "non-linear blow-up", linear=False)


def well(
    rng: np.random.Generator,
    start: str,
    store: str,
    stride: tuple[int, int],
    nu: float,
    count: int = 150,
) -> Run:
    """Resolved flow: eddies that cascade and decay, decay from noise, a shear layer that rolls up
    from a weak disturbance, or a force that drives it from rest."""
    shape = shape_of(rng)
    dt = uniform(rng, 0.2, 0.4)
    flow = Flow(shape, dt, nu * viscous_limit(shape) / 0.4)
    y = np.arange(shape[1]) / shape[1]
    push = np.zeros(shape)
    if start == "layer":
        profile = np.exp(-(((y - 0.25) / 0.03) ** 2)) - np.exp(-(((y - 0.75) / 0.03) ** 2))
        w = unit_speed(np.broadcast_to(profile, shape)) + 1e-9 * eddies(shape, rng)
    elif start == "noise":
        w = unit_speed(rng.standard_normal(shape))
    elif start == "rest":
        w, push = np.zeros(shape), 0.01 * eddies(shape, rng)
    else:
        w = eddies(shape, rng)
    recorder = Recorder(store)
    step = frozen(lambda s: [flow.step(s)[0] + dt * push])
    march(recorder, [w], step, even(pick(rng, *stride), count), ["w"], dt)
    return recorder.healthy()


for _name, _what, _make in (
    ("two_percent", "viscosity 2 % above", partial(sick, excess=0.02, store="f8", every=(8, 11))),
    (
        "five_percent_f4",
        "viscosity 5 % above, f4",
        partial(sick, excess=0.05, store="f4", every=(2, 3)),
    ),
    (
        "raised",
        "viscosity raised to 3 % above midway",
        partial(sick, excess=0.03, store="f8", every=(5, 7), midway=True),
    ),
    ("aliased", "without viscosity, blows up at the grid", aliased),
):
    FAMILY.sick(_name, _what, _make)
for _name, _what, _make in (
    (
        "cascade",
        "a cascade to small scales",
        partial(well, start="eddies", store="f8", stride=(2, 6), nu=0.02),
    ),
    (
        "cascade_f4",
        "a cascade to small scales, f4",
        partial(well, start="eddies", store="f4", stride=(2, 6), nu=0.03),
    ),
    (
        "from_noise",
        "noise that becomes eddies",
        partial(well, start="noise", store="f8", stride=(1, 4), nu=0.1),
    ),
    (
        "shear_layer",
        "a resolved instability over decades",
        partial(well, start="layer", store="f8", stride=(3, 5), nu=0.01, count=250),
    ),
    (
        "shear_layer_f4",
        "a resolved instability over decades, f4",
        partial(well, start="layer", store="f4", stride=(3, 5), nu=0.01, count=250),
    ),
    ("driven", "driven from rest", partial(well, start="rest", store="f8", stride=(4, 10), nu=0.2)),
):
    FAMILY.healthy(_name, _what, _make)
