"""What a review says of a growth log."""

from __future__ import annotations

import json

import pytest
from msgspec.structs import replace

from monitor.growthlog.records import (
    Closed,
    Condition,
    Estimate,
    History,
    Intent,
    Outcome,
    PinRecord,
    PulseChange,
    Remark,
    Skipped,
    Verdict,
    Worst,
)
from monitor.review import best_growth, deeds, summarise
from tests.monitor.made_log import FACTOR, alarmed_run, contents, evidence, opened, segment, snap

KEYS = {
    "schema",
    "run",
    "condition",
    "pulse",
    "kind",
    "alarmed",
    "alarm_step",
    "onset_step",
    "field",
    "growth_per_step",
    "growth_interval",
    "cells_per_wavelength",
    "part",
    "region",
    "contamination",
    "local_contamination",
    "steps_to_ruin",
    "steps_to_overflow",
    "last_clean_snapshot",
    "evidence",
    "snapshots",
    "skipped",
    "segment",
    "segments",
}


def test_the_object_has_the_agreed_keys_and_is_plain_json() -> None:
    """Every key is there, and neither NaN nor infinity is written as a bare word."""
    made = summarise(contents(alarmed_run())).json_object()
    assert set(made) >= KEYS
    assert json.loads(json.dumps(made, allow_nan=False)) == made


def test_an_alarmed_run_is_told_from_its_alarm_snapshot() -> None:
    """Alarm at snapshot 33 (step 660), onset between 280 and 420, values as recorded there."""
    made = summarise(contents(alarmed_run())).json_object()
    assert made["alarmed"] is True
    assert (made["alarm_step"], made["onset_step"]) == (660, 350)
    assert (made["run"], made["field"], made["kind"]) == ("cooling plate", "T", "numerical")
    assert made["condition"] == "runaway"
    assert made["local_contamination"] == pytest.approx(1e-6)
    assert made["contamination"] == pytest.approx(1e-7)
    assert made["cells_per_wavelength"] == 2.1
    assert made["steps_to_ruin"] == {
        "value": 700.0,
        "low": 600.0,
        "high": 800.0,
        "coverage": 0.8,
        "reason": "",
    }
    assert made["snapshots"] == 58
    assert "1.02" in str(made["evidence"])


def test_the_factor_is_the_narrowest_one_while_growth_is_free() -> None:
    """In the made log intervals narrow with time; the last record below a local contamination of a
    tenth is snapshot 60 (1e-6 times 1.02 ** 540 is 4.4e-2)."""
    growth = summarise(contents(alarmed_run())).growth
    assert growth.low == pytest.approx(FACTOR - 0.004 / 30)


def test_growth_that_is_no_longer_free_does_not_count() -> None:
    """A narrow interval from a ruined field is left aside."""
    alarm = snap(
        4,
        "runaway",
        evidence_=evidence(1e-5),
        alarmed=True,
        field="T",
        factor=Estimate(1.02, 1.01, 1.03, 0.8),
    )
    ruined = snap(
        5,
        "runaway",
        evidence_=evidence(0.5),
        alarmed=True,
        field="T",
        factor=Estimate(1.001, 1.0009, 1.0011, 0.8),
    )
    assert best_growth([alarm, ruined], alarm).value == 1.02


def test_without_a_box_on_the_cells_the_worst_tile_is_the_region() -> None:
    """Tile 3 of part a (40 x 30 cells in 16 x 16 tiles, two along axis 1) is row 1, column 1."""
    review = summarise(contents(alarmed_run()))
    assert review.region.box == ((16, 32), (16, 30))
    assert (review.region.part, review.region.source) == ("a", "tile")
    assert any("whole tile" in caution for caution in review.cautions)


def test_tiles_are_numbered_over_all_parts() -> None:
    """Part a has 3 x 2 tiles, so tile 7 is the second of part b."""
    records = alarmed_run()
    alarm = next(r for r in records if getattr(getattr(r, "verdict", None), "alarmed", False))
    at = records.index(alarm)
    records[at] = replace(alarm, evidence=evidence(1e-6, (Worst(7, 1.0, FACTOR),)))
    review = summarise(contents(records))
    assert (review.region.box, review.region.part) == (((0, 16), (16, 30)), "b")


def test_a_box_found_on_the_cells_wins() -> None:
    """The box that crops gave one snapshot after the alarm is reported, not the tile."""
    records = alarmed_run()
    later = records[34]
    records[34] = replace(
        later,
        evidence=replace(later.evidence, where=("T", "b"), box=((3, 9), (11, 14))),
    )
    review = summarise(contents(records))
    assert (review.region.box, review.region.source) == (((3, 9), (11, 14)), "cells")
    assert review.json_object()["part"] == "b"
    assert review.json_object()["region"] == [[3, 9], [11, 14]]


def test_a_kept_pin_is_the_last_clean_snapshot() -> None:
    """A pinned clean checkpoint is preferred to a later clean file that nobody keeps, which the
    review names too."""
    pinned = PinRecord(
        seq=70,
        at=200.0,
        pin="p3",
        state="kept",
        folder="pins/p3",
        files=("T_000240.npy",),
        step=240,
        sha256="cd" * 32,
        method="copy",
        verified=True,
    )
    review = summarise(contents([*alarmed_run(), pinned]))
    assert review.json_object()["last_clean_snapshot"] == {
        "step": 240,
        "path": "pins/p3/T_000240.npy",
        "pinned": True,
        "sha256": "cd" * 32,
    }
    assert review.later is not None
    assert review.later.step == 360


def test_a_pin_taken_after_the_onset_is_not_clean() -> None:
    """Kept does not mean clean: a pin of step 640 is one snapshot before the alarm."""
    late = PinRecord(seq=70, at=200.0, pin="p", state="kept", folder="pins/p", files=(), step=640)
    clean = summarise(contents([*alarmed_run(), late])).clean
    assert clean is not None
    assert (clean.step, clean.pinned) == (360, False)


def test_a_quiet_run_is_told_without_an_alarm() -> None:
    """No alarm, no onset, no factor; the last quiet snapshot is clean; a caution says that no
    alarm is no proof."""
    records = [opened(1), segment(2), *(snap(n) for n in range(3, 20))]
    review = summarise(contents(records))
    made = review.json_object()
    assert made["alarmed"] is False
    assert (made["alarm_step"], made["onset_step"], made["growth_per_step"]) == (None, None, None)
    assert made["last_clean_snapshot"] == {
        "step": 380,
        "path": "out/T_000380.npy",
        "pinned": False,
        "sha256": "",
    }
    assert "no alarm is no proof of stability" in review.cautions


@pytest.mark.parametrize("records", [[], [opened(1)], [opened(1), segment(2)]])
def test_a_log_without_snapshots_is_gathering(records: list) -> None:
    """An empty or just opened log is reviewed, not refused."""
    made = summarise(contents(records)).json_object()
    assert (made["condition"], made["snapshots"], made["alarmed"]) == ("gathering", 0, False)
    assert made["last_clean_snapshot"] is None


def test_the_first_alarmed_segment_is_chosen() -> None:
    """A restart that stays quiet does not hide the alarm before it; both segments are listed."""
    restart = [segment(80, 2, "restart"), *(snap(80 + n, index=n, seg=2) for n in range(1, 9))]
    review = summarise(contents([*alarmed_run(), *restart]))
    assert review.segment == 1
    assert [(s.number, s.alarmed, s.snapshots) for s in review.segments] == [
        (1, True, 58),
        (2, False, 8),
    ]
    assert review.segments[1].why == "restart"


def test_the_last_segment_is_chosen_where_none_alarmed() -> None:
    """Two quiet segments: the later one is told."""
    records = [
        opened(1),
        segment(2),
        *(snap(n) for n in range(3, 9)),
        segment(9, 2, "restart"),
        *(snap(n, index=n - 9, seg=2) for n in range(10, 14)),
    ]
    assert summarise(contents(records)).segment == 2


def test_steps_that_nobody_knows_are_counted_in_snapshots() -> None:
    """Files without a step: places are snapshot numbers, and the review says so."""
    records = [opened(1), segment(2), *(snap(n, steps=False) for n in range(3, 9))]
    review = summarise(contents(records))
    assert review.per == "snapshot"
    assert review.json_object()["segments"][0]["last_step"] == 8  # type: ignore[index]
    assert any("per snapshot" in caution for caution in review.cautions)


def test_deeds_pair_intents_with_outcomes() -> None:
    """Attempts under one id are one deed with the last outcome; no outcome is "open"."""
    got = deeds(
        [
            Intent(seq=1, at=1.0, act="command", id="r1", target="scancel"),
            Intent(seq=2, at=5.0, act="command", id="r1", target="scancel", attempt=2),
            Outcome(seq=3, at=6.0, act="command", id="r1", outcome="failed", detail="status 1"),
            Intent(seq=4, at=7.0, act="stop-file", id="r2", target="STOP"),
        ]
    )
    assert [(d.act, d.attempts, d.outcome, d.detail) for d in got] == [
        ("command", 2, "failed", "status 1"),
        ("stop-file", 1, "open", ""),
    ]


def test_failed_and_open_deeds_are_cautions() -> None:
    """Somebody reading the review learns that the stop did not work."""
    records = [*alarmed_run(), Intent(seq=90, at=9.0, act="stop-file", id="r", target="STOP")]
    assert any("stop-file STOP" in c for c in summarise(contents(records)).cautions)


def test_what_the_log_lost_is_said() -> None:
    """Bad lines, a torn end, skipped snapshots, trouble remarks and a missing closing record are
    all cautions; a closed log has none of them."""
    skipped = Skipped(seq=91, at=9.0, path="a.npy", reason="missed", detail="gone")
    trouble = Remark(seq=92, at=9.0, text="file system not answering", level="trouble")
    told = "\n".join(
        summarise(contents([*alarmed_run(), skipped, trouble], bad_lines=2, torn=True)).cautions
    )
    for part in ("2 line(s)", "torn", "without being judged", "not answering", "closing record"):
        assert part in told
    closed = Closed(seq=93, at=10.0, why="the run ended", status=10)
    ended = summarise(contents([*alarmed_run(), closed]))
    assert ended.ended == "the run ended"
    assert not any("closing record" in c for c in ended.cautions)


def test_a_cadence_too_coarse_for_the_growth_is_said() -> None:
    """Ruin in 50 steps with snapshots every 20: detected, not predicted."""
    hurried = snap(
        40, "runaway", evidence_=evidence(1e-3), alarmed=True, ruin=Estimate(50.0, 40.0, 60.0, 0.8)
    )
    records = [opened(1), segment(2), snap(39), hurried]
    assert any("detected, not predicted" in c for c in summarise(contents(records)).cautions)
    assert not any(
        "detected, not predicted" in c for c in summarise(contents(alarmed_run())).cautions
    )


def test_overflow_is_told_with_its_non_finite_numbers() -> None:
    """An overflowed field has an infinite extreme; the object still is valid JSON, and the review
    counts as overflowed even if nothing alarmed before."""
    burst = snap(40, "overflowed", evidence_=evidence(), factor=Estimate("inf", 1.0, "inf", 0.8))
    review = summarise(contents([opened(1), segment(2), snap(39), burst]))
    assert review.overflowed
    assert not review.alarmed
    assert json.loads(json.dumps(review.json_object(), allow_nan=False))["growth_per_step"] == "inf"


def test_the_pulse_is_the_last_one_recorded() -> None:
    """`arriving` until the log says otherwise."""
    assert summarise(contents(alarmed_run())).pulse == "arriving"
    stalled = PulseChange(seq=95, at=11.0, pulse="stalled")
    assert summarise(contents([*alarmed_run(), stalled])).pulse == "stalled"


def test_an_interval_without_an_upper_end_is_no_interval() -> None:
    """growth_interval is two numbers or null, never half of one."""
    alarm = snap(4, "runaway", alarmed=True, factor=Estimate(1.02, 1.01, None, 0.8))
    made = summarise(contents([opened(1), segment(2), snap(3), alarm])).json_object()
    assert made["growth_interval"] is None
    assert made["growth_per_step"] == 1.02


def heard(seq: int, step: int, condition: Condition, **verdict: object) -> History:
    return History(
        seq=seq,
        at=100.0 + seq,
        name="energy",
        file="f",
        sample=step,
        step=step,
        value=5.0,
        verdict=Verdict(condition=condition, field="energy", **verdict),  # type: ignore[arg-type]
    )


def test_an_alarm_of_a_history_alone() -> None:
    """A run that was stopped between two snapshots: alarmed, with the history's words, and what was
    written before its growth began is clean."""
    records = [opened(1), segment(2), *(snap(n) for n in range(3, 20))]
    why = "energy: its changes grew"
    records += [
        heard(20, 390, "quiet"),
        heard(21, 395, "runaway", alarmed=True, kind="numerical", why=why, onset=(250, 300)),
        heard(22, 400, "quiet", alarmed=True),
    ]
    review = summarise(contents(records))
    assert review.alarmed
    assert review.turn is None
    assert review.clean is not None
    assert review.clean.step == 240
    told = " ".join(review.text().split())
    assert "alarm of the history energy alone" in told
    assert "first alarm: energy 5 at step 395, runaway: its changes grew" in told
    assert "no alarm is no proof" not in told
    (made,) = review.json_object()["histories"]
    assert (made["name"], made["step"], made["condition"], made["alarmed"]) == (
        "energy",
        400,
        "quiet",
        True,
    )


def test_a_history_that_is_only_told() -> None:
    """No alarm, and every checkpoint is as clean as without it."""
    records = [opened(1), segment(2), *(snap(n) for n in range(3, 20))]
    records += [heard(20, 390, "swelling", why="energy: its changes grew")]
    review = summarise(contents(records))
    assert not review.alarmed
    assert review.clean is not None
    assert review.clean.step == 380
    assert "energy 5 at step 390, swelling" in " ".join(review.text().split())
