"""Two rules of ten lines each, to compare with: what one would write without thinking long."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np

from tests.corpus.case import Stored


def maximum_rule(snapshots: Iterable[Stored]) -> int | None:
    """Number of the first snapshot whose largest value is above ten times the running median of
    the largest values before, or not finite."""
    largest: list[float] = []
    for number, values in _unmasked(snapshots):
        top = float(np.abs(values).max())
        if not np.isfinite(top) or (largest and top > 10.0 * np.median(largest)):
            return number
        largest.append(top)
    return None


def rising_rule(snapshots: Iterable[Stored]) -> int | None:
    """Number of the first snapshot at which the norm of the difference to the one before has grown
    five times in a row."""
    before, last, rises = None, None, 0
    for number, values in _unmasked(snapshots):
        if before is not None:
            with np.errstate(all="ignore"):
                norm = float(np.linalg.norm(values - before))
            rises = rises + 1 if last is not None and not norm <= last else 0
            if rises >= 5:
                return number
            last = norm
        before = values
    return None


def _unmasked(snapshots: Iterable[Stored]) -> Iterator[tuple[int, np.ndarray]]:
    """Number and all values of each snapshot; what is no number in the first one stays zero."""
    holes = None
    for number, snapshot in enumerate(snapshots):
        values = np.concatenate([v.astype(float).ravel() for v in snapshot.fields.values()])
        holes = np.isnan(values) if holes is None else holes
        yield number, np.where(holes, 0.0, values)
