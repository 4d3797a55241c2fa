"""The fold over evidence: ladder, latch, and what raises it. Records are made by hand."""

from __future__ import annotations

import math

import msgspec
import pytest

from monitor import condition
from monitor.config import AlarmSection
from monitor.growthlog.records import Channel, Estimate, Evidence, HeardAlarm, Mode, Verdict
from probes.spec import FieldSpec

ALARM = AlarmSection()


def channel(ripple: float = -30.0, cells: float = 2.1, **more: object) -> Channel:
    values = {
        "f": "h",
        "lo": -1.0,
        "hi": 1.0,
        "bulk": -3.0,
        "ripple": ripple,
        "floor": -36.0,
        "cells": cells,
        "vary": 0.0,
        "own": ripple,
    }
    return Channel(**{**values, **more})


def fold(
    evidences: list[Evidence],
    alarm: AlarmSection = ALARM,
    fields: dict[str, FieldSpec] | None = None,
    stride: int = 10,
) -> list[Verdict]:
    state, out = condition.start(), []
    for i, evidence in enumerate(evidences):
        state, verdict = condition.decide(state, evidence, i * stride, i, alarm, fields or {})
        out.append(verdict)
    return out


def level(values: list[float], cells: float = 2.1, dt: float | None = None) -> list[Evidence]:
    """Evidence of one channel whose ripple level takes these values."""
    return [Evidence(channels=(channel(v, cells),), stride=10, dt=dt) for v in values]


def rise(slope: float, count: int, quiet: int = 20) -> list[float]:
    """Alternating small noise, then a straight rise."""
    noise = [-30.0 + 0.05 * (-1) ** i for i in range(quiet)]
    return noise + [-30.0 + slope * i for i in range(1, count)]


def test_too_few_snapshots_are_gathered() -> None:
    """The first three snapshots say nothing."""
    assert [v.condition for v in fold(level([-30.0] * 5))] == [*["gathering"] * 3, *["quiet"] * 2]


def test_two_decades_on_a_line_alarm() -> None:
    """Short ripple that rises by two decades at a constant factor: suspected first, then alarmed,
    with the factor per step and the onset."""
    verdicts = fold(level(rise(0.3, 30)))
    first = next(i for i, v in enumerate(verdicts) if v.condition == "runaway")
    assert any(v.condition == "swelling" for v in verdicts[:first])
    alarm = verdicts[first]
    assert alarm.kind == "numerical"
    assert math.log(alarm.factor.value) == pytest.approx(0.03, rel=0.15)
    assert alarm.onset[0] <= 210
    assert "on a straight line" in alarm.why


def test_resolved_growth_stays_quiet() -> None:
    """The same rise at thirteen cells per wavelength is carried by the grid."""
    verdicts = fold(level(rise(0.3, 30), cells=13.0))
    assert {v.condition for v in verdicts} == {"gathering", "quiet"}
    assert verdicts[-1].kind == "resolved"


def test_a_front_that_steepens_is_no_alarm() -> None:
    """A rise whose wavelength shrinks all the while does not count as one mode."""
    values = rise(0.3, 30)
    cells = [20.0 * 0.9**i for i in range(len(values))]
    evidences = [
        Evidence(channels=(channel(v, c),), stride=10) for v, c in zip(values, cells, strict=True)
    ]
    assert all(v.condition != "runaway" for v in fold(evidences)[:-12])


def test_below_the_floor_nothing_counts() -> None:
    """Ripple that rises with its rounding floor is storage noise."""
    evidences = [Evidence(channels=(channel(v, floor=v - 0.5),), stride=10) for v in rise(0.3, 30)]
    assert {v.condition for v in fold(evidences)} == {"gathering", "quiet"}


def test_declared_growth_is_expected() -> None:
    """A rate per unit time that the user declared never alarms; a faster one does."""
    spec = {"h": FieldSpec(growth_per_time=0.31)}
    evidences = level(rise(0.3, 30), dt=0.1)
    assert all(not v.alarmed for v in fold(evidences, fields=spec))
    slow = {"h": FieldSpec(growth_per_time=0.1)}
    assert any(v.alarmed for v in fold(evidences, fields=slow))


def mode(**more: object) -> Mode:
    values = {
        "f": "h",
        "re": 1.35,
        "im": 0.0,
        "factor": 1.0305,
        "low": 1.03,
        "high": 1.031,
        "residual": 0.01,
        "span": 7,
        "cells": 2.0,
        "held": 7,
        "steady": 7,
        "match": 0.99,
        "gain": 1.8,
        "foretold": 1.8,
        "grown": 2.1,
        "share": 0.9,
        "amp": -20.0,
    }
    return Mode(**{**values, **more})


def one_mode(**more: object) -> Verdict:
    quiet = level([-30.0] * 6)
    return fold([*quiet, Evidence(channels=(channel(),), stride=10, modes=(mode(**more),))])[-1]


def test_a_pair_that_persists_alarms() -> None:
    """A short pair that grows as it foretells is enough, with its own factor."""
    verdict = one_mode()
    assert verdict.condition == "runaway"
    assert verdict.factor.value == 1.0305


@pytest.mark.parametrize(
    "more",
    [
        {"held": 0},
        {"held": 6},
        {"cells": 6.0},
        {"cells": None},
        {"gain": 1.2},
        {"foretold": 0.3, "gain": 0.3, "grown": 0.4},
        {"share": 0.1},
        {"view": "bulk"},
    ],
)
def test_a_doubtful_pair_does_not(more: dict[str, object]) -> None:
    """Not held, resolved, of unknown wavelength, off its rate, hardly grown, small, in the bulk."""
    assert one_mode(**more).condition == "quiet"


def test_alternation_counts_at_any_wavelength() -> None:
    """A sign that flips between snapshots at an odd stride is no resolved motion."""
    assert one_mode(odd=True, re=-1.35, cells=12.0, view="bulk").condition == "runaway"


def test_harmonics_of_a_resolved_growth_are_carried() -> None:
    """A small short pair beside a larger resolved one that grows more slowly is its product."""
    small = mode(share=0.2, factor=1.03)
    large = mode(share=0.8, factor=1.01, cells=11.0, foretold=0.6, gain=0.6, grown=0.8)
    quiet = level([-30.0] * 6)
    evidence = Evidence(channels=(channel(),), stride=10, modes=(large, small))
    assert fold([*quiet, evidence])[-1].condition == "quiet"


def test_non_finite_values_end_it() -> None:
    """overflowed at once, latched, from any condition."""
    bad = Evidence(channels=(channel(bad=3),), stride=10, bad_at=("h", "", (4, 5)))
    verdicts = fold([*level([-30.0] * 3), bad, *level([-30.0] * 30)])
    assert verdicts[3].condition == "overflowed"
    assert verdicts[-1].alarmed
    assert verdicts[-1].condition == "overflowed"


def test_bounds_of_a_field() -> None:
    """A declared bound that is broken alarms without any growth before."""
    fields = {"h": FieldSpec(min=0.0)}
    assert fold(level([-30.0]), fields=fields)[0].condition == "runaway"


def test_suspicion_falls_back_and_the_latch_stays() -> None:
    """After enough calm snapshots the condition is quiet again; an alarm stays latched."""
    pair = Evidence(channels=(channel(),), stride=10, modes=(mode(),))
    verdicts = fold([*level([-30.0] * 6), pair, *level([-30.0] * 20)])
    assert verdicts[6].condition == "runaway"
    assert verdicts[6 + ALARM.calm - 1].condition == "runaway"
    assert verdicts[-1].condition == "quiet"
    assert verdicts[-1].alarmed


def test_a_collapsing_step_and_a_stalled_clock() -> None:
    """An adaptive step that shrinks tenfold, or time that stands still, is suspicious by itself."""
    shrinking = [0.1] * 10 + [0.02, 0.008, 0.003, 0.001]
    evidences = [Evidence(channels=(channel(),), stride=10, dt=d) for d in shrinking]
    assert fold(evidences)[-1].condition == "swelling"
    stalled = [Evidence(channels=(channel(),), stride=10, dt=d) for d in [0.1] * 5 + [0.0, 0.0]]
    assert "has not advanced" in fold(stalled)[-1].why


def test_headroom_is_a_range_or_a_reason() -> None:
    """Ruin and overflow come from the local contamination and the factor's interval."""
    quiet = level([-30.0] * 6)
    sized = Evidence(
        channels=(channel(),), stride=10, modes=(mode(),), local=Estimate(1e-8, 5e-9, 2e-8, 0.8)
    )
    ruin = fold([*quiet, sized])[-1].ruin
    assert ruin.value == pytest.approx(math.log(1e8) / math.log(1.0305))
    assert ruin.low < ruin.value < ruin.high
    unsized = msgspec.structs.replace(sized, local=None)
    assert fold([*quiet, unsized])[-1].ruin.reason != ""


def test_the_state_can_be_stored() -> None:
    """A state that went through bytes decides as the one that did not."""
    evidences = level(rise(0.3, 30))
    state, stored = condition.start(), condition.start()
    for i, evidence in enumerate(evidences):
        state, one = condition.decide(state, evidence, i, i, ALARM, {})
        packed = msgspec.msgpack.encode(stored)
        stored = msgspec.msgpack.decode(packed, type=condition.State)
        stored, other = condition.decide(stored, evidence, i, i, ALARM, {})
        assert one == other


def test_a_factor_that_rounds_to_one_is_no_growth() -> None:
    """A factor of exactly one, as the log may round it, neither alarms nor divides by zero."""
    assert one_mode(factor=1.0, odd=True, steady=9).condition == "quiet"


def test_a_value_that_comes_up_again_and_again_alarms() -> None:
    """An alternating value found five times in a row, with a small residual, is enough; found less
    often, or positive, or hardly growing, it is not."""
    again = {"held": 0, "odd": True, "re": -1.6, "steady": 5, "residual": 0.01, "share": 0.1}
    assert one_mode(**again).condition == "runaway"
    for less in ({"steady": 4}, {"odd": False}, {"re": -1.1}, {"residual": 0.2}, {"share": 1e-4}):
        assert one_mode(**{**again, **less}).condition == "quiet"


def along(times: float) -> list[Verdict]:
    """A resolved growth of 0.1 per snapshot in the bulk, ripple that grows so many times faster."""
    start = [Evidence(channels=(channel(-30.0 + 0.01 * (-1) ** i, bulk=-9.0),)) for i in range(20)]
    rising = [
        Evidence(channels=(channel(-30.0 + 0.1 * times * i, bulk=-9.0 + 0.1 * i),))
        for i in range(1, 60)
    ]
    return fold([msgspec.structs.replace(e, stride=10) for e in start + rising])


@pytest.mark.parametrize("times", [2.0, 3.0])
def test_products_of_a_resolved_growth_are_no_alarm(times: float) -> None:
    """Quadratic and cubic terms of a growing wave grow two and three times as fast as the wave, at
    a half and a third of its length, as sin(x)**2 and sin(x)**3 show; that is no instability."""
    assert not any(v.alarmed for v in along(times))
    assert along(times)[-1].kind == "resolved"


def test_growth_far_faster_than_the_resolved_one_alarms() -> None:
    """What outruns a resolved growth five times is no product of it."""
    assert any(v.alarmed for v in along(5.0))


def test_an_alternating_mode_beside_a_resolved_growth_alarms() -> None:
    """No product of a resolved growth flips its sign from one snapshot to the next."""
    bulk = [channel(-20.0, bulk=-9.0 + 0.1 * i) for i in range(12)]
    before = [Evidence(channels=(c,), stride=10) for c in bulk[:-1]]
    last = Evidence(channels=(bulk[-1],), stride=10, modes=(mode(factor=1.02),))
    assert not fold([*before, last])[-1].alarmed
    odd = msgspec.structs.replace(last, modes=(mode(re=-1.22, odd=True, factor=1.02),))
    assert fold([*before, odd])[-1].alarmed


def test_a_history_that_alarms() -> None:
    """What the settings declare an alarm is one for the run, in the history's words and with its
    onset; what the fields show themselves is told first."""
    heard = HeardAlarm("energy", "energy: its changes grew", (40, 60))
    quiet = msgspec.structs.replace(level([-30.0])[0], heard=(heard,))
    verdict = fold([*level([-30.0] * 6), quiet])[-1]
    assert (verdict.condition, verdict.kind, verdict.alarmed) == ("runaway", "numerical", True)
    assert (verdict.field, verdict.onset) == ("energy", (40, 60))
    assert verdict.why == "history energy: its changes grew"
    both = [msgspec.structs.replace(e, heard=(heard,)) for e in level(rise(0.3, 30))]
    assert fold(both)[-1].field == "h"
