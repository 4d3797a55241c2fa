"""From a truth and what was said of the snapshots to what the bars speak of. Pure."""

from __future__ import annotations

import bisect
import math
from collections.abc import Sequence
from dataclasses import dataclass

from monitor.growthlog.records import Estimate
from monitor.review import FREE_GROWTH
from tests.corpus.case import Box, Run, Truth, volume
from tests.corpus.running import Said

# The part of the field that an alarm has to be ahead of.
EARLY = 1e-3
# Snapshots between emergence and EARLY that allow an alarm, or at least a suspicion, in time.
ENOUGH, SOME = 12, 6


@dataclass(frozen=True, slots=True)
class Score:
    """One run, scored. Numbers are of snapshots, None where something did not happen.

    alarm, swelling: first snapshot at runaway or overflowed; first one suspected or worse.
    swollen: snapshots at swelling. early: first snapshot whose contamination is not below EARLY.
    rows: snapshots from where what grows is clear of all else to that one. premature: the alarm is
    older than its cause. late: it came with non-finite values. share: contamination at the alarm.
    error, error_at_alarm: |ln estimate / ln factor - 1| of the best and the first estimate;
    covered: whether the best one's interval holds the factor. hit: whether the true peak is in the
    box, ratio: its volume over the truth's. onset: by how many snapshots the first point that was
    said to be of the growth is too early (negative: before it rose above the rounding) or too late
    (after it was clear). ruins: for every range of ruin from the alarm on whether it holds the
    truth, and its width as a factor. at_once: for values out of bounds, whether the alarm came with
    the first of them. why: of the alarm.
    """

    alarm: int | None = None
    swelling: int | None = None
    swollen: int = 0
    early: int | None = None
    rows: int | None = None
    premature: bool = False
    late: bool = False
    share: float | None = None
    error: float | None = None
    error_at_alarm: float | None = None
    covered: bool | None = None
    hit: bool | None = None
    ratio: float | None = None
    onset: int | None = None
    ruins: tuple[tuple[bool, float], ...] = ()
    at_once: bool | None = None
    why: str = ""

    @property
    def in_time(self) -> bool:
        """An alarm after the cause and below EARLY."""
        return self._before_early(self.alarm) and not self.premature

    @property
    def suspected_in_time(self) -> bool:
        return self._before_early(self.swelling)

    def _before_early(self, number: int | None) -> bool:
        return number is not None and (self.early is None or number < self.early)

    @property
    def sight(self) -> str:
        """How much the cadence allowed: "enough", "some" or "sparse"; "" where nothing grew far."""
        if self.rows is None:
            return ""
        return "enough" if self.rows >= ENOUGH else "some" if self.rows >= SOME else "sparse"


def score(run: Run, said: Sequence[Said]) -> Score:
    """Score one run."""
    truth = run.truth
    conditions = [s.verdict.condition for s in said]
    alarm = _first(c in ("runaway", "overflowed") for c in conditions)
    swollen = sum(c == "swelling" for c in conditions)
    why = said[alarm].verdict.why if alarm is not None else ""
    if truth.label == "healthy":
        swelling = _first(c in ("swelling", "runaway", "overflowed") for c in conditions)
        return Score(alarm=alarm, swelling=swelling, swollen=swollen, why=why)
    since = next((k for k, step in enumerate(truth.steps) if step >= (truth.cause or 0)), 0)
    worse = ("swelling", "runaway", "overflowed")
    swelling = _first(c in worse and k >= since for k, c in enumerate(conditions))
    early = _first(v >= EARLY for v in truth.contamination)
    rows = None
    if early is not None:
        # What never rose above everything else before that left no snapshot to see it in.
        rows = max(0, early - truth.clear) if truth.clear is not None else 0
    late = alarm is not None and truth.overflow is not None and alarm >= truth.overflow
    measures = _measures(run, said, alarm) if alarm is not None and alarm >= since else {}
    return Score(
        alarm=alarm,
        swelling=swelling,
        swollen=swollen,
        early=early,
        rows=rows,
        premature=alarm is not None and alarm < since,
        late=late,
        at_once=alarm == truth.broken if truth.broken is not None else None,
        why=why,
        **measures,
    )


def _measures(run: Run, said: Sequence[Said], alarm: int) -> dict[str, object]:
    """What depends on the alarm: sizes, factor, place, onset, ruin."""
    truth = run.truth
    if not truth.contamination:
        return {}
    free = [s for s in said[alarm:] if s.number == alarm or _free(s)]
    out: dict[str, object] = {"share": max(truth.contamination[alarm], truth.floor)}
    out |= _factor(truth, free, said[alarm].verdict.factor)
    out |= _place(run, free)
    onset = said[alarm].verdict.onset
    if onset is not None and truth.emergence is not None and truth.clear is not None:
        first = bisect.bisect_left(truth.steps, onset[1])
        out["onset"] = min(0, first - truth.emergence) + max(0, first - truth.clear)
    out["ruins"] = _ruins(truth, said[alarm:])
    return out


def _factor(truth: Truth, free: Sequence[Said], first: Estimate | None) -> dict[str, object]:
    if truth.factor is None:
        return {}
    told = [e for s in free if (e := s.verdict.factor) is not None and _number(e.value)]
    if not told:
        return {}
    best = min(told, key=_width)
    return {
        "error": log_error(best.value, truth.factor),
        "error_at_alarm": log_error(first.value, truth.factor)
        if first is not None and _number(first.value)
        else None,
        "covered": _number(best.low)
        and _number(best.high)
        and best.low <= truth.factor <= best.high,
    }


def _free(s: Said) -> bool:
    """Whether growth is said to be still free, as a review asks (`monitor.review`)."""
    local = s.evidence.local
    size = local.value if local is not None else None
    return s.verdict.condition == "runaway" and _number(size) and size < FREE_GROWTH


def log_error(told: object, true: float) -> float:
    """|ln told / ln true - 1|, infinite where nothing is said to grow."""
    if not _number(told) or told <= 1.0:  # type: ignore[operator]
        return math.inf
    return abs(math.log(told) / math.log(true) - 1.0)  # type: ignore[arg-type]


def _place(run: Run, free: Sequence[Said]) -> dict[str, object]:
    """The box that a review would tell, against the growing part in the same snapshot: the first
    one from the alarm on with a size of what grows, else the alarm's."""
    for s in [*filter(_free, free), *free]:
        spot = run.truth.spots[s.number]
        box, where = s.evidence.box, s.evidence.where
        if box is None or where is None or spot is None:
            continue
        if not spot.local:
            return {}
        box = moved(box, run, where[1])
        inside = all(lo <= p < hi for p, (lo, hi) in zip(spot.peak, box, strict=True))
        return {"hit": inside, "ratio": volume(box) / volume(spot.box)}
    return {}


def moved(box: Box, run: Run, part: str) -> Box:
    """A box of one part in the cells of the whole field."""
    if part not in run.parts:
        return box
    first = run.parts[part].start
    (lo, hi), *rest = box
    return ((lo + first, hi + first), *rest)


def ruin_step(truth: Truth) -> float | None:
    """Step at which the contamination of the worst tile reaches one, between two snapshots on a
    straight line of its logarithm."""
    for k, (a, b) in enumerate(zip(truth.local, truth.local[1:], strict=False)):
        if a < 1.0 <= b:
            x, y = truth.steps[k], truth.steps[k + 1]
            if a <= 0.0 or not math.isfinite(b):
                return float(y)
            return x + (y - x) * -math.log(a) / (math.log(b) - math.log(a))
    return None


def _ruins(truth: Truth, said: Sequence[Said]) -> tuple[tuple[bool, float], ...]:
    end = ruin_step(truth)
    if end is None:
        return ()
    out = []
    for s in said:
        told = s.verdict.ruin
        left = end - s.step
        if left <= 0.0:
            break
        if told is None or not _number(told.low) or not _number(told.high):
            continue
        width = told.high / told.low if told.low > 0.0 else math.inf
        out.append((told.low <= left <= told.high, width))
    return tuple(out)


def _first(flags: Sequence[bool] | object) -> int | None:
    return next((k for k, flag in enumerate(flags) if flag), None)  # type: ignore[arg-type, var-annotated]


def _number(value: object) -> bool:
    return isinstance(value, int | float) and math.isfinite(value)


def _width(estimate: Estimate) -> float:
    low, high = estimate.low, estimate.high
    return high - low if _number(low) and _number(high) else math.inf  # type: ignore[operator]
