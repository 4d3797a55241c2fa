"""A stored log of an invented run, with records of every type: what guards wrote once must be
readable for ever. Lines may be added to the file; those that are there never change."""

from __future__ import annotations

from pathlib import Path

import msgspec
import pytest

from monitor.config import Settings
from monitor.growthlog.follow import Follower
from monitor.growthlog.read import decode, read_log
from monitor.growthlog.records import (
    AnyRecord,
    Channel,
    CloseUp,
    Estimate,
    HeardAlarm,
    History,
    Intent,
    Line,
    Mode,
    Opened,
    Outcome,
    PinRecord,
    Segment,
    Skipped,
    Snapshot,
    TileMap,
    Worst,
)
from monitor.growthlog.write import as_logged, encode
from tests.monitor.growthlog.any_records import RECORD_TYPES

SAMPLE = Path(__file__).resolve().parents[2] / "data" / "sample-growth.jsonl"


@pytest.fixture(scope="module")
def records() -> list[AnyRecord]:
    return read_log(SAMPLE).records


def snapshot(records: list[AnyRecord], step: int) -> Snapshot:
    return next(r for r in records if isinstance(r, Snapshot) and r.step == step)


def only(records: list[AnyRecord], kind: type[AnyRecord]) -> AnyRecord:
    return next(r for r in records if isinstance(r, kind))


def test_every_line_is_read() -> None:
    """No line is bad, no type is missing, and numbers run from 1 without a gap."""
    read = read_log(SAMPLE)
    assert (read.bad_lines, read.torn, read.size) == (0, False, SAMPLE.stat().st_size)
    assert [r.seq for r in read.records] == list(range(1, len(read.records) + 1))
    assert {type(r) for r in read.records} == set(RECORD_TYPES)
    assert Follower(SAMPLE).poll() == read.records


def test_it_can_be_written_again(records: list[AnyRecord]) -> None:
    """Reading what is written of a read record gives the same record."""
    assert [decode(encode(record)) for record in records] == records
    judged = [r.evidence for r in records if isinstance(r, Snapshot)]
    assert [as_logged(evidence) for evidence in judged] == judged


def test_the_settings_are_those_of_today(records: list[AnyRecord]) -> None:
    """The configuration in the first record can be decoded, to repeat or to rehearse the run."""
    opened = only(records, Opened)
    assert isinstance(opened, Opened)
    assert (opened.schema, opened.run, opened.host) == (1, "brine tank", "node014")
    settings = msgspec.convert(opened.settings, Settings)
    assert settings.fields["salt"].spacing == (0.02, 0.02)
    assert settings.stop[0].wait_seconds == 30.0


def test_what_a_snapshot_record_said(records: list[AnyRecord]) -> None:
    """Every part of an evidence and a verdict means what it meant when it was written."""
    record = snapshot(records, 240)
    evidence, verdict = record.evidence, record.verdict
    assert (record.key, record.index, record.seg) == ("5a3c0e7700009aab", 6, 1)
    assert (record.path, record.time) == ("out/tank_000240.h5", 3.0)
    assert record.mtime == 1771000106.75
    assert evidence.channels == (
        Channel(
            f="salt",
            lo=0.0,
            hi=35.01,
            bulk=-6.55,
            ripple=-28.375,
            own=-9.25,
            floor=-34.125,
            cells=2.75,
            vary=1.125,
            top=88.722,
            total=107500.0,
        ),
    )
    assert (evidence.stride, evidence.dt, evidence.uneven, evidence.fresh) == (40, 0.0125, True, 6)
    assert evidence.modes == (
        Mode(
            f="salt",
            re=-2.21,
            im=0.0,
            factor=1.02005,
            low=1.0188,
            high=1.0213,
            residual=0.0034,
            span=6,
            share=0.97,
            view="ripple",
            cells=2.04,
            axes=(2.0, 0.0),
            held=7,
            match=0.998,
            gain=4.76,
            foretold=4.74,
            grown=8.12,
            amp=-27.125,
            odd=True,
        ),
    )
    assert evidence.line == Line(
        f="salt", slope=0.793, rise=5.55, rms=0.0213, span=7, tile=23, cells=2.05, over=5.75
    )
    assert evidence.worst[0] == Worst(tile=23, share=0.93, factor=1.0204)
    assert evidence.edges == {"axis 0 high": 0.98}
    assert evidence.limits == {"diffusion": 1.021}
    assert evidence.contamination == Estimate(3.2e-10, 2.9e-10, 3.6e-10, 0.8)
    assert evidence.local == Estimate(4.1e-9, 3.7e-9, 4.6e-9, 0.8)
    assert (evidence.where, evidence.box) == (("salt", ""), ((88, 96), (40, 56)))
    assert evidence.cut == 2
    assert (verdict.condition, verdict.kind, verdict.alarmed) == ("swelling", "undetermined", False)
    assert verdict.why.startswith("salt: grid-scale ripple grows, ×257")
    assert (verdict.field, verdict.cells, verdict.onset) == ("salt", 2.05, (81, 160))
    assert verdict.factor == Estimate(1.0204, 1.0197, 1.0211, 0.9)


def test_what_an_alarm_and_an_overflow_said(records: list[AnyRecord]) -> None:
    """Ranges, reasons and numbers that are not finite."""
    alarm, end = snapshot(records, 280), snapshot(records, 320)
    assert alarm.verdict.alarmed
    assert alarm.verdict.ruin == Estimate(917.0, 890.0, 948.0, 0.8)
    assert alarm.verdict.overflow == Estimate(5210.0, 5080.0, "inf", 0.8)
    assert alarm.evidence.contamination == Estimate(reason="the growing part has no size yet")
    assert end.evidence.channels == (Channel("salt", lo="-inf", hi="nan", bad=12, total="nan"),)
    assert end.evidence.bad_at == ("salt", "", (91, 47))


def test_what_the_other_records_said(records: list[AnyRecord]) -> None:
    """Segments, maps, close-ups, pins and actions."""
    segments = [r for r in records if isinstance(r, Segment)]
    assert [(s.number, s.why, s.step) for s in segments] == [(1, "start", 40), (2, "restart", 80)]
    assert segments[0].blocks == (("salt", "", (96, 64), (16, 16)),)
    tiles = only(records, TileMap)
    assert isinstance(tiles, TileMap)
    assert (tiles.of, tiles.shape, tiles.low, tiles.high) == (10, (6, 4), -0.05, 0.81)
    assert tiles.cells == ".0.0a0b1c2d3e4f5g6hz...."
    crop = only(records, CloseUp)
    assert isinstance(crop, CloseUp)
    assert (crop.lo, crop.hi, crop.before) == ((92, 40), (94, 42), "AAAAAAAAgD8AAIC/AAAgQA==")
    states = [r.state for r in records if isinstance(r, PinRecord)]
    assert states == ["provisional", "kept"]
    intent = only(records, Intent)
    assert isinstance(intent, Intent)
    done = [r.outcome for r in records if isinstance(r, Outcome) and r.id == intent.id]
    assert done == ["done", "accepted"]
    skipped = only(records, Skipped)
    assert isinstance(skipped, Skipped)
    assert (skipped.reason, skipped.step) == ("held", 160)


def test_what_histories_and_totals_said(records: list[AnyRecord]) -> None:
    """A history with its growth, one printed as stars, and a snapshot that heard the first."""
    energy, residual = (r for r in records if isinstance(r, History))
    assert (energy.name, energy.sample, energy.step) == ("energy", 123, 124)
    assert energy.value == 317.40625
    assert (energy.count, energy.lo, energy.hi, energy.bad) == (17, 314.5, 317.40625, 0)
    assert (energy.level, energy.floor) == (-4.25, -21.5)
    assert energy.verdict.factor == Estimate(1.0616, 1.0608, 1.0625, 0.9)
    assert energy.verdict.ruin == Estimate(140.0, 131.0, 152.0, 0.8)
    assert (residual.step, residual.value, residual.print) == (None, "nan", "********")
    heard = snapshot(records, 130)
    assert heard.evidence.heard == (HeardAlarm("energy", "energy: its changes grew", (12, 28)),)
    (channel,) = heard.evidence.channels
    assert (channel.hi, channel.drift, channel.bounded) == (35.000125, -2.5e-9, True)
