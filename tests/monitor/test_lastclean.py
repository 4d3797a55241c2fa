"""Which checkpoint counts as clean."""

from __future__ import annotations

import math

import pytest
from msgspec.structs import replace

from monitor.growthlog.records import Estimate, PinRecord, Snapshot
from monitor.lastclean import (
    clean_files,
    clean_pins,
    clean_reason,
    kept_pins,
    tolerance,
    traced_back,
)
from tests.monitor.made_log import alarmed_run, evidence, snap


def run_of(records: list) -> tuple[list[Snapshot], Snapshot | None]:
    snaps = [r for r in records if isinstance(r, Snapshot)]
    return snaps, next((s for s in snaps if s.verdict.alarmed), None)


def pin(name: str, step: int | None, state: str = "kept", seq: int = 900) -> PinRecord:
    return PinRecord(
        seq=seq,
        at=1.0,
        pin=name,
        state=state,
        folder=f"pins/{name}",
        files=("T.npy",),
        step=step,
        sha256="ab" * 32,
        verified=True,
    )


def test_without_a_size_the_last_clean_file_lies_before_the_onset() -> None:
    """Onset between 280 and 420, snapshots every 20 steps, nothing known of how large the growing
    part is: the last clean one is that of 260."""
    snaps, turn = run_of(alarmed_run())
    assert turn is not None
    blind = replace(turn, evidence=evidence(), verdict=replace(turn.verdict, factor=None))
    early = [replace(s, evidence=evidence()) for s in snaps if s.seq < turn.seq]
    assert clean_files([*early, blind], blind)[-1].step == 260


def test_the_growing_part_is_traced_back_from_the_alarm() -> None:
    """At the alarm (step 660) it is at most 2e-6 and grows by at least 1.0187 a step: 1e-8 lies
    ln(200) / ln(1.0187) = 287 steps back, so that step 360 is clean and 380 is not."""
    snaps, turn = run_of(alarmed_run())
    assert turn is not None
    assert clean_files(snaps, turn)[-1].step == 360
    at_360 = next(s for s in snaps if s.step == 360)
    assert traced_back(at_360, turn) == pytest.approx(2e-6 / (1.02 - 0.004 / 3) ** 300, rel=1e-6)


def test_all_the_ripple_bounds_a_part_without_a_size() -> None:
    """Where the alarm gives no size, the whole ripple, in one tile, is the most it can be; without
    levels or without growth nothing can be traced back."""
    snaps, turn = run_of(alarmed_run())
    assert turn is not None
    channel = replace(turn.evidence.channels[0], ripple=-18.0, vary=2.0)
    sized = replace(turn, evidence=replace(turn.evidence, local=None, channels=(channel,)))
    bound = traced_back(turn, sized)
    assert bound == pytest.approx(30.0 * math.exp(-20.0))
    flat = replace(sized, verdict=replace(turn.verdict, factor=Estimate(1.01, 0.99, 1.03, 0.9)))
    assert traced_back(snaps[0], flat) is None


def test_a_swelling_snapshot_below_the_tolerance_is_clean_too() -> None:
    """A growing part of 3e-9 is under the default 1e-8 (a number of the project's design)."""
    quiet, small, alarm = (
        snap(3),
        snap(4, "swelling", evidence_=evidence(3e-9)),
        snap(5, "runaway", evidence_=evidence(1e-6), alarmed=True, onset=(70, 80)),
    )
    assert [c.step for c in clean_files([quiet, small, alarm], alarm)] == [60, 80]


def test_the_alarm_itself_and_what_follows_are_never_clean() -> None:
    """Even with an onset beyond them, no snapshot from the alarm on is offered."""
    snaps, turn = run_of(alarmed_run())
    assert turn is not None
    assert max(c.step for c in clean_files(snaps, turn)) < turn.step


def test_a_name_used_again_is_not_offered() -> None:
    """Two alternating files: the clean content is gone unless it was pinned."""
    names = ("even.npy", "odd.npy")
    snaps = [snap(n, path=names[n % 2]) for n in range(3, 9)]
    alarm = snap(9, "runaway", path=names[1], alarmed=True, onset=(130, 150))
    assert clean_files([*snaps, alarm], alarm) == []
    pins = clean_pins([pin("p1", 80), pin("p2", 140)], [*snaps, alarm], alarm)
    assert [(c.step, c.pinned, c.path) for c in pins] == [(80, True, "pins/p1/T.npy")]


def test_a_pin_between_two_judged_snapshots_is_judged_by_the_next() -> None:
    """Checkpoints with a cadence of their own: step 255 is clean as 260 is, 375 is not."""
    snaps, turn = run_of(alarmed_run())
    got = clean_pins([pin("a", 255), pin("b", 375), pin("c", None)], snaps, turn)
    assert [c.step for c in got] == [255]


def test_the_last_word_on_a_pin_counts() -> None:
    """A pin that was released is no longer held; the rest come in step order."""
    pins = [
        pin("a", 40, "provisional"),
        pin("b", 20, "provisional"),
        pin("a", 40, "released"),
        pin("c", 10, "provisional"),
        pin("c", 10, "kept"),
    ]
    assert [(p.pin, p.state) for p in kept_pins(pins)] == [("c", "kept"), ("b", "provisional")]


def test_overflow_out_of_nothing_leaves_out_the_snapshot_just_before() -> None:
    """The step from quiet to non-finite within one stride means that the last quiet one had grown
    unseen."""
    snaps = [snap(n) for n in range(3, 8)]
    burst = snap(8, "overflowed", alarmed=True)
    assert clean_files([*snaps, burst], burst)[-1].step == 6 * 20


def test_a_quiet_run_offers_its_last_quiet_snapshot() -> None:
    """Without an alarm only the condition decides; a swelling last snapshot is not offered."""
    snaps = [snap(3, "gathering"), snap(4), snap(5, "swelling")]
    assert [c.step for c in clean_files(snaps, None)] == [80]
    assert clean_reason(snaps[0], None, snaps) == ""


@pytest.mark.parametrize(
    ("floor", "peak_rounding"),
    [(None, 0.0), (math.log(310.0 * 2.0**-53), 2.0**-53), (math.log(310.0 * 2.0**-24), 2.0**-24)],
)
def test_tolerance_is_the_larger_of_the_fixed_one_and_a_hundred_roundings(
    floor: float | None, peak_rounding: float
) -> None:
    """float64 keeps 1e-8, float32 (unit round-off 2**-24, IEEE 754) gives 6e-6."""
    got = tolerance(snap(3, evidence_=evidence(floor=floor)))
    assert got == pytest.approx(max(1e-8, 100 * peak_rounding), rel=1e-9)


def test_a_share_without_a_value_proves_nothing() -> None:
    """An estimate that carries only a reason is no evidence of cleanness."""
    unknown = snap(4, "swelling", evidence_=evidence())
    alarm = snap(5, "runaway", evidence_=evidence(1e-3), alarmed=True, onset=(60, 100))
    assert clean_reason(unknown, alarm, [unknown]) == ""
    assert Estimate(reason="below the floor").value is None


def test_records_of_a_growing_file_stay() -> None:
    """All snapshots share a name; as records they are told apart and the clean ones offered, as
    overwritten files only the last one would be."""
    snaps, turn = run_of(alarmed_run())
    one = [replace(s, path="channel.h5") for s in snaps]
    assert clean_files(one, turn) == []
    records = [replace(s, record=i) for i, s in enumerate(one)]
    found = clean_files(records, turn)
    assert found[-1].path == "channel.h5"
    assert found[-1].reason.startswith(f"record {len(found) - 1}, ")
    assert found[-1].step < (turn.step if turn is not None and turn.step is not None else 0)
