"""Decide: a pure fold over evidence records.

`decide(state, evidence, ...)` sees records exactly as the growth log holds them, so the live guard
and a later rehearsal of the log cannot differ.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import msgspec
import numpy as np

from monitor import bounding
from monitor.config import AlarmSection
from monitor.growthlog.records import (
    Channel,
    Condition,
    Estimate,
    Evidence,
    Kind,
    Mode,
    Verdict,
)
from probes import forecast
from probes.growth import Fit, fit_line, late_slope
from probes.onset import rising, straight_rise
from probes.spec import FieldSpec

# Quiet snapshots after which suspicion is dropped.
_SUSPICION = 2
# Levels kept per field; older ones are thinned by dropping every second.
_KEPT = 512
# A level has to stand this far above its rounding floor (in ln) to count.
OVER_FLOOR = math.log(6.0)
# A pair has to make up this much of the ripple of the last difference.
SHARE = 0.4
# The same for a pair whose sign alternates, which nothing resolved does.
_ODD_SHARE = 0.02
# A value that came up in as many snapshots in a row, with so small a residual, share and growth per
# snapshot, is no accident of the noise.
_STEADY = 5
# A persisting pair has to show its value in as many snapshots in a row.
_SAME_VALUE = 3
_STEADY_RESIDUAL = 0.05
_STEADY_SHARE = 0.03
_STEADY_VALUE = 1.25
# A resolved growth, seen in the bulk of the last snapshots, drags products of itself along: with
# quadratic and cubic terms they are two and three times shorter and grow two and three times as
# fast. Growth up to so many times as fast as the bulk, which rises by at least this (ln) on a
# straight line and is no ripple itself, is explained by it.
_PARENT_POINTS = 7
_PARENT_FEWEST = 4
_PARENT_RISE = math.log(1.8)
_PARENT_STRAIGHT = 0.1
_PARENT_FASTER = 3.4
_PARENT_OVER_RIPPLE = 1.0
# A pair that has grown by so much (ln) at one and the same factor may be that many cells longer,
# and longer still with this share of the growth along one face: what lives at a boundary dies away
# from it and so looks longer than it is.
_LONG_GROWN = 3.0 * math.log(10.0)
_LONGER_CELLS = 1.5
_AT_A_FACE = 0.9
# Doubt of a pair's rate: a share below, and above this (dim / 4 in three dimensions) over the
# e-foldings that it has grown, which count as so many at least.
_PAIR_BELOW = 0.01
_PAIR_ABOVE = 0.75
_PAIR_GROWN = 5.0
# Longest wavelength, in cells, up to which growth is suspicious though not damning.
_DOUBTFUL_CELLS = 6.5
_DOUBLE_LARGEST = 709.78


class Series(msgspec.Struct, frozen=True):
    """Levels of one field over the segment: x (step or count), then natural logarithms."""

    x: tuple[float, ...] = ()
    ripple: tuple[float | None, ...] = ()
    bulk: tuple[float | None, ...] = ()
    floor: tuple[float | None, ...] = ()
    cells: tuple[float | None, ...] = ()


class State(msgspec.Struct, frozen=True):
    """What the decision remembers of a segment. Serialisable as it is."""

    seen: int = 0
    condition: Condition = "gathering"
    kind: Kind = "none"
    alarmed: bool = False
    calm: int = 0
    series: dict[str, Series] = {}
    dts: tuple[float, ...] = ()
    gaps: dict[str, bounding.Gaps] = {}


def start() -> State:
    """State at the beginning of a segment."""
    return State()


@dataclass(frozen=True)
class Finding:
    """One piece of evidence for growth. weight orders findings; condition is what it calls for."""

    condition: Condition
    kind: Kind
    field: str
    why: str
    weight: float
    factor: Estimate | None = None
    cells: float | None = None
    onset: tuple[int, int] | None = None


def decide(
    state: State,
    evidence: Evidence,
    step: int | None,
    index: int,
    alarm: AlarmSection,
    fields: Mapping[str, FieldSpec],
) -> tuple[State, Verdict]:
    """Fold one evidence record in. step None: `index` (snapshots of the segment) counts instead."""
    x = float(step if step is not None else index)
    series = {
        c.f: _appended(state.series.get(c.f, Series()), x, c, evidence.uneven)
        for c in evidence.channels
    }
    dts = (*state.dts, evidence.dt)[-32:] if evidence.dt is not None else state.dts
    gaps = bounding.followed(state.gaps, x, evidence, fields)
    state = msgspec.structs.replace(state, seen=state.seen + 1, series=series, dts=dts, gaps=gaps)
    per = "step" if step is not None else "snapshot"
    findings = [
        *_not_finite(evidence),
        *_bounds(bounding.judged(gaps, evidence, fields, alarm.run_length, per)),
        *_collapsing(state.dts),
        *(f for name in series for f in _lines(name, series[name], evidence, alarm, fields)),
        *_tile_line(evidence, alarm, x),
        *_modes(evidence, series, alarm, fields, x),
        *_heard(evidence),
    ]
    return _settle(state, evidence, findings, alarm)


def _settle(
    state: State, evidence: Evidence, findings: list[Finding], alarm: AlarmSection
) -> tuple[State, Verdict]:
    """From findings to the condition, with its memory."""
    ladder: tuple[Condition, ...] = ("gathering", "quiet", "swelling", "runaway", "overflowed")
    base: Condition = "quiet" if state.seen >= 4 else "gathering"
    best = max(findings, key=lambda f: (ladder.index(f.condition), f.weight), default=None)
    called = max([base, *(f.condition for f in findings)], key=ladder.index)
    condition, calm = called, 0
    if ladder.index(called) < ladder.index(state.condition) and state.condition != "gathering":
        calm = state.calm + 1
        needed = _SUSPICION if state.condition == "swelling" else alarm.calm
        if state.condition == "overflowed" or calm < needed:
            condition = state.condition
        else:
            calm = 0
    alarmed = state.alarmed or condition in ("runaway", "overflowed")
    kind: Kind = best.kind if best is not None else "none"
    if condition != called and best is None:
        kind = state.kind
    why = best.why if best is not None else ""
    if condition != called:
        why = f"{condition} until {needed} quiet snapshots have passed ({calm} so far)"
    verdict = Verdict(condition=condition, kind=kind, alarmed=alarmed, why=why)
    if best is not None:
        verdict = msgspec.structs.replace(
            verdict,
            field=best.field,
            factor=best.factor,
            cells=best.cells,
            onset=best.onset,
            **_headroom(evidence, best),
        )
    new = msgspec.structs.replace(state, condition=condition, kind=kind, alarmed=alarmed, calm=calm)
    return new, verdict


def _headroom(evidence: Evidence, best: Finding) -> dict[str, Estimate | None]:
    """Steps to ruin and to overflow, as ranges or reasons."""
    local, factor = evidence.local, best.factor
    if factor is None or not isinstance(factor.value, float) or best.kind == "resolved":
        return {}
    low = factor.low if isinstance(factor.low, float) else factor.value
    high = factor.high if isinstance(factor.high, float) else factor.value
    if local is None or not isinstance(local.value, float):
        reason = local.reason if local is not None else "the growing part has no size yet"
        return {"ruin": Estimate(reason=reason), "overflow": Estimate(reason=reason)}
    ruin = forecast.steps_until(local.value, factor.value, low, high, 2.0)
    channel = next((c for c in evidence.channels if c.f == best.field), None)
    overflow = forecast.Range.none("the size of the field is not known")
    if channel is not None and channel.vary is not None:
        largest = channel.top if channel.top is not None else _DOUBLE_LARGEST
        size = channel.vary + math.log(local.value)
        overflow = forecast.steps_until(
            math.exp(max(-700.0, size - largest)), factor.value, low, high, 2.0
        )
    return {"ruin": _estimate(ruin), "overflow": _estimate(overflow)}


def _estimate(r: forecast.Range) -> Estimate:
    return Estimate(r.value, r.low, r.high, r.coverage, r.reason)


def _appended(s: Series, x: float, c: Channel, uneven: bool) -> Series:
    # Uneven strides weight each mode differently in every difference; the ripple of the snapshots
    # themselves does not depend on the stride.
    ripple = c.own if uneven else c.ripple
    out = Series(
        (*s.x, x), (*s.ripple, ripple), (*s.bulk, c.bulk), (*s.floor, c.floor), (*s.cells, c.cells)
    )
    if len(out.x) > _KEPT:
        half = _KEPT // 2
        keep = [*range(0, half, 2), *range(half, len(out.x))]
        out = Series(*(tuple(v[i] for i in keep) for v in msgspec.structs.astuple(out)))
    return out


# --- findings -------------------------------------------------------------------------------


def _not_finite(evidence: Evidence) -> list[Finding]:
    """Non-finite values beyond the mask."""
    out = []
    for c in evidence.channels:
        if c.bad:
            place = ""
            if evidence.bad_at is not None and evidence.bad_at[0] == c.f:
                place = f", first at {list(evidence.bad_at[2])}"
            why = f"{c.f} holds {c.bad} values that are not finite{place}"
            out.append(Finding("overflowed", "numerical", c.f, why, 1e9))
    return out


def _bounds(told: Iterable[bounding.Told]) -> list[Finding]:
    """Broken bounds alarm, the approach to one is a warning."""
    return [
        Finding("runaway", "numerical", t.field, t.why, 1e6)
        if t.broken
        else Finding("swelling", "undetermined", t.field, t.why, 2.0)
        for t in told
    ]


def _heard(evidence: Evidence) -> list[Finding]:
    """Histories that the settings declare an alarm. What the fields show of it says more."""
    return [
        Finding("runaway", "numerical", h.name, f"history {h.why}", 0.5, onset=h.onset)
        for h in evidence.heard
    ]


def _collapsing(dts: tuple[float, ...]) -> list[Finding]:
    """An adaptive step that shrinks and shrinks, or a clock that stands still."""
    if len(dts) >= 2 and dts[-1] <= 0.0 and dts[-2] <= 0.0:
        why = "the solver's time has not advanced over the last two snapshots"
        return [Finding("swelling", "undetermined", "", why, 5.0)]
    if len(dts) < 8:
        return []
    usual = float(np.median(dts[:-4]))
    last = dts[-4:]
    if usual > 0 and last[-1] < 0.1 * usual and all(b < a for a, b in itertools.pairwise(last)):
        why = f"the time step collapses: {last[-1]:.3g} against {usual:.3g} usually"
        return [Finding("swelling", "undetermined", "", why, 5.0)]
    return []


def _lines(
    name: str, s: Series, evidence: Evidence, alarm: AlarmSection, fields: Mapping[str, FieldSpec]
) -> list[Finding]:
    """Rises of the whole field's ripple level."""
    tail = 0
    for r in reversed(s.ripple):
        if r is None:
            break
        tail += 1
    if tail < 6:
        return []
    x = np.array(s.x[-tail:])
    y = np.array([v if v is not None else -math.inf for v in s.ripple[-tail:]])
    floor = np.array([v if v is not None else -math.inf for v in s.floor[-tail:]])
    over = y > floor + OVER_FLOOR
    if not over[-1]:
        return []
    recent = _recent_cells(y, s.cells[-tail:], alarm.decades * math.log(10.0))
    cells = float(np.median(recent[-3:])) if recent else None
    # A front that steepens gets shorter while it rises; an amplified error keeps its wavelength.
    short = cells is not None and max(recent) <= min(alarm.cells, 1.3 * min(recent))
    doubtful = cells is not None and cells <= _DOUBTFUL_CELLS
    spec = fields.get(name.split("[")[0])
    line = straight_rise(x, y, over, alarm.decades * math.log(10.0), alarm.straight)
    if line is not None and short and not _explained(line.fit, s, evidence, spec):
        slope, low, high = late_slope(x[line.start :], y[line.start :])
        factor = Estimate(math.exp(slope), math.exp(low), math.exp(high), 0.9)
        why = (
            f"{name}: grid-scale ripple grew ×{math.exp(line.fit.rise):.3g} on a straight line "
            f"over {line.fit.points} snapshots, {factor.value:.5g} per step, "
            f"{cells:.1f} cells long"
        )
        onset = _onset(x, y, floor, line.start, slope)
        return [Finding("runaway", "numerical", name, why, line.fit.rise, factor, cells, onset)]
    found = rising(x, y, alarm.run_length)
    if found is None or found.fit.rise < math.log(3.0):
        return []
    factor = _factor(found.fit.slope, found.fit.error)
    what = (
        f"{name}: grid-scale ripple grows, ×{math.exp(found.fit.rise):.3g} over "
        f"{found.fit.points} snapshots"
    )
    if not doubtful or _explained(found.fit, s, evidence, spec):
        why = what + (f", at a resolved {cells:.1f} cells" if cells is not None else "")
        return [Finding("quiet", "resolved", name, why, 0.0, factor, cells)]
    onset = _onset(x, y, floor, found.start, found.fit.slope)
    return [
        Finding(
            "swelling",
            "undetermined",
            name,
            f"{what}, {cells:.1f} cells long",
            found.fit.rise,
            factor,
            cells,
            onset,
        )
    ]


def _recent_cells(y: np.ndarray, cells: tuple[float | None, ...], fall: float) -> list[float]:
    """Wavelengths of the latest snapshots, back to where the level was lower by `fall` (3 at least
    where there are as many)."""
    lower = np.flatnonzero(y <= y[-1] - fall)
    first = min(int(lower[-1]) if lower.size else 0, len(y) - 3)
    return [c for c in cells[max(0, first) :] if c is not None]


def _factor(slope: float, error: float) -> Estimate:
    return Estimate(
        math.exp(slope), math.exp(slope - 2.0 * error), math.exp(slope + 2.0 * error), 0.9
    )


def _expected(slope: float, evidence: Evidence, spec: FieldSpec | None) -> bool:
    """Whether the user declared this growth (within 20 % of a rate per unit time, or slower)."""
    if spec is None or spec.growth_per_time <= 0.0 or not evidence.dt:
        return False
    return slope / evidence.dt <= 1.2 * spec.growth_per_time


def _explained(fit: Fit, s: Series, evidence: Evidence, spec: FieldSpec | None) -> bool:
    """Whether a rise of the ripple is declared, or goes along with a resolved growth."""
    return _expected(fit.slope, evidence, spec) or _goes_along(fit.slope, s, fit.points)


def _goes_along(slope: float, s: Series, points: int) -> bool:
    """Whether the bulk of the last `points` snapshots (seven at least, where there are as many)
    shows a resolved growth that ripple growing with this slope may be a product of."""
    points = max(points, _PARENT_POINTS)
    known = [(a, b) for a, b in zip(s.x[-points:], s.bulk[-points:], strict=True) if b is not None]
    ripple = s.ripple[-1]
    if len(known) < _PARENT_FEWEST or ripple is None:
        return False
    x, y = np.array(known).T
    parent = fit_line(x, y)
    grows = parent.rise >= _PARENT_RISE and parent.rms <= _PARENT_STRAIGHT * parent.rise
    over = y[-1] - ripple > _PARENT_OVER_RIPPLE
    return bool(grows and over and slope <= _PARENT_FASTER * parent.slope)


def _onset(
    x: np.ndarray, y: np.ndarray, floor: np.ndarray, start: int, slope: float
) -> tuple[int, int]:
    """Interval of the step at which the growth began: from where its line leaves the rounding
    floor, extrapolated backwards, to the first point seen on it."""
    level = y[-1]
    back = (level - floor[-1]) / slope if slope > 0 and math.isfinite(floor[-1]) else 0.0
    high = float(x[start])
    return int(max(0.0, min(high, x[-1] - back))), int(high)


def _tile_line(evidence: Evidence, alarm: AlarmSection, x: float) -> list[Finding]:
    """A straight rise in one tile: earlier where the growth is local, but a wave that arrives does
    the same, so that alone it only raises suspicion."""
    line = evidence.line
    if line is None or line.cells is None or line.cells > alarm.cells - 0.5:
        return []
    per = evidence.stride or 1
    factor = _factor(line.slope / per, 0.02 * line.slope / per)
    why = (
        f"{line.f}: ripple in tile {line.tile} grew ×{math.exp(line.rise):.3g} on a straight line "
        f"over {line.span} snapshots, {line.cells:.1f} cells long"
    )
    onset = (int(max(0.0, x - line.over / line.slope * per)), int(x - line.span * per))
    return [
        Finding(
            "swelling",
            "undetermined",
            line.f,
            why,
            line.rise,
            factor,
            line.cells,
            (min(onset), onset[1]),
        )
    ]


def _modes(
    evidence: Evidence,
    series: Mapping[str, Series],
    alarm: AlarmSection,
    fields: Mapping[str, FieldSpec],
    x: float,
) -> list[Finding]:
    """Ritz pairs that persist between windows and grow as their factor foretells."""
    out = []
    for m in evidence.modes:
        if m.factor <= 1.0 or _expected(
            math.log(m.factor), evidence, fields.get(m.f.split("[")[0])
        ):
            continue
        factor = _pair_factor(m, evidence)
        length = f", {m.cells:.1f} cells long" if m.cells is not None else ""
        onset = _mode_onset(m, evidence, x)
        off = abs(m.gain - m.foretold)
        held = m.held >= alarm.held
        if held and _alternates(m, off):
            why = (
                f"{m.f}: a mode persists over {m.held} snapshots and grows {m.factor:.5g} per "
                f"step{length}, alternating in sign from one snapshot to the next"
            )
            out.append(_alarm(m, why, 100.0 + m.held, factor, onset))
        elif held and _foretold(m, off, alarm):
            why = (
                f"{m.f}: a mode persists over {m.held} snapshots and grows {m.factor:.5g} per "
                f"step{length}"
            )
            along = _goes_along(math.log(m.factor), series[m.f], m.held)
            if _short(m, evidence, alarm) and not along:
                out.append(_alarm(m, why, 100.0 + m.held, factor, onset))
            else:
                out.append(Finding("quiet", "resolved", m.f, why, 1.0, factor, m.cells))
        elif _same_alternation(m):
            why = (
                f"{m.f}: the same factor {m.factor:.5g} per step was found in {m.steady} snapshots "
                f"in a row{length}, alternating in sign from one to the next"
            )
            out.append(_alarm(m, why, 50.0 + m.steady, factor, onset))
    return out


def _pair_factor(m: Mode, evidence: Evidence) -> Estimate:
    """Factor of a pair. A small residual says that it is one of the modes, not that it is the
    fastest: of many near each other the leader falls short by about dim / 4 in as many e-foldings
    as it has grown (Laplace's method), and those are counted from the rounding floor."""
    channel = next((c for c in evidence.channels if c.f == m.f), None)
    grown = m.grown
    if channel is not None and channel.ripple is not None and channel.floor is not None:
        grown = max(grown, channel.ripple - channel.floor)
    rate = math.log(m.factor)
    low = rate * (1.0 - _PAIR_BELOW)
    high = rate * (1.0 + _PAIR_ABOVE / max(grown, _PAIR_GROWN))
    return Estimate(m.factor, min(m.low, math.exp(low)), max(m.high, math.exp(high)), 0.9)


def _alarm(m: Mode, why: str, weight: float, factor: Estimate, onset: tuple[int, int]) -> Finding:
    return Finding("runaway", "numerical", m.f, why, weight, factor, m.cells, onset)


def _foretold(m: Mode, off: float, alarm: AlarmSection) -> bool:
    """Whether a held pair grew as its rate says, by enough to tell, at one and the same value: that
    of a front that forms keeps changing."""
    enough = max(m.grown, 2.0 * m.foretold) >= math.log(10.0)
    same = m.steady >= _SAME_VALUE
    return m.held > alarm.held and enough and same and off <= 0.1 + 0.05 * m.foretold


def _short(m: Mode, evidence: Evidence, alarm: AlarmSection) -> bool:
    """Whether a pair's own ripple is grid-scale.

    In the bulk the little ripple of a pair may be another's, so its wavelength proves nothing; the
    products of a resolved growth (its harmonics) are shorter and grow faster than it does.
    """
    if m.view != "ripple" or m.cells is None or m.share < SHARE:
        return False
    longest = alarm.mode_cells
    if m.grown >= _LONG_GROWN:
        at_a_face = max(evidence.edges.values(), default=0.0) >= _AT_A_FACE
        longest = _DOUBTFUL_CELLS if at_a_face else longest + _LONGER_CELLS
    if m.cells > longest:
        return False
    return not any(
        o.f == m.f
        and o.view == m.view
        and o.share > m.share
        and 1.0 < o.factor < m.factor
        and (o.cells is None or o.cells > _DOUBTFUL_CELLS)
        for o in evidence.modes
    )


def _alternates(m: Mode, off: float) -> bool:
    """Whether a held pair flips its sign as no resolved motion does, and grows nearly as foretold.

    That is evidence at any wavelength; in the bulk, where everything swings, by a decade of growth.
    """
    if m.view == "bulk" and max(m.grown, 2.0 * m.foretold) < math.log(10.0):
        return False
    return (
        m.odd and m.share >= _ODD_SHARE and m.foretold > 0.2 and off <= max(0.15, 0.5 * m.foretold)
    )


def _same_alternation(m: Mode) -> bool:
    """Whether a clearly growing value that flips its sign came up again and again.

    The vector of such a pair may still hold parts of larger, resolved motions, and so look
    different from window to window; its value does not.
    """
    return (
        m.odd
        and m.steady >= _STEADY
        and m.residual <= _STEADY_RESIDUAL
        and m.share >= _STEADY_SHARE
        and abs(complex(m.re, m.im)) >= _STEADY_VALUE
    )


def _mode_onset(m: Mode, evidence: Evidence, x: float) -> tuple[int, int]:
    per = evidence.stride or 1
    first_seen = int(x - m.held * per)
    channel = next((c for c in evidence.channels if c.f == m.f), None)
    if channel is None or channel.ripple is None or channel.floor is None:
        return first_seen, first_seen
    back = (channel.ripple - channel.floor) / math.log(m.factor)
    return int(max(0.0, min(first_seen, x - back))), first_seen
