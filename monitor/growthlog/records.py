"""Record types of the growth log: one JSON object a line, plain ASCII, append-only.

A three-day run writes tens of thousands of lines, so the parts of a snapshot record have short
names in the file (`rename`) or are lists of values in the order given here (`array_like`: new
fields only at the end, with a default). Floats carry four significant digits (see
`monitor.growthlog.numbers` for the exceptions). JSON has no NaN or infinity: floats that
may be non-finite have the type `Num`, a number or one of "nan", "inf", "-inf".
Readers skip unknown fields, and count lines that they cannot read.
"""

from __future__ import annotations

from typing import Literal

import msgspec

SCHEMA = 1

Num = float | Literal["nan", "inf", "-inf"]
Condition = Literal["gathering", "quiet", "swelling", "runaway", "overflowed"]
Kind = Literal["none", "resolved", "numerical", "undetermined"]
Pulse = Literal["arriving", "stalled", "finished"]
Box = tuple[tuple[int, int], ...]


# gc=False: records hold no reference cycles, and a log of a million of them is read much faster
# when the collector of cycles does not walk over them.


class Estimate(
    msgspec.Struct,
    frozen=True,
    omit_defaults=True,
    gc=False,
    rename={"value": "v", "low": "l", "high": "h", "coverage": "c"},
):
    """A value with its doubt: an interval (low, high) at `coverage`, or a reason for no value."""

    value: Num | None = None
    low: Num | None = None
    high: Num | None = None
    coverage: float = 0.0
    reason: str = ""


class Record(
    msgspec.Struct, frozen=True, kw_only=True, omit_defaults=True, gc=False, tag_field="rec"
):
    """Base: seq counts records from 1 in one log; at is wall-clock seconds since the epoch."""

    seq: int
    at: float


class Opened(Record, frozen=True, kw_only=True, tag="opened"):
    """First record of a log and of every guard that continues it.

    settings: the whole configuration in force, as decoded. versions: of packages that matter.
    continues: True when an earlier guard's window was taken up without a gap; note says why not.
    process: number, start time (seconds since the epoch) and owner of the solver's process.
    """

    schema: int = SCHEMA
    run: str
    settings: dict[str, object]
    versions: dict[str, str]
    host: str
    pid: int
    continues: bool = False
    note: str = ""
    process: tuple[int, float, int] | None = None


class Segment(Record, frozen=True, kw_only=True, tag="segment"):
    """A new stretch: number counts from 1; why: "start", "restart", "shape", "settings", "gap".

    blocks: (field, part, shape, tile) in the order used by tile numbers in snapshot records.
    """

    number: int
    why: str
    step: int | None = None
    blocks: tuple[tuple[str, str, tuple[int, ...], tuple[int, ...]], ...] = ()


class Channel(
    msgspec.Struct,
    frozen=True,
    omit_defaults=True,
    gc=False,
    rename={
        "bulk": "b",
        "ripple": "r",
        "own": "o",
        "floor": "fl",
        "cells": "c",
        "vary": "v",
        "total": "sum",
        "drift": "dr",
        "bounded": "bd",
    },
):
    """One field's levels in one snapshot. Levels are natural logarithms of rms per cell (bulk) or
    per stencil position (ripple), of the difference to the previous snapshot, in field units.

    f: field name, with component ("u[0]"); parts are pooled.
    lo, hi: exact extremes; bad: non-finite cells beyond the mask.
    bulk, ripple: ln level of the difference; None where it is exactly zero or there is none yet.
    own: ln ripple level of the snapshot itself (for uneven strides).
    floor: ln of the level that storage rounding alone would give the ripple.
    cells: wavelength in cells of the ripple part of the difference (two-order ratio), pooled.
    vary: ln rms of the field's variation (deviation from its mean).
    top: ln of the largest number of the storage type, where that is not float64.
    drift: change of a conserved field's total since the segment began, as a share of what it was
        (of cells times rms where that nearly cancels).
    bounded: the settings give bounds for it, so that it is the last to be cut from a long record.
    """

    f: str
    lo: Num
    hi: Num
    bulk: float | None = None
    ripple: float | None = None
    own: float | None = None
    floor: float | None = None
    cells: float | None = None
    vary: float | None = None
    top: float | None = None
    bad: int = 0
    total: Num | None = None
    drift: Num | None = None
    bounded: bool = False


class Mode(msgspec.Struct, frozen=True, array_like=True, gc=False):
    """A Ritz pair of the map from one snapshot difference to the next (field f).

    re, im: Ritz value per snapshot; factor: its modulus per step with interval [low, high].
    residual: relative. share: of the last difference, in the columns of the view.
    span: snapshots in the Krylov window.
    cells: wavelength over all axes; axes: per axis, 0 where not seen.
    held: snapshots over which this pair has persisted (0 = first seen now).
    match: squared cosine with the vector of one window earlier; gain: ln of its amplitude over
        that time; foretold: ln gain that the factor predicts.
    amp: ln rms amplitude of the growing part in the field (difference times |mu|/|mu-1|), None
        where |mu - 1| is within its doubt.
    view: "ripple" or "bulk": the columns it was computed in.
    odd: a phase that no resolved motion has (negative real at an odd stride).
    steady: snapshots in a row in which this Ritz value was found, within 1 %.
    """

    f: str
    re: float
    im: float
    factor: float
    low: float
    high: float
    residual: float
    span: int
    share: float = 1.0
    view: Literal["ripple", "bulk"] = "ripple"
    cells: float | None = None
    axes: tuple[float, ...] = ()
    held: int = 0
    match: float = 0.0
    gain: float = 0.0
    foretold: float = 0.0
    grown: float = 0.0
    amp: float | None = None
    odd: bool = False
    steady: int = 1


class Line(msgspec.Struct, frozen=True, array_like=True, gc=False):
    """The straightest rise of a ripple level, over the whole field or in one tile.

    slope: d ln(level) per snapshot; rise: ln of the rise over the window; rms: of the residuals,
    in ln; span: snapshots; tile: number, -1 for the whole field; over: ln above the floor.
    """

    f: str
    slope: float
    rise: float
    rms: float
    span: int
    tile: int = -1
    cells: float | None = None
    over: float = 0.0


class Worst(msgspec.Struct, frozen=True, array_like=True, gc=False):
    """A tile that grows: number (global over blocks), share of the growing energy, factor/step."""

    tile: int
    share: float
    factor: float


class HeardAlarm(msgspec.Struct, frozen=True, array_like=True, gc=False):
    """A history declared an alarm that is past its own: its name, the words of its verdict, and the
    interval in which its growth began."""

    name: str
    why: str
    onset: tuple[int, int] | None = None


class Evidence(
    msgspec.Struct,
    frozen=True,
    kw_only=True,
    omit_defaults=True,
    gc=False,
    rename={
        "channels": "ch",
        "stride": "st",
        "uneven": "un",
        "fresh": "n",
        "modes": "m",
        "line": "l",
        "worst": "w",
        "edges": "ed",
        "contamination": "co",
        "local": "lo",
        "where": "at",
        "limits": "lim",
        "heard": "hd",
    },
):
    """Everything the decision may use, reduced from the sketches of one snapshot.

    stride: steps since the previous snapshot (None if unknown: factors are per snapshot).
    dt: time per step since the previous snapshot.
    uneven: strides in the window differ, so differences cannot be compared directly.
    line: best per-tile line (whole-field lines are fitted by the decision from the channels).
    edges: share of the growing ripple on each boundary face with at least 1 %, e.g.
        {"axis 0 low": 0.93}.
    contamination, local: estimated share of the unstable part in the field's variation.
    fresh: snapshots in the window (2 needed for a difference).
    box: index box on the cells, from crops, of field and part named by `where`.
    heard: histories (see `History`) that alarm at this snapshot.
    cut: entries left out so that the record stays short (`monitor.growthlog.fitting`).
    """

    channels: tuple[Channel, ...]
    stride: int | None = None
    dt: float | None = None
    uneven: bool = False
    fresh: int = 0
    modes: tuple[Mode, ...] = ()
    line: Line | None = None
    worst: tuple[Worst, ...] = ()
    edges: dict[str, float] = {}
    contamination: Estimate | None = None
    local: Estimate | None = None
    where: tuple[str, str] | None = None
    box: Box | None = None
    bad_at: tuple[str, str, tuple[int, ...]] | None = None
    limits: dict[str, float] = {}
    heard: tuple[HeardAlarm, ...] = ()
    cut: int = 0


class Verdict(
    msgspec.Struct,
    frozen=True,
    kw_only=True,
    omit_defaults=True,
    gc=False,
    rename={
        "condition": "is",
        "alarmed": "al",
        "field": "f",
        "factor": "g",
        "cells": "c",
        "onset": "on",
        "ruin": "ru",
        "overflow": "ov",
    },
):
    """What the decision made of the evidence: `alarmed` is latched per segment.

    why: one sentence of evidence in words and numbers. field: where it grows.
    factor: growth per step with interval. cells: of what grows. onset: lower and upper end of the
    interval of the first step at which it grew.
    ruin, overflow: steps from this snapshot.
    """

    condition: Condition
    kind: Kind = "none"
    alarmed: bool = False
    why: str = ""
    field: str = ""
    factor: Estimate | None = None
    cells: float | None = None
    onset: tuple[int, int] | None = None
    ruin: Estimate | None = None
    overflow: Estimate | None = None


class Snapshot(
    Record,
    frozen=True,
    kw_only=True,
    tag="snap",
    rename={
        "key": "k",
        "path": "p",
        "index": "i",
        "seg": "sg",
        "time": "t",
        "mtime": "mt",
        "record": "rn",
        "evidence": "ev",
        "verdict": "vd",
    },
):
    """One snapshot, judged. key identifies the content; path is relative to the run's folder.

    step None: unknown, `index` counts snapshots of the segment. mtime: of the file, seconds.
    record: index on the record axis of a growing file, None for a file without one.
    """

    key: str
    path: str
    index: int
    seg: int = 1
    step: int | None = None
    time: float | None = None
    mtime: float = 0.0
    record: int | None = None
    evidence: Evidence
    verdict: Verdict


class History(Record, frozen=True, kw_only=True, tag="history"):
    """What a history (a number that the solver prints as it goes) has come to: at a change of its
    condition, at every snapshot, and once a minute at most in between.

    name: as in the settings. file: digits that identify the text file as it was begun; sample:
    number of its last sample, from 0. step, time, value: of that sample; print: how it stands in
    the file, where it is no usual number. count: samples since the record before; lo, hi: extremes
    of the finite ones among them; bad: how many were not finite.
    level, floor: natural logarithms of the rms change per step (per line without steps) over the
    last four changes, and of what rounding in print makes of one.
    verdict: as for a snapshot, of this history alone; field is its name, ruin counts until the
    growing part is as large as the value, overflow until double precision ends.
    """

    name: str
    file: str
    sample: int
    seg: int = 1
    step: int | None = None
    time: float | None = None
    value: Num | None = None
    print: str = ""
    count: int = 0
    lo: Num | None = None
    hi: Num | None = None
    bad: int = 0
    level: float | None = None
    floor: float | None = None
    verdict: Verdict


class Skipped(Record, frozen=True, kw_only=True, tag="skipped"):
    """A snapshot that was not judged: late, incomplete, refused, unreadable or missed."""

    path: str
    reason: Literal["late", "parts", "held", "refused", "broken", "missed", "empty"]
    detail: str
    key: str = ""
    step: int | None = None


class TileMap(Record, frozen=True, kw_only=True, tag="map"):
    """Pooled map of local amplification, one character a cell.

    shape: of the map (at most 1024 cells); cells: C-ordered string, "." no value, "0" to "9" then
    "a" to "z": ln factor per snapshot from `low` to `high` in 36 steps.
    """

    of: int
    f: str
    part: str
    shape: tuple[int, ...]
    cells: str
    low: float
    high: float


class CloseUp(Record, frozen=True, kw_only=True, tag="closeup"):
    """Raw values around the worst place in two consecutive snapshots, float32, C order.

    lo, hi: index box; before, now: base64 of little-endian float32.
    """

    of: int
    f: str
    part: str
    lo: tuple[int, ...]
    hi: tuple[int, ...]
    before: str
    now: str


class PinRecord(Record, frozen=True, kw_only=True, tag="pin"):
    """A checkpoint kept safe, promoted or released. state: "provisional", "kept", "released"."""

    pin: str
    state: Literal["provisional", "kept", "released"]
    folder: str
    files: tuple[str, ...]
    step: int | None = None
    sha256: str = ""
    method: str = ""
    bytes: int = 0
    verified: bool = False
    detail: str = ""


class Intent(Record, frozen=True, kw_only=True, tag="intent"):
    """About to act (synced before acting). act: "pin", "stop-file", "command", "signal", "kill",
    "hold", "notify"; id: request id, the same when an open intent is taken up after a restart."""

    act: str
    id: str
    target: str
    attempt: int = 1


class Outcome(Record, frozen=True, kw_only=True, tag="done"):
    """What came of an intent: "done", "accepted", "no-reaction", "failed", "found-done"."""

    act: str
    id: str
    outcome: Literal["done", "accepted", "no-reaction", "failed", "found-done"]
    detail: str = ""


class PulseChange(Record, frozen=True, kw_only=True, tag="pulse"):
    pulse: Pulse
    detail: str = ""


class Remark(Record, frozen=True, kw_only=True, tag="remark"):
    """News for a person that changes nothing: mode of watching, masks, file system not answering.

    level: "note" or "trouble".
    """

    text: str
    level: Literal["note", "trouble"] = "note"


class Closed(Record, frozen=True, kw_only=True, tag="closed"):
    """Guard ended: why, and its exit status."""

    why: str
    status: int


AnyRecord = (
    Opened
    | Segment
    | Snapshot
    | History
    | Skipped
    | TileMap
    | CloseUp
    | PinRecord
    | Intent
    | Outcome
    | PulseChange
    | Remark
    | Closed
)
