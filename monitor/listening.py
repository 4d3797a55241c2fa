"""What a history (a number that the solver prints as it goes) has come to: a fold over its samples.

Its verdict has the words of a snapshot's, for this number alone. `runaway` is called only where the
settings declare the history an alarm: a single number has no wavelength to tell a numerical growth
from one that is just what the run computes.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from msgspec.structs import replace

from monitor.bounding import Gaps, Side, nearing
from monitor.config import AlarmSection
from monitor.growthlog.records import Condition, Estimate, Verdict
from monitor.wording import factor_text, number, steps_text
from probes.forecast import Range
from probes.histories import Growth, Track
from probes.spec import HistorySpec

# Samples before a history is judged quiet.
_FEWEST = 8
# Growth that is not found again is forgotten after this share of the stretch on which it was seen.
_FORGOTTEN = 0.5
# Distances to a bound are thinned so that the whole stretch stays in view.
_THINNED = 96
_LN_LARGEST = 709.78
_LADDER: tuple[Condition, ...] = ("gathering", "quiet", "swelling", "runaway", "overflowed")


class Listener:
    """One history since it began. `verdict` is always that of the last sample taken.

    samples: finite or not, in this stretch. last: (x, time or None, value) of the last one.
    """

    def __init__(self, name: str, spec: HistorySpec, alarm: AlarmSection) -> None:
        self._name, self._spec, self._alarm = name, spec, alarm
        self.begin()

    def begin(self) -> None:
        """A new stretch: the run was restarted, or its text file begun again."""
        alarm = self._alarm
        self._track = Track(alarm.decades, alarm.straight, alarm.run_length)
        self._growth: Growth | None = None
        self._gaps: dict[Side, _Thinned] = {}
        self._bad = 0
        self._print = ""
        self.samples = 0
        self.x = -math.inf
        self.value = math.nan
        self.per = "line"
        self.verdict = Verdict(condition="gathering")

    @property
    def level(self) -> float | None:
        return self._track.level

    @property
    def floor(self) -> float | None:
        return self._track.floor

    @property
    def print(self) -> str:
        """How the last value stands in the file, where it is no usual number."""
        return self._print

    def take(self, step: float, value: float, unit: float, odd: str = "") -> None:
        """One sample. step: NaN where the file has none, then lines are counted. A step below the
        last one begins a new stretch; of several samples of one step the first counts."""
        x = step if math.isfinite(step) else float(self.samples)
        if x < self.x and self.samples:
            self.begin()
        self.samples += 1
        self.per = "step" if math.isfinite(step) else "line"
        self._print = odd
        if not math.isfinite(value):
            self.x, self.value = x, value
            self._bad = self._alarm.calm
            self._track.interrupt()
            self._growth = None
        elif x > self.x:
            self.x, self.value = x, value
            self._bad = max(0, self._bad - 1)
            found = self._track.add(x, value, unit)
            if found is not None and (found.straight or not self._alarming()):
                self._growth = found
            elif self._growth is not None:
                seen = self._growth
                if x - seen.at > _FORGOTTEN * seen.span:
                    self._growth = None
            for side, gap in self._distances():
                self._gaps.setdefault(side, _Thinned()).add(x, gap)
        self._judge()

    # --- the verdict --------------------------------------------------------------------

    def _alarming(self) -> bool:
        return self._growth is not None and self._growth.straight

    def _judge(self) -> None:
        alarmed = self.verdict.alarmed
        condition: Condition = "quiet" if self.samples >= _FEWEST else "gathering"
        new = Verdict(condition=condition, field=self._name)
        declared: Condition = "runaway" if self._spec.alarm else "swelling"
        if self._bad:
            new = self._overflowed()
        elif broken := self._broken():
            new = Verdict(condition=declared, kind="numerical", field=self._name, why=broken)
        elif self._growth is not None:
            condition = declared if self._growth.straight else "swelling"
            new = self._growing(self._growth, condition)
        elif neared := self._neared():
            new = Verdict(condition="swelling", kind="undetermined", field=self._name, why=neared)
        past = self._spec.alarm and _LADDER.index(new.condition) >= _LADDER.index("runaway")
        self.verdict = replace(new, alarmed=alarmed or past)

    def _overflowed(self) -> Verdict:
        if self._print:
            why = f"{self._name} is printed as {self._print} at {self.per} {self.x:.0f}"
        else:
            why = f"{self._name} was no finite number less than {self._alarm.calm} lines ago"
        return Verdict(condition="overflowed", kind="numerical", field=self._name, why=why)

    def _growing(self, growth: Growth, condition: Condition) -> Verdict:
        factor = Estimate(_exp(growth.slope), _exp(growth.low), _exp(growth.high), 0.9)
        line = " on a straight line" if growth.straight else ""
        tenfold = math.log(10.0) / growth.slope
        why = (
            f"{self._name}: its changes grew ×{number(_exp(growth.rise), 3)}{line} over "
            f"{growth.span:.0f} {self.per}s, {factor_text(Estimate(factor.value))} per {self.per}, "
            f"tenfold every {number(tenfold, 3)}"
        )
        size = math.log(abs(self.value)) if self.value != 0.0 else -math.inf
        return Verdict(
            condition=condition,
            kind="numerical" if condition == "runaway" else "undetermined",
            field=self._name,
            why=why,
            factor=factor,
            onset=(int(growth.onset[0]), int(growth.onset[1])),
            ruin=_estimate(self._until(growth, size, "the growing part is the value itself")),
            overflow=_estimate(self._until(growth, _LN_LARGEST, "it is there")),
        )

    def _until(self, growth: Growth, size: float, reached: str) -> Range:
        """Steps from now until the growing part has this size (ln)."""
        if growth.low <= 0.0:
            return Range.none("the growth rate's interval reaches down to no growth")
        since = self.x - growth.at
        least, most = size - growth.size[1], size - growth.size[0]
        if most - growth.slope * since <= 0.0:
            return Range.none(reached)
        ends = least / growth.high - since, most / growth.low - since
        middle = 0.5 * (least + most) / growth.slope - since
        return Range(max(0.0, middle), max(0.0, ends[0]), max(0.0, ends[1]), 0.8)

    # --- bounds -------------------------------------------------------------------------

    def _distances(self) -> Sequence[tuple[Side, float]]:
        low, high = self._spec.min, self._spec.max
        below: list[tuple[Side, float]] = [("min", self.value - low)] if low is not None else []
        above: list[tuple[Side, float]] = [("max", high - self.value)] if high is not None else []
        return below + above

    def _broken(self) -> str:
        for side, gap in self._distances():
            if gap < 0.0:
                moves, where = ("falls", "below") if side == "min" else ("rises", "above")
                bound = number(self._spec.min if side == "min" else self._spec.max)
                return f"{self._name} {moves} to {number(self.value)}, {where} its bound {bound}"
        return ""

    def _neared(self) -> str:
        for side, gaps in self._gaps.items():
            left = gaps.nearing(self._alarm.run_length)
            if left is not None:
                moves = "falls" if side == "min" else "rises"
                bound = number(self._spec.min if side == "min" else self._spec.max)
                return (
                    f"{self._name} {moves} towards its bound {bound}, which it reaches in "
                    f"{steps_text(left, self.per)} at this rate"
                )
        return ""


class _Thinned:
    """Distances to a bound over the whole stretch, ever more widely spaced, and an answer that is
    renewed with every point kept."""

    def __init__(self) -> None:
        self._gaps = Gaps()
        self._every, self._seen = 1, 0
        self._renewed = True
        self._left: Estimate | None = None

    def add(self, x: float, gap: float) -> None:
        self._seen += 1
        if self._seen % self._every:
            return
        self._gaps = self._gaps.and_then(x, gap)
        if len(self._gaps.x) > _THINNED:
            whole = self._gaps
            self._gaps = Gaps(whole.x[::-2][::-1], whole.gap[::-2][::-1], whole.least, whole.most)
            self._every *= 2
        self._renewed = True

    def nearing(self, run_length: float) -> Estimate | None:
        if self._renewed:
            self._renewed, self._left = False, nearing(self._gaps, run_length)
        return self._left


def _exp(value: float) -> float:
    return math.exp(min(700.0, value))


def _estimate(r: Range) -> Estimate:
    return Estimate(r.value, r.low, r.high, r.coverage, r.reason)
