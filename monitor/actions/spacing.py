"""Which provisional pins to hold, so that their ages spread. Pure.

An alarm comes some snapshots after the growth began, and nobody knows beforehand how many: few for
a violent instability, dozens to a hundred for one that rises from round-off. So one pin is young
(at most `EVERY` snapshots old), one is old, and one is on its way from the first to the second.

The old one gives way only when the one on its way has reached `OLD` itself, so that from `OLD`
snapshots on there is always a pin at least that old, and at most about twice as old. Before that
the first snapshot is held, and the one on its way starts afresh whenever it has come within half of
the oldest age, so that the ages stay spread. More than three pins repeat this scheme inside, for
ages `INNER` times smaller.
"""

from __future__ import annotations

from collections.abc import Sequence

# A pin is made at every fourth snapshot at most: copying takes no more than a quarter of reading.
EVERY = 4
OLD = 128
INNER = 8


def wanted(ages: Sequence[int], slots: int) -> bool:
    """Whether a pin of the present snapshot should be made.

    ages: of the pins that are held, in snapshots. slots: how many may be held.
    """
    if slots < 1:
        return False
    if not ages:
        return True
    if slots == 1:
        return min(ages) >= OLD // 4
    if min(ages) < EVERY:
        return False
    return surplus([*ages, 0], slots) != len(ages)


def surplus(ages: Sequence[int], slots: int) -> int | None:
    """Index of the pin to let go where more than `slots` are held, else None."""
    if len(ages) <= slots:
        return None
    order = sorted(range(len(ages)), key=lambda i: -ages[i])
    return order[_surplus([ages[i] for i in order], slots, OLD)]


def _surplus(ages: Sequence[int], slots: int, old: int) -> int:
    """Position to let go among more ages than slots, oldest first."""
    if slots <= 1:
        # All but the youngest may go; the youngest stays only where nothing older is held.
        return 0
    oldest, coming = ages[0], ages[1]
    if coming >= old:
        return 0
    if 2 * coming > oldest:
        return 1
    if slots == 2:
        return len(ages) - 1
    if slots == 3:
        return 2
    return 2 + _surplus(ages[2:], slots - 2, max(EVERY, old // INNER))
