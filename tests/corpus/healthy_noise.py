"""Short healthy runs without a solver, thousands of them, to bound how often the detector cries
wolf; and long noise, to see how often it is suspicious of nothing."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import scipy.ndimage
import scipy.stats

from tests.corpus.case import Array, Run, Stored, Truth
from tests.corpus.marching import pick, uniform
from tests.corpus.playing import spread_out
from tests.corpus.running import follow
from tests.corpus.storing import stored
from tests.corpus.tables import CALM

RUNS, LONG, LONG_SNAPSHOTS = 2000, 8, 3000
_STORES = ("f8", "f8", "f4", "f4", "f2", "3 digits")

# Makes the field at any snapshot number.
Field = Callable[[int], Array]


def white(rng: np.random.Generator, shape: tuple[int, ...]) -> Field:
    """New noise in every snapshot about a smooth mean."""
    mean, size = _smooth(rng, shape, 8.0), 10.0 ** uniform(rng, -8.0, 0.0)
    return lambda k: mean + size * rng.standard_normal(shape)


def correlated(rng: np.random.Generator, shape: tuple[int, ...]) -> Field:
    """Noise that remembers, smooth over some cells."""
    memory, width = uniform(rng, 0.3, 0.98), uniform(rng, 0.0, 4.0)
    mean, size = _smooth(rng, shape, 8.0), 10.0 ** uniform(rng, -6.0, 0.0)
    state = np.zeros(shape)

    def field(k: int) -> Array:
        nonlocal state
        fresh = scipy.ndimage.gaussian_filter(rng.standard_normal(shape), width, mode="wrap")
        state = memory * state + np.sqrt(1.0 - memory**2) * fresh
        return mean + size * state

    return field


def travelling(rng: np.random.Generator, shape: tuple[int, ...]) -> Field:
    """A few smooth waves that travel, each at its own speed."""
    waves = [
        (_smooth(rng, shape, uniform(rng, 2.0, 8.0)), uniform(rng, -3.0, 3.0)) for _ in range(3)
    ]
    return lambda k: sum(_moved(w, speed * k) for w, speed in waves)


def decaying(rng: np.random.Generator, shape: tuple[int, ...]) -> Field:
    """Modes of any wave length that die out at rates of their own."""
    modes = [
        (
            _smooth(rng, shape, uniform(rng, 0.0, 6.0)),
            uniform(rng, 0.4, 0.999),
            rng.choice([-1.0, 1.0]),
        )
        for _ in range(5)
    ]
    rest = _smooth(rng, shape, 8.0)
    return lambda k: rest + sum(w * (sign * rate) ** k for w, rate, sign in modes)


def growing(rng: np.random.Generator, shape: tuple[int, ...]) -> Field:
    """A smooth mode that grows over decades, resolved by the grid, and saturates."""
    mode, rate = _smooth(rng, shape, uniform(rng, 4.0, 8.0)), uniform(rng, 1.1, 1.8)
    rest, size = _smooth(rng, shape, 8.0), 10.0 ** uniform(rng, -6.0, -1.0)
    return lambda k: rest + mode * (a := size * rate**k) / (1.0 + a)


def front(rng: np.random.Generator, shape: tuple[int, ...]) -> Field:
    """A front that runs through the field, a few cells thick, and may steepen."""
    speed, thick, steepens = uniform(rng, 0.2, 3.0), uniform(rng, 1.5, 6.0), uniform(rng, 0.0, 0.05)
    along = np.arange(shape[0]).reshape([-1] + [1] * (len(shape) - 1))
    bend = 3.0 * _smooth(rng, shape, 6.0)

    def field(k: int) -> Array:
        width = max(0.8, thick * (1.0 - steepens * k))
        return np.tanh((along + bend - speed * k) / width)

    return field


def switched(rng: np.random.Generator, shape: tuple[int, ...]) -> Field:
    """At rest, then something sets in midway and saturates; or comes and goes."""
    mode, rest = _smooth(rng, shape, uniform(rng, 1.0, 6.0)), _smooth(rng, shape, 8.0)
    start, time, swings = pick(rng, 5, 25), uniform(rng, 2.0, 20.0), rng.random() < 0.5

    def field(k: int) -> Array:
        if k < start:
            return rest
        x = (k - start) / time
        return rest + mode * (np.sin(x) if swings else 1.0 - np.exp(-x))

    return field


KINDS = {k.__name__: k for k in (white, correlated, travelling, decaying, growing, front, switched)}


def made(number: int, seed: int) -> tuple[str, Run]:
    """The kind and the run with a number."""
    rng = np.random.default_rng([seed, number, 90210])
    kind = list(KINDS)[number % len(KINDS)]
    shape = (pick(rng, 48, 128),) if rng.random() < 0.5 else (pick(rng, 24, 36), pick(rng, 24, 36))
    field, store = KINDS[kind](rng, shape), str(rng.choice(_STORES))
    stride = pick(rng, 1, 100)
    gaps = (
        rng.integers(max(1, stride // 2), 2 * stride, size=60)
        if rng.random() < 0.2
        else [stride] * 60
    )
    steps = np.cumsum(gaps).tolist()
    scale, noise = 10.0 ** uniform(rng, -3.0, 3.0), 1e-16
    count = pick(rng, 24, 48)
    snapshots = [
        Stored(
            steps[k],
            0.1 * steps[k],
            {"f": stored(scale * (field(k) + noise * rng.standard_normal(shape)), store)},
        )
        for k in range(count)
    ]
    return kind, Run(snapshots, Truth("healthy"))


def judged(number: int, seed: int) -> tuple[str, bool, bool, str]:
    """Kind of a run, whether it was alarmed and whether suspected for long, and why."""
    kind, run = made(number, seed)
    said = list(follow(run))
    alarm = next((s for s in said if s.verdict.condition in ("runaway", "overflowed")), None)
    swollen = sum(s.verdict.condition == "swelling" for s in said)
    return kind, alarm is not None, swollen > CALM, alarm.verdict.why if alarm else ""


def patience(number: int, seed: int) -> tuple[str, int, int]:
    """Long noise, white or correlated: snapshots, and how often suspicion set in."""
    rng = np.random.default_rng([seed, number, 65537])
    kind, shape = ("white", "correlated")[number % 2], (96,)
    field = KINDS[kind](rng, shape)
    snapshots = [Stored(10 * k, float(k), {"f": field(k)}) for k in range(LONG_SNAPSHOTS)]
    calm, begun = True, 0
    for s in follow(Run(snapshots, Truth("healthy"))):
        now = s.verdict.condition in ("gathering", "quiet")
        begun += calm and not now
        calm = now
    return kind, LONG_SNAPSHOTS, begun


def upper_limit(events: int, trials: int, confidence: float = 0.95) -> float:
    """One-sided upper limit of a rate (Clopper and Pearson 1934)."""
    if events >= trials:
        return 1.0
    return float(scipy.stats.beta.ppf(confidence, events + 1, trials - events))


def report(seed: int, jobs: int, runs: int = RUNS) -> str:
    """The table of short runs and what long noise showed."""
    played = list(spread_out(judged, [(k, seed) for k in range(runs)], jobs, "short runs").values())
    lines = [f"{'short healthy runs':20s} {'runs':>5s} {'runaway':>8s} {'swelling>3':>10s}"]
    for kind in [*KINDS, "all"]:
        some = [p for p in played if kind in ("all", p[0])]
        alarms, swollen = sum(p[1] for p in some), sum(p[2] for p in some)
        lines.append(f"{kind:20s} {len(some):5d} {alarms:8d} {swollen:10d}")
    alarms = sum(p[1] for p in played)
    limit = upper_limit(alarms, len(played))
    lines.append(f"false alarms: {alarms} of {len(played)}; below {limit:.2%} with 95 % confidence")
    lines += sorted({f"  {p[0]}: {p[3]}" for p in played if p[1]})[:10]
    long = spread_out(patience, [(k, seed) for k in range(LONG)], jobs, "long runs").values()
    for kind in ("white", "correlated"):
        snapshots = sum(n for k, n, _ in long if k == kind)
        begun = sum(b for k, _, b in long if k == kind)
        lines.append(f"long {kind} noise: {begun} suspicion(s) in {snapshots} snapshots")
    return "\n".join(lines)


def _smooth(rng: np.random.Generator, shape: tuple[int, ...], width: float) -> Array:
    """Noise smoothed over so many cells, periodic, size about one."""
    values = scipy.ndimage.gaussian_filter(rng.standard_normal(shape), width, mode="wrap")
    return values / max(float(values.std()), 1e-12)


def _moved(values: Array, cells: float) -> Array:
    """Shifted along the first axis by any number of cells, through its Fourier series."""
    turns = np.fft.fftfreq(values.shape[0]).reshape([-1] + [1] * (values.ndim - 1))
    wave = np.fft.fft(values, axis=0) * np.exp(-2j * np.pi * turns * cells)
    return np.fft.ifft(wave, axis=0).real
