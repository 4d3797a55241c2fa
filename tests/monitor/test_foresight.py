"""How fast a growth may be to be foreseen, against marching a made growth through the decision."""

from __future__ import annotations

import math

import pytest

from monitor.foresight import foreseeable_growth, foresight_text
from monitor.growthlog.records import Channel, Evidence


def evidence(ripple: float | None = -20.0, stride: int | None = 10, fresh: int = 9) -> Evidence:
    channel = Channel(f="h", lo=-1.0, hi=1.0, ripple=ripple, floor=-36.0, vary=0.0)
    return Evidence(channels=(channel,), stride=stride, fresh=fresh)


def test_eight_snapshots_between_sight_and_a_thousandth() -> None:
    """Growth by the stated factor takes 80 steps from the ripple, or from rounding, to 1e-3."""
    growth = foreseeable_growth(evidence())
    assert growth is not None
    for factor, start in zip(growth, (-20.0, -36.0), strict=True):
        assert start + 80 * math.log(factor) == pytest.approx(math.log(1e-3))


def test_the_field_with_least_room_decides() -> None:
    """One noisy field makes the warning short."""
    one = evidence()
    noisy = Channel(f="u", lo=-1.0, hi=1.0, ripple=-10.0, floor=-36.0, vary=0.0)
    both = Evidence(channels=(*one.channels, noisy), stride=10, fresh=9)
    assert foreseeable_growth(both) == foreseeable_growth(evidence(-10.0))


def test_what_cannot_be_foreseen_is_said() -> None:
    """Ripple near the size of the field; a first snapshot; unknown steps."""
    assert "perhaps" in foresight_text(evidence(-1.0))
    assert "is foreseen" not in foresight_text(evidence(-1.0))
    assert foresight_text(evidence(fresh=1)) == ""
    assert "per snapshot" in foresight_text(evidence(stride=None))
    assert "every step growth" in foresight_text(evidence(stride=1))
    flat = Evidence(channels=(Channel(f="h", lo=0.0, hi=0.0),), stride=10, fresh=9)
    assert foresight_text(flat) == ""
