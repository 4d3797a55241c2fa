"""The verdict on one history, from samples made by hand."""

from __future__ import annotations

import math
from collections.abc import Iterable

import pytest

from monitor.config import AlarmSection
from monitor.growthlog.records import Verdict
from monitor.listening import Listener
from probes.spec import HistorySpec

ALARM = AlarmSection()


def listener(**about: object) -> Listener:
    return Listener("energy", HistorySpec(path="run.log", column=1, **about), ALARM)


def fold(
    one: Listener, values: Iterable[float], unit: float = 1e-9, first: int = 0
) -> list[Verdict]:
    """One sample per step, from step `first` on."""
    out = []
    for step, value in enumerate(values, first):
        one.take(float(step), value, unit)
        out.append(one.verdict)
    return out


def growing(steps: int = 400) -> list[float]:
    return [100.0 + 1e-6 * 1.05**k for k in range(steps)]


def test_growth_is_told_and_alarms_only_where_declared() -> None:
    """The same growth: `swelling` of undetermined kind, or an alarm of the run."""
    told, declared = listener(), listener(alarm=True)
    only, alarm = fold(told, growing()), fold(declared, growing())
    first = next(i for i, v in enumerate(only) if v.condition == "swelling")
    assert {v.condition for v in only[:first]} == {"gathering", "quiet"}
    assert not any(v.alarmed for v in only)
    assert only[-1].kind == "undetermined"
    turn = next(v for v in alarm if v.alarmed)
    assert turn.condition == "runaway"
    assert turn.kind == "numerical"
    assert turn.factor is not None
    assert math.log(turn.factor.value) == pytest.approx(math.log(1.05), rel=0.02)
    assert "on a straight line" in turn.why
    assert "1.05 per step" in turn.why


def test_ruin_and_overflow_are_foretold() -> None:
    """Until the growing part is as large as the value, and until double precision ends: the true
    steps, by the formula of the series, lie in the ranges."""
    one = listener()
    rate = math.log(1.05)
    ruin = math.log(100.0 / 1e-6) / rate
    overflow = (math.log(1.797e308) - math.log(1e-6)) / rate
    told = 0
    for step, value in enumerate(growing(340)):
        one.take(float(step), value, 1e-9)
        verdict = one.verdict
        if verdict.ruin is None or verdict.ruin.value is None or verdict.overflow is None:
            continue
        told += 1
        slack = 0.02 * (ruin - step) + 8.0
        assert verdict.ruin.low - slack <= ruin - step <= verdict.ruin.high + slack
        slack = 0.02 * (overflow - step) + 8.0
        assert verdict.overflow.low - slack <= overflow - step <= verdict.overflow.high + slack
    assert told > 50


@pytest.mark.parametrize(
    ("value", "odd"), [(math.nan, "NaN"), (math.inf, "Inf"), (math.nan, "***")]
)
def test_what_is_not_finite(value: float, odd: str) -> None:
    """Reported at once, with how it was printed; an alarm only where declared; over after as many
    finite lines as for snapshots, but for the latch."""
    for declared in (False, True):
        one = listener(alarm=declared)
        fold(one, [1.0] * 20)
        one.take(20.0, value, 0.0, odd)
        assert one.verdict.condition == "overflowed"
        assert odd in one.verdict.why
        assert one.verdict.alarmed is declared
        fold(one, [1.0] * (ALARM.calm - 1), first=21)
        assert one.verdict.condition == "overflowed"
        fold(one, [1.0], first=20 + ALARM.calm)
        assert one.verdict.condition == "quiet"
        assert one.verdict.alarmed is declared


def test_bounds() -> None:
    """The way to a bound is a warning with a range, its crossing is told or alarms."""
    one = listener(min=0.0, alarm=True)
    values = [0.9 * (1.0 - k / 300.0) for k in range(320)]
    verdicts = fold(one, values)
    warned = next(i for i, v in enumerate(verdicts) if v.condition == "swelling")
    assert 100 < warned < 200
    assert "falls towards its bound 0, which it reaches in" in verdicts[warned].why
    turn = next(i for i, v in enumerate(verdicts) if v.alarmed)
    assert values[turn] < 0.0 <= values[turn - 1]
    assert "below its bound 0" in verdicts[turn].why
    plain = fold(listener(max=1.0), [0.5] * 20 + [1.5])
    assert plain[-1].condition == "swelling"
    assert not plain[-1].alarmed


def test_growth_that_ends_is_forgotten() -> None:
    """Half of the stretch later, when nothing grows any more."""
    one = listener(alarm=True)
    fold(one, growing(300))
    assert one.verdict.condition == "runaway"
    last = growing(300)[-1]
    after = fold(one, [last + 1e-3 * (k % 2) for k in range(400)], first=300)
    assert after[-1].condition == "quiet"
    assert after[-1].alarmed


def test_a_restart_begins_a_new_stretch() -> None:
    """A step that goes back: gathered anew, the latch open again."""
    one = listener(alarm=True)
    fold(one, growing(300))
    one.take(100.0, 100.0, 1e-9)
    assert one.verdict == Verdict(condition="gathering", field="energy")


def test_of_several_values_of_a_step_the_first_counts() -> None:
    """As of inner iterations; but none that is not finite is passed over."""
    one = listener()
    for step in range(30):
        for value in (1.0 + step, 1e-9, -5.0):
            one.take(float(step), value, 1e-12)
    assert one.value == 30.0
    assert one.verdict.condition == "quiet"
    one.take(29.0, math.nan, 0.0, "NaN")
    assert one.verdict.condition == "overflowed"


def test_without_steps_lines_are_counted() -> None:
    """And the words say so."""
    one = listener()
    for value in growing():
        one.take(math.nan, value, 1e-9)
    assert "per line" in one.verdict.why
