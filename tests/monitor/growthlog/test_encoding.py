"""What a record becomes as a line, and what comes back."""

from __future__ import annotations

import json
import math
from typing import Any

import msgspec
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.growthlog.read import BadLine, decode
from monitor.growthlog.records import (
    AnyRecord,
    Channel,
    Evidence,
    History,
    Mode,
    Remark,
    Skipped,
    Snapshot,
    TileMap,
    Verdict,
    Worst,
)
from monitor.growthlog.write import as_logged, encode
from tests.monitor.growthlog.any_records import any_evidence, any_record, any_snapshot, structs


def snapshot(evidence: Evidence, **changes: Any) -> Snapshot:
    record = Snapshot(
        seq=7,
        at=50.0,
        key="5d2f",
        path="out/h_000120.npy",
        index=6,
        step=120,
        evidence=evidence,
        verdict=Verdict(condition="quiet"),
    )
    return msgspec.structs.replace(record, **changes)


@settings(deadline=None)
@given(any_record)
def test_a_record_is_one_ascii_line_that_comes_back(record: AnyRecord) -> None:
    """Any record is one line of ASCII; what is read from it is written as the same line again."""
    line = encode(record)
    assert line.isascii()
    assert line.count(b"\n") == 1
    assert line.endswith(b"\n")
    assert encode(decode(line)) == line


@settings(deadline=None)
@given(any_record)
def test_any_json_reader_understands_a_line(record: AnyRecord) -> None:
    """The standard library's parser, told to refuse the NaN and Infinity that are no JSON, finds
    the record's own type and number."""

    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is no JSON")

    read = json.loads(encode(record), parse_constant=refuse)
    assert read["rec"] == record.__struct_config__.tag
    assert read["seq"] == record.seq


@settings(deadline=None)
@given(any_record.filter(lambda record: not isinstance(record, Snapshot | History | TileMap)))
def test_other_records_come_back_unchanged(record: AnyRecord) -> None:
    """Only the numbers of snapshots, histories and maps are rounded, and wall-clock times to
    milliseconds."""
    back = decode(encode(record))
    assert msgspec.structs.replace(back, at=record.at) == record
    assert back.at == pytest.approx(record.at, abs=6e-4)


@settings(deadline=None)
@given(any_evidence)
def test_what_is_decided_upon_is_what_the_log_holds(evidence: Evidence) -> None:
    """`as_logged` gives exactly what decoding the log line gives, and doing it twice is idle."""
    seen = as_logged(evidence)
    line = encode(snapshot(seen))
    back = decode(line)
    assert isinstance(back, Snapshot)
    assert back.evidence == seen
    assert decode(encode(snapshot(evidence))) == back
    assert as_logged(seen) == seen


@settings(max_examples=200, deadline=None)
@given(any_snapshot, st.text(max_size=5000))
def test_a_snapshot_record_is_short(record: Snapshot, path: str) -> None:
    """Whatever is in it, a snapshot record stays below 4,000 bytes."""
    assert len(encode(msgspec.structs.replace(record, path=path))) < 4000


@settings(max_examples=200, deadline=None)
@given(structs(History, wild=True), st.text(max_size=5000))
def test_a_history_record_is_short_and_stable(record: History, text: str) -> None:
    """Whatever is in it, it fits into one write, and what is read of it is written the same."""
    record = msgspec.structs.replace(record, at=50.0, name=text, print=text)
    line = encode(msgspec.structs.replace(record, verdict=Verdict(condition="quiet", why=text)))
    assert len(line) < 4000
    assert encode(decode(line)) == line
    assert encode(decode(encode(record))) == encode(record)


def test_steps_and_times_are_exact() -> None:
    """Step, time and path are no measurements: all their digits count."""
    record = snapshot(Evidence(channels=()), step=123456789, time=0.1 + 0.2)
    back = decode(encode(record))
    assert back == record


def test_a_time_that_is_not_finite_is_unknown() -> None:
    """A file may hold any time; one that is no number is like none."""
    back = decode(encode(snapshot(Evidence(channels=()), time=math.nan)))
    assert isinstance(back, Snapshot)
    assert back.time is None


def test_numbers_that_are_not_finite_are_spelled_or_left_out() -> None:
    """Extremes keep their infinity as a word, a level without value is None, and a mode or a worst
    tile with a number that is none is dropped, since no decision could use it."""
    evidence = Evidence(
        channels=(Channel("h", lo=-math.inf, hi=math.nan, ripple=math.nan, total=math.inf),),
        dt=math.inf,
        modes=(
            Mode("h", 1.0, 0.0, math.nan, 0.9, 1.1, 0.01, 6),
            Mode("h", 1.0, 0.0, 1.05, 0.9, 1.1, 0.01, 6, axes=(2.0, math.nan)),
        ),
        worst=(Worst(3, 0.5, math.inf), Worst(4, 0.25, 1.5)),
        edges={"axis 0 low": math.nan, "axis 1 high": 0.5},
    )
    seen = as_logged(evidence)
    assert seen.channels == (Channel("h", lo="-inf", hi="nan", total="inf"),)
    assert seen.dt is None
    assert seen.modes == (Mode("h", 1.0, 0.0, 1.05, 0.9, 1.1, 0.01, 6, axes=(2.0, 0.0)),)
    assert seen.worst == (Worst(4, 0.25, 1.5),)
    assert seen.edges == {"axis 1 high": 0.5}


def test_a_map_without_values_can_be_written() -> None:
    """Limits of a map in which no tile has a value are not finite; they become zero."""
    tiles = TileMap(
        seq=1, at=2.0, of=1, f="h", part="", shape=(2,), cells="..", low=math.inf, high=-math.inf
    )
    assert decode(encode(tiles)) == msgspec.structs.replace(tiles, low=0.0, high=0.0)


@pytest.mark.parametrize("text", ["naïve", "水位", "\U0001f30a", 'a"\\b', "tab\tnew\nline\0\x7f"])
def test_text_of_all_kinds_comes_back(text: str) -> None:
    """Names and sentences come back as they were, in a line that is ASCII all the same."""
    record = Remark(seq=1, at=2.0, text=text)
    assert decode(encode(record)) == record


def test_names_that_are_no_text_get_escapes() -> None:
    """A file name of bytes that are no UTF-8 (Python marks them by lone surrogates) is logged with
    escapes instead of ending the guard."""
    name = b"out/h_\xff.npy".decode("utf-8", "surrogateescape")
    skipped = Skipped(seq=1, at=2.0, path=name, reason="broken", detail="")
    back = decode(encode(skipped))
    assert isinstance(back, Skipped)
    assert back.path == "out/h_\\udcff.npy"
    seen = as_logged(Evidence(channels=(Channel(name, 0.0, 1.0),)))
    assert seen.channels[0].f == "out/h_\\udcff.npy"


@pytest.mark.parametrize(
    "line",
    [
        b"",
        b"null",
        b"[]",
        b"{}",
        b'{"rec":"remark","seq":1,"at":2.0}',
        b'{"rec":"remark","seq":1,"at":2.0,"text":3}',
        b'{"rec":"a type of tomorrow","seq":1,"at":2.0}',
        b'{"seq":1,"at":2.0,"text":"without type"}',
        b'{"rec":"remark","seq":1,"at":2.0,"text":"\xff"}',
        b'{"rec":"remark","seq":1,"at":2.0,"text":"x"} and more',
        b"[" * 200_000,
        b'{"rec":' * 100_000,
        b"\0" * 4096,
    ],
    ids=lambda line: repr(line[:40]),
)
def test_anything_else_is_a_bad_line(line: bytes) -> None:
    """A line that is no record of this version is told as such, whatever is wrong with it."""
    with pytest.raises(BadLine):
        decode(line)


def test_fields_of_tomorrow_are_skipped() -> None:
    """A newer guard may write more than this reader knows: in objects by name, in lists at their
    end."""
    line = encode(
        snapshot(Evidence(channels=(Channel("h", 0.0, 1.0),), worst=(Worst(1, 0.5, 1.1),)))
    )
    newer = line.replace(b'"seq":7', b'"seq":7,"mood":{"a":[1]}').replace(b"1.1]", b'1.1,"new"]')
    assert newer.count(b"new") == 1
    assert decode(newer) == decode(line)
