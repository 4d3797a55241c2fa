"""How a solver stores its numbers: the number type, or so many digits."""

from __future__ import annotations

import numpy as np

from tests.corpus.case import Array

# Names of the ways to store, as cases give them.
STORES = ("f8", "f4", "f2", "3 digits", "3 decimals")


def stored(values: Array, store: str) -> Array:
    """A copy of `values` as a file holds it. Too large for the number type becomes infinite."""
    with np.errstate(all="ignore"):
        if store == "3 digits":
            return significant(np.asarray(values, dtype=np.float64), 3)
        if store == "3 decimals":
            return np.round(np.asarray(values, dtype=np.float64), 3)
        return np.array(values, dtype=np.dtype(store).newbyteorder("<"))


def significant(values: Array, digits: int) -> Array:
    """Rounded to so many significant decimal digits; zero and what is not finite stay."""
    with np.errstate(all="ignore"):
        size = np.floor(np.log10(np.abs(values))) - (digits - 1)
        unit = 10.0 ** np.where(np.isfinite(size), size, 0.0)
        return np.where(np.isfinite(size), np.round(values / unit) * unit, values)


def steps_between(values: Array, store: str) -> Array:
    """Distance of neighbouring numbers in storage, at each of `values` (float64)."""
    if store == "3 decimals":
        return np.full(np.shape(values), 1e-3)
    size = np.abs(np.asarray(values, dtype=np.float64))
    with np.errstate(all="ignore"):
        if store == "3 digits":
            unit = 10.0 ** (np.floor(np.log10(size)) - 2.0)
            return np.where(np.isfinite(unit), unit, 0.0)
        return np.spacing(size.astype(store)).astype(np.float64)


def spacing(store: str) -> float:
    """Relative spacing of stored numbers, for choosing how often to store."""
    return {"f8": 2.0**-52, "f4": 2.0**-23, "f2": 2.0**-10}.get(store, 1e-3)
