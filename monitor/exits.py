"""Exit statuses, one table for all commands."""

from __future__ import annotations

from enum import IntEnum


class Exit(IntEnum):
    """128 + n is used besides these when signal n ended a command after its closing record.

    Where several apply to guard, the first of these counts: a configured action failed (12),
    overflowed (11), alarm (10), signal (128 + n), nothing readable (3). A failed action comes first
    because somebody has to do by hand what it did not; the alarm behind it is in the log.
    """

    GOOD = 0  # nothing against it
    INTERNAL = 1  # a fault of stepwarden itself
    USAGE = 2  # options or settings cannot be used
    UNREADABLE = 3  # nothing readable was found
    ALARM = 10  # alarm, unstable or unfit
    OVERFLOWED = 11  # non-finite values
    ACTION_FAILED = 12  # a configured action failed
