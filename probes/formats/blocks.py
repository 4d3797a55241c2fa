"""Plain reading of contiguous numbers in blocks: what most formats come down to."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from probes.errors import NotYet, ReadError, Refused
from probes.snapshot import FieldInfo

KINDS = "fciub"


class ByteSource(Protocol):
    """Anything that fills a buffer: a file, a member of an archive."""

    def readinto(self, buffer: memoryview, /) -> int | None: ...


def fill(source: ByteSource, buffer: memoryview, where: str) -> None:
    """Fill a whole buffer. Raises NotYet where the data end early, ReadError where they fail."""
    at = 0
    while at < len(buffer):
        try:
            got = source.readinto(buffer[at:])
        except OSError as error:
            raise ReadError(f"cannot be read ({error.strerror or error})", where) from error
        if not got:
            raise NotYet("the data end early", where)
        at += got


def contiguous_slabs(
    source: ByteSource, info: FieldInfo, planes: int, where: str
) -> Iterator[NDArray[np.generic]]:
    """Slabs of an array that lies in `source` from here on, in storage order.

    The buffer is used again for the next slab.
    """
    shape, dtype = info.stored_shape, np.dtype(info.dtype)
    plane = math.prod(shape[1:]) * dtype.itemsize
    planes = max(1, min(planes, shape[0]))
    buffer = bytearray(planes * plane)
    for at in range(0, shape[0], planes):
        n = min(planes, shape[0] - at)
        view = memoryview(buffer)[: n * plane]
        fill(source, view, where)
        yield np.frombuffer(view, dtype=dtype).reshape(n, *shape[1:])


def usable(name: str, shape: tuple[int, ...], dtype: np.dtype[np.generic]) -> str:
    """Why an array cannot be a field ("" if it can): its kind, its emptiness, its axes."""
    if dtype.kind not in KINDS or dtype.hasobject:
        return f"{name!r} left out: {dtype.str} holds no numbers"
    if math.prod(shape) < 2:
        return f"{name!r} left out: {'empty' if 0 in shape else 'a single number'}"
    if len(shape) > 5:
        return f"{name!r} left out: {len(shape)} axes"
    return ""


STEP_NAMES = ("step", "iteration", "it", "nstep", "cycle", "n")
TIME_NAMES = ("time", "t", "sim_time")


def clock_value(
    wanted: str,
    names: tuple[str, ...],
    attribute: Callable[[str], float | None],
    dataset: Callable[[str], float | None],
) -> float | None:
    """Step or time as the settings say: "auto" tries the usual names as attribute and dataset.

    Raises Refused where something is named and missing.
    """
    if wanted in ("none", "name"):
        return None
    if wanted == "auto":
        for name in names:
            for look in (attribute, dataset):
                value = look(name)
                if value is not None:
                    return value
        return None
    kind, _, name = wanted.partition(":")
    value = attribute(name) if kind == "attribute" else dataset(name)
    if value is None:
        raise Refused(f"there is no {kind} {name!r} with a number", remedy="see [snapshots] step")
    return value


def whole(value: float | None) -> int | None:
    """A step as integer; None for what is no whole number."""
    if value is None or not math.isfinite(value) or value != round(value):
        return None
    return round(value)
