"""Scores of histories that are written by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest

from monitor.growthlog.records import Channel, Estimate, Evidence, Verdict
from tests.corpus.case import Run, Spot, Stored, Truth
from tests.corpus.running import Said
from tests.corpus.scoring import log_error, ruin_step, score

STRIDE, FACTOR = 10, 1.1
SNAPSHOTS = 40


def sick(**changes: object) -> Run:
    """Contamination 1e-12 at snapshot 0, growing by 1.1 a step, ten steps apart: 1e-3 is reached at
    22, one at 29. Clear of all else from snapshot 8 on, above the rounding from 3 on."""
    share = tuple(1e-12 * FACTOR ** (STRIDE * k) for k in range(SNAPSHOTS))
    values: dict[str, object] = {
        "cause": 0,
        "factor": FACTOR,
        "emergence": 3,
        "clear": 8,
        "contamination": share,
        "local": share,
        "spots": (Spot("u", ((10, 20), (10, 20)), (14, 15), 10_000),) * SNAPSHOTS,
        "steps": tuple(STRIDE * k for k in range(SNAPSHOTS)),
        **changes,
    }
    stored = [Stored(STRIDE * k, float(k), {"u": np.zeros(1)}) for k in range(SNAPSHOTS)]
    return Run(stored, Truth("sick", **values))  # type: ignore[arg-type]


def said(
    conditions: dict[int, str], evidence: dict[str, object] | None = None, **verdict: object
) -> list[Said]:
    """A history that is quiet but from the given snapshots on."""
    out, now = [], "quiet"
    for k in range(SNAPSHOTS):
        now = conditions.get(k, now)
        told = Evidence(channels=(Channel(f="u", lo=0.0, hi=1.0),), **(evidence or {}))  # type: ignore[arg-type]
        extra = verdict if now == "runaway" else {}
        out.append(Said(k, STRIDE * k, told, Verdict(condition=now, **extra)))  # type: ignore[arg-type]
    return out


def test_the_step_of_ruin_lies_on_the_line() -> None:
    """Contamination 1e-12 growing by 1.1 per step is one after ln(1e12) / ln(1.1) steps."""
    assert ruin_step(sick().truth) == pytest.approx(math.log(1e12) / math.log(1.1), rel=1e-6)


def test_an_alarm_in_time() -> None:
    """At snapshot 15 the contamination is 1e-12 1.1**150; 1e-3 is reached at 22, 14 snapshots after
    the growth was clear."""
    s = score(sick(), said({12: "swelling", 15: "runaway"}))
    assert (s.alarm, s.swelling, s.early, s.rows, s.sight) == (15, 12, 22, 14, "enough")
    assert s.in_time
    assert s.share == pytest.approx(1e-12 * 1.1**150)
    assert s.swollen == 3


@pytest.mark.parametrize(
    ("clear", "sight"), [(10, "enough"), (11, "some"), (16, "some"), (17, "sparse")]
)
def test_how_much_the_cadence_allowed(clear: int, sight: str) -> None:
    """Twelve snapshots and more are enough, six are some, fewer sparse."""
    assert score(sick(clear=clear), said({})).sight == sight


def test_an_alarm_too_late_or_too_early() -> None:
    """At 1e-3 an alarm is no longer in time; before the cause it is premature; with values that are
    not finite it is late."""
    assert not score(sick(), said({22: "runaway"})).in_time
    before = score(sick(cause=200), said({15: "runaway"}))
    assert (before.premature, before.in_time, before.share) == (True, False, None)
    assert score(sick(overflow=30), said({30: "overflowed"})).late
    assert not score(sick(overflow=30), said({29: "runaway"})).late
    assert score(sick(), said({})).alarm is None


def test_errors_of_the_factor_are_those_of_its_logarithm() -> None:
    """1.0010 for a true 1.0011 is wrong by nine per cent, not by a hundredth of one."""
    assert log_error(1.001, 1.0011) == pytest.approx(0.0908, abs=1e-3)
    assert log_error(0.999, 1.0011) == math.inf
    assert log_error(None, 1.1) == math.inf


def test_the_narrowest_estimate_of_free_growth_counts() -> None:
    """Of two estimates the one with the narrower interval is taken, and the first is kept apart."""
    history = said({15: "runaway"}, {"local": Estimate(1e-5, 1e-6, 1e-4, 0.8)})
    wide, narrow = Estimate(1.12, 1.0, 1.2, 0.9), Estimate(1.1, 1.099, 1.101, 0.9)
    told = [
        Said(
            s.number,
            s.step,
            s.evidence,
            Verdict(condition=s.verdict.condition, factor=wide if s.number < 17 else narrow),
        )
        for s in history
    ]
    s = score(sick(), told)
    assert s.error == pytest.approx(0.0, abs=1e-12)
    assert s.error_at_alarm == pytest.approx(abs(math.log(1.12) / math.log(1.1) - 1.0))
    assert s.covered


def test_a_box_is_compared_with_the_true_one() -> None:
    """A box twice as long along one axis holds the peak and twice the volume; one beside it holds
    nothing of it; in a part, cells count from the part's first."""
    seen = {"box": ((10, 30), (10, 20)), "where": ("u", "")}
    s = score(sick(), said({15: "runaway"}, seen))
    assert (s.hit, s.ratio) == (True, 2.0)
    beside = {"box": ((0, 10), (10, 20)), "where": ("u", "")}
    assert score(sick(), said({15: "runaway"}, beside)).hit is False
    run = sick()
    parted = Run(run.snapshots, run.truth, parts={"b": slice(10, 50)})
    inside = {"box": ((0, 10), (10, 20)), "where": ("u", "b")}
    assert score(parted, said({15: "runaway"}, inside)).hit is True


def test_the_onset_may_lie_between_the_rounding_and_the_clear() -> None:
    """The first point of the growth is right from snapshot 3 (above the rounding) to 8 (clear of
    all else), and else off by the distance."""
    for first, off in ((3, 0), (6, 0), (8, 0), (1, -2), (12, 4)):
        s = score(sick(), said({15: "runaway"}, onset=(0, STRIDE * first)))
        assert s.onset == off


def test_ranges_of_ruin_are_compared_with_the_true_step() -> None:
    """At snapshot 15 the true ruin is 140 steps away: a range that stays at 100 to 200 steps holds
    it until it is closer than 100, and is as wide as a factor two."""
    s = score(sick(), said({15: "runaway"}, ruin=Estimate(150.0, 100.0, 200.0, 0.8)))
    left = ruin_step(sick().truth) or 0.0
    expected = [
        100.0 <= left - STRIDE * k <= 200.0 for k in range(15, SNAPSHOTS) if left > STRIDE * k
    ]
    assert [held for held, _ in s.ruins] == expected
    assert any(expected)
    assert not all(expected)
    assert {width for _, width in s.ruins} == {2.0}


def test_healthy_runs_have_only_alarms_and_suspicions() -> None:
    """Snapshots at swelling are counted, whether in a row or not."""
    run = Run(sick().snapshots, Truth("healthy"))
    s = score(run, said({5: "swelling", 7: "quiet", 20: "swelling", 23: "quiet"}))
    assert (s.alarm, s.swelling, s.swollen) == (None, 5, 5)
    assert score(run, said({9: "runaway"})).alarm == 9


def test_values_out_of_bounds_are_to_be_alarmed_at_once() -> None:
    """The alarm has to come with the first snapshot out of bounds."""
    run = sick(broken=30, contamination=(), cause=300)
    assert score(run, said({30: "runaway"})).at_once is True
    assert score(run, said({31: "runaway"})).at_once is False
