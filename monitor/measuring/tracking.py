"""Ritz pairs of successive windows: are they the same, and do they grow as they foretell?"""

from __future__ import annotations

import math
from collections import deque

import numpy as np
from numpy.typing import NDArray

from monitor.growthlog.records import Mode
from monitor.measuring.memory import Scaled, Tracked
from monitor.measuring.reading import (
    HIGH,
    Reading,
    floor_in,
    ripple_energy,
    tile_levels,
    wave_angles,
)
from probes import growth, modes

Array = NDArray[np.float64]

# Columns that a view of the differences consists of. The fine one sees boundaries.
VIEWS = {"ripple": ("r8",), "fine": ("r6", "edge"), "bulk": ("bulk",)}
_FEWEST = 3
# Two pairs are the same if their vectors agree (squared cosine), their rates do, and the vector
# grew as its rate foretold. From trials on runs of several solver libraries.
_SAME_VECTOR = 0.9
_SAME_RATE = 0.1
_SAME_VALUE = 0.01
# From as many snapshots with the same value on, a vector tells where the growth is.
_LASTING = 5
_OFF = 0.15
_OFF_SHARE = 0.1
# A pair is looked at if it grows, stands above the noise and is not mostly residual.
_ABOVE_NOISE = 3.0
_RESIDUAL = 0.5
_SMALLEST_SHARE = 1e-8


def find_modes(reading: Reading, stride: int | None, gridded: bool) -> list[Mode]:
    """Growing Ritz pairs of a channel in all views, those that have persisted longest first.

    The energy of the reading becomes that of the leading ripple pair that has persisted.
    """
    if len(reading.memory.differences) < _FEWEST:
        return []
    out = []
    for view, kinds in VIEWS.items():
        if gridded or view == "bulk":
            out += _view(reading, view, kinds, stride)
    return sorted(out, key=lambda m: (-m.held, -m.steady, -m.factor))


def _view(reading: Reading, view: str, kinds: tuple[str, ...], stride: int | None) -> list[Mode]:
    memory = reading.memory
    window = len(memory.differences) - 1
    vectors, exponent = memory.vectors(kinds)
    noise = math.ldexp(reading.noise, -exponent)
    track = memory.tracks.setdefault(view, deque())
    rising = [
        p
        for p in modes.ritz_pairs(vectors, noise)
        if abs(p.value) > 1.0
        and p.size > _ABOVE_NOISE * noise
        and p.residual < _RESIDUAL
        and p.share > _SMALLEST_SHARE
    ]
    # The largest pair is not always the one that grows fastest: look at both.
    chosen = rising[:2]
    chosen += [p for p in sorted(rising, key=lambda p: -abs(p.value))[:2] if p not in chosen]
    tracked, out = [], []
    for pair in chosen:
        size = math.log(pair.size) + exponent * math.log(2.0)
        here = Tracked(pair.value, size, _direction(pair.vectors(vectors)))
        compare(here, track, window)
        tracked.append(here)
        out.append(_mode(reading, view, pair, here, stride))
    track.append(tracked)
    while len(track) > window:
        track.popleft()
    return out


def _direction(vectors: Array) -> NDArray[np.float32]:
    """The vectors at unit size, which single precision holds whatever their own size is."""
    return (vectors / max(float(np.abs(vectors).max(initial=0.0)), 1e-300)).astype(np.float32)


def compare(here: Tracked, track: deque[list[Tracked]], window: int) -> None:
    """Look for the same pair a whole window earlier, and take up its history of one snapshot ago.

    track: pairs of the last snapshots, newest last. Fills match, gain, foretold, kept, held, grown
    and steady.
    """
    for old in track[-1] if track else ():
        if abs(old.value - here.value) <= _SAME_VALUE * abs(here.value):
            here.steady = max(here.steady, old.steady + 1)
    if len(track) < window:
        return
    rate = math.log(abs(here.value))
    for old in track[-window]:
        if old.basis.shape[0] != here.basis.shape[0]:
            continue
        match = modes.likeness(old.basis.astype(np.float64), here.basis.astype(np.float64))
        steady = abs(math.log(abs(old.value)) / rate - 1.0) < _SAME_RATE
        if match > here.match and (steady or here.match == 0.0):
            here.match, here.gain, here.foretold = match, here.size - old.size, window * rate
            off = abs(here.gain - here.foretold)
            here.kept = steady and match > _SAME_VECTOR and off <= _OFF + _OFF_SHARE * here.foretold
    if not here.kept:
        return
    here.held, here.grown = window, here.gain
    for old in track[-1]:
        near = abs(math.log(abs(old.value)) / rate - 1.0) < _SAME_RATE
        if near and old.held and old.held + 1 > here.held:
            here.held, here.grown = old.held + 1, old.grown + here.size - old.size


def _mode(
    reading: Reading, view: str, pair: modes.RitzPair, here: Tracked, stride: int | None
) -> Mode:
    per_step = 1.0 / (stride or 1)
    size = abs(pair.value)
    doubt = max(pair.residual, 1e-4)
    cells, angles, amplitude = _shape(reading, pair, here)
    negative = pair.value.real < 0.0 and abs(pair.value.imag) <= 1e-9 * size
    nearly = pair.value.real < 0.0 and abs(pair.value.imag) < 0.2 * size and stride == 1
    return Mode(
        f=reading.memory.name,
        re=pair.value.real,
        im=pair.value.imag,
        factor=size**per_step,
        low=max(size - doubt, 1e-300) ** per_step,
        high=(size + doubt) ** per_step,
        residual=pair.residual,
        share=pair.share,
        span=len(reading.memory.differences),
        view="bulk" if view == "bulk" else "ripple",
        cells=cells,
        axes=angles,
        held=here.held,
        match=here.match,
        gain=here.gain,
        foretold=here.foretold,
        grown=here.grown,
        steady=here.steady,
        amp=amplitude,
        odd=bool(nearly or (negative and stride is not None and stride % 2 == 1)),
    )


def _shape(
    reading: Reading, pair: modes.RitzPair, here: Tracked
) -> tuple[float | None, tuple[float, ...], float | None]:
    """Wavelength, angle per axis and ln rms size in the field of a Ritz vector, from its levels."""
    memory, positions = reading.memory, reading.positions
    top = max(d.exponent for d in memory.differences)
    real, imaginary = (
        tile_levels(memory, _combined(list(memory.differences), part, top), positions)
        for part in (pair.weights.real, pair.weights.imag)
    )
    per_tile = np.hypot(real, imaginary)
    pooled = {n: growth.pool(per_tile[:, g], positions[:, g]) for n, g in reading.groups.items()}
    # Rounding noise of every difference enters with its weight.
    noise = float(np.linalg.norm(pair.weights)) * floor_in(reading.record.floor, top)
    angles = wave_angles(pooled, noise, memory.axes)
    cells = growth.cells_per_wavelength(angles)
    energy, _ = ripple_energy(per_tile, reading)
    lasting = here.held > 0 or here.steady >= _LASTING
    if lasting and cells is not None and float(energy.sum()) > 0.0:
        reading.energy = energy
    sizes = [
        pooled[f"r{HIGH}.{a}"] / math.sin(angle / 2.0) ** HIGH
        for a, angle in zip(memory.axes, angles, strict=True)
        if angle > 0.0
    ]
    if not sizes:
        return cells, angles, None
    doubt = max(pair.residual, 1e-4)
    size = modes.size_in_field(max(sizes), pair.value, doubt)
    if size is None or size <= 0.0:
        return cells, angles, None
    return cells, angles, math.log(size) + top * math.log(2.0)


def _combined(differences: list[Scaled], weights: Array, exponent: int) -> tuple[Array, ...]:
    """Linear combination of differences, part by part, in one scale."""
    scaled = [d.at(exponent) for d in differences]
    return tuple(
        np.sum([w * d[part] for w, d in zip(weights, scaled, strict=True)], axis=0)
        for part in range(len(scaled[0]))
    )
