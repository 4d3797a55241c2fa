"""Do snapshots come? Pure: the time is always given."""

from __future__ import annotations

from monitor.growthlog.records import Pulse
from monitor.wording import duration_text

# Without a setting: so many times the usual spacing, but no sooner than this, seconds.
TIMES = 5.0
SOONEST = 10.0
# Before the spacing is known.
PATIENCE = 600.0


class PulseWatch:
    """stale_s: the setting, 0 for "by the usual spacing". now: when watching began."""

    def __init__(self, stale_s: float, now: float, pulse: Pulse | None = None) -> None:
        self._stale, self._since = stale_s, now
        self.pulse = pulse
        self._seen = 0

    def limit(self, usual: float | None) -> float:
        """Seconds without a snapshot after which the run counts as stalled."""
        if self._stale > 0.0:
            return self._stale
        return max(SOONEST, TIMES * usual) if usual is not None else PATIENCE

    def quiet_for(self, now: float) -> float:
        """Seconds since the last snapshot came, or since watching began."""
        return max(0.0, now - self._since)

    def arrived(self, now: float) -> str | None:
        """A snapshot came. Text of the change to `arriving`, None without one."""
        quiet, self._since = self.quiet_for(now), now
        self._seen += 1
        if self.pulse == "arriving":
            return None
        before, self.pulse = self.pulse, "arriving"
        return f"after {duration_text(quiet)} without a snapshot" if before == "stalled" else ""

    def look(self, now: float, usual: float | None) -> str | None:
        """Time passes. Text of the change to `stalled`, None without one."""
        if self.pulse in ("stalled", "finished") or self.quiet_for(now) < self.limit(usual):
            return None
        self.pulse = "stalled"
        what = "no snapshot" if self._seen else "no snapshot yet"
        usually = f", usually one every {duration_text(usual)}" if usual is not None else ""
        return f"{what} for {duration_text(self.quiet_for(now))}{usually}"
