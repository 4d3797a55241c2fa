"""Bounds of fields: broken, neared, swung away from; on evidence made by hand."""

from __future__ import annotations

import math

import msgspec
import numpy as np
import pytest

from monitor import bounding, condition
from monitor.config import AlarmSection
from monitor.growthlog.records import Channel, Evidence, Verdict
from monitor.growthlog.write import as_logged
from monitor.rehearse import rehearse
from probes.spec import FieldSpec
from tests.monitor.made_log import opened, segment, snap
from tests.monitor.sketching import follow, settings


def evidence(low: float | str, high: float | str = 3.0, name: str = "h") -> Evidence:
    channel = Channel(f=name, lo=low, hi=high, ripple=-30.0, floor=-36.0, bounded=True)
    return as_logged(Evidence(channels=(channel,), stride=10))


def fold(lows: list[float], spec: FieldSpec, name: str = "h", steps: bool = True) -> list[Verdict]:
    state, out = condition.start(), []
    for i, low in enumerate(lows):
        step = 10 * i if steps else None
        found = evidence(low, name=name)
        state, verdict = condition.decide(state, found, step, i, AlarmSection(), {"h": spec})
        # As guard keeps it between two processes.
        state = msgspec.msgpack.decode(msgspec.msgpack.encode(state), type=condition.State)
        out.append(verdict)
    return out


def falling(count: int = 40, end: float = 300.0) -> list[float]:
    """From 0.9 towards zero, reached at step `end`, with a little noise."""
    rng = np.random.default_rng(4810)
    return [0.9 * (1.0 - 10.0 * i / end) + 1e-3 * rng.standard_normal() for i in range(count)]


def test_the_way_to_a_bound_is_warned_of_before_it_breaks() -> None:
    """A depth that falls to zero at step 300: a warning with a range that holds the true number of
    steps well before, an alarm with its evidence in words at the first negative value."""
    verdicts = fold(falling(), FieldSpec(min=0.0))
    first = next(i for i, v in enumerate(verdicts) if v.condition == "swelling")
    assert first <= 20
    assert "towards its bound 0, which it reaches in" in verdicts[first].why
    assert verdicts[first].kind == "undetermined"
    alarm = next(i for i, v in enumerate(verdicts) if v.alarmed)
    assert alarm == next(i for i, low in enumerate(falling()) if low < 0.0)
    assert verdicts[alarm].condition == "runaway"
    assert verdicts[alarm].kind == "numerical"
    assert "below its bound 0" in verdicts[alarm].why
    assert all(v.condition == "swelling" for v in verdicts[first:alarm])


def test_the_range_holds_the_true_step() -> None:
    """In at least four of five warnings the line's zero, step 300, lies in the range told."""
    gaps = bounding.Gaps()
    held = []
    for i, low in enumerate(falling(30)):
        gaps = gaps.and_then(10.0 * i, low)
        left = bounding.nearing(gaps, 1e5)
        if left is not None:
            held.append(left.low <= 300.0 - 10.0 * i <= left.high)
    assert len(held) >= 8
    assert sum(held) >= 0.8 * len(held)


def test_components_share_the_bounds_of_their_field() -> None:
    """u[1] is judged by [fields.h] of h[1]; the words name the component."""
    verdicts = fold([0.5, 0.4, -0.1], FieldSpec(min=0.0), name="h[1]")
    assert verdicts[-1].alarmed
    assert verdicts[-1].why.startswith("h[1] falls to -0.1")


def test_upper_bounds() -> None:
    """The same at the other end, counted in snapshots where steps are unknown."""
    state, last = condition.start(), None
    fields = {"h": FieldSpec(max=10.0)}
    for i in range(30):
        found = evidence(0.0, 5.0 + 0.15 * i)
        state, last = condition.decide(state, found, None, i, AlarmSection(), fields)
    assert last is not None
    assert last.condition == "swelling"
    assert "largest value" in last.why
    assert "snapshots at this rate" in last.why
    _, last = condition.decide(state, evidence(0.0, 10.2), None, 31, AlarmSection(), fields)
    assert last.alarmed
    assert "above its bound 10" in last.why


def test_a_swinging_field_is_left_alone_after_its_first_swing() -> None:
    """A tide that ebbs towards the bound again and again warns at most during its first ebb."""
    lows = [1.0 + 0.8 * math.cos(2.0 * math.pi * i / 40.0) for i in range(400)]
    verdicts = fold(lows, FieldSpec(min=0.0))
    assert not any(v.condition in ("swelling", "runaway") for v in verdicts[25:])


def test_without_bounds_nothing_is_said() -> None:
    """A falling minimum alone is no news, nor are values that are not finite a broken bound."""
    assert {v.condition for v in fold(falling(), FieldSpec())} == {"gathering", "quiet"}
    gaps = bounding.followed({}, 0.0, evidence("nan", "inf"), {"h": FieldSpec(min=0.0, max=1.0)})
    assert gaps == {}


def test_a_small_offset_from_a_large_bound_is_seen() -> None:
    """Pressure around 101,325 Pa with a bound one pascal below: the log's extremes carry enough
    digits to tell 101,324.2 from the bound."""
    spec = {"h": FieldSpec(min=101_324.0)}
    inside, outside = evidence(101_324.2), evidence(101_323.8)
    for found, broken in ((inside, False), (outside, True)):
        _, verdict = condition.decide(condition.start(), found, 0, 0, AlarmSection(), spec)
        assert verdict.alarmed is broken


def test_bounds_can_be_rehearsed() -> None:
    """A bound that guard did not have is tried on its log: when would it have alarmed?"""
    records = [opened(), segment(2)]
    records += [snap(n, evidence_=evidence(1.0 - 0.05 * n)) for n in range(3, 30)]
    found = rehearse(records, fields={"h": {"min": 0.0}})
    assert found.logged.alarm is None
    assert found.rehearsed.alarm is not None
    assert found.rehearsed.alarm.at == 21 * 20


def test_a_field_that_turns_negative_without_growth() -> None:
    """From cells to verdict: a hump that moves out of a quiet pool leaves a negative depth behind,
    without a trace of exponential growth; the first negative value alarms."""
    x = np.linspace(0.0, 1.0, 64)

    def depth(step: int) -> np.ndarray:
        trough = 0.02 * step * np.exp(-((x - 0.5) ** 2) / 0.02)
        return 0.5 - trough[:, None] * np.ones(48)

    chosen = settings(fields={"h": FieldSpec(min=0.0)})
    snapshots = ((s, None, {"h": depth(s)}) for s in range(40))
    verdicts = [verdict for _, _, verdict, _ in follow(snapshots, chosen)]
    first = next(i for i, v in enumerate(verdicts) if v.alarmed)
    assert depth(first).min() < 0.0 <= depth(first - 1).min()
    assert "below its bound" in verdicts[first].why


@pytest.mark.parametrize("lows", [[290.0] * 30, [290.0 + 40.0 * 0.9**i for i in range(80)]])
def test_resting_on_a_bound_is_no_warning(lows: list[float]) -> None:
    """A plate whose coldest cells are the wall at the bound, or relax towards it."""
    verdicts = fold(lows, FieldSpec(min=290.0))
    assert {v.condition for v in verdicts} == {"gathering", "quiet"}
