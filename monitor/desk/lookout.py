"""Whether a guard is there. Needs no screen library."""

from __future__ import annotations

from pathlib import Path

from monitor.growthlog.lock import STALE_SECONDS, TOUCH_SECONDS

# How often a log is looked at.
POLL_SECONDS = 0.5


def guard_alive(log: Path, now: float) -> bool:
    """Whether the log's lock is there and was touched lately. From the file's time alone, so that
    it holds for a guard on any host."""
    try:
        touched = log.with_name(f"{log.name}.lock").stat().st_mtime
    except OSError:
        return False
    return now - touched < STALE_SECONDS + TOUCH_SECONDS
