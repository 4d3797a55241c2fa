"""What happened to a run, folded from its growth log. Pure: records in, one `Review` out."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, TypeVar

from monitor.foresight import foreseeable_growth
from monitor.growthlog.records import (
    Box,
    Closed,
    Condition,
    Estimate,
    History,
    Intent,
    Kind,
    Num,
    Opened,
    Outcome,
    PinRecord,
    Pulse,
    PulseChange,
    Record,
    Remark,
    Segment,
    Skipped,
    Snapshot,
)
from monitor.lastclean import CleanSnapshot, as_turn, clean_files, clean_pins, kept_pins, place
from probes.tiling import Tiling

if TYPE_CHECKING:
    from monitor.growthlog.read import LogContents

SCHEMA = 1

# Beyond this local contamination growth is no longer free exponential growth: later records say
# less about the factor than earlier ones.
FREE_GROWTH = 0.1
# Records of free growth among which the narrowest estimate of the factor is taken.
_LAST = 5

# An instability that goes from seen to ruin within this many snapshots was detected, not predicted.
FEW_SNAPSHOTS = 3

_R = TypeVar("_R", bound=Record)


@dataclass(frozen=True, slots=True)
class Stretch:
    """One segment: its number, why it began, what it covers and how it ended.

    condition: of its last snapshot. overflowed: non-finite values were met in it.
    """

    number: int
    why: str
    first_step: int | None
    last_step: int | None
    snapshots: int
    condition: Condition
    alarmed: bool
    alarm_step: int | None
    overflowed: bool


@dataclass(frozen=True, slots=True)
class Deed:
    """Something guard meant to do and what came of it.

    at: wall-clock seconds since the epoch of the first attempt. outcome: as in the log, or "open"
    where the log holds none.
    """

    at: float
    act: str
    target: str
    attempts: int
    outcome: str
    detail: str


@dataclass(frozen=True, slots=True)
class Region:
    """Where it grew: index box [lo, hi) per axis of one field and part.

    source: "cells" (found on the cells), "tile" (the worst tile) or "" (not known).
    """

    box: Box | None = None
    field: str = ""
    part: str = ""
    source: str = ""


@dataclass(frozen=True, slots=True)
class Review:
    """The answer to "what happened to this run".

    It speaks of the first alarmed or overflowed segment, else of the last one. Steps are solver
    steps, or snapshot numbers where `per` is "snapshot" because the files do not tell their steps.
    turn: the alarm's record (or the first overflow's), None if there was none. told: the record
    that the values come from, the turn or else the segment's last. growth: factor per step.
    histories: the last record of each; heard: the first of one that is an alarm.
    later: a clean snapshot later than `clean` that nobody pinned. ended: why guard ended, "" if its
    closing record is missing.
    """

    run: str
    pulse: Pulse
    snapshots: int
    segment: int
    segments: tuple[Stretch, ...]
    skipped: tuple[Skipped, ...]
    told: Snapshot | None
    turn: Snapshot | None
    condition: Condition
    growth: Estimate
    region: Region
    clean: CleanSnapshot | None
    later: CleanSnapshot | None
    pins: tuple[PinRecord, ...]
    deeds: tuple[Deed, ...]
    ended: str
    per: str
    contamination: Estimate
    local_contamination: Estimate
    histories: tuple[History, ...] = ()
    heard: History | None = None
    cautions: tuple[str, ...] = ()

    @property
    def alarmed(self) -> bool:
        return self.heard is not None or any(s.alarmed for s in self.segments)

    @property
    def overflowed(self) -> bool:
        return any(s.overflowed for s in self.segments)

    @property
    def kind(self) -> Kind:
        return self.told.verdict.kind if self.told else "none"

    @property
    def onset(self) -> tuple[int, int] | None:
        """Interval of the first step at which it grew."""
        return self.told.verdict.onset if self.told else None

    @property
    def onset_step(self) -> int | None:
        """Middle of the onset interval."""
        return None if self.onset is None else (self.onset[0] + self.onset[1]) // 2

    @property
    def field(self) -> str:
        return (self.told.verdict.field if self.told else "") or self.region.field

    @property
    def ruin(self) -> Estimate:
        """Steps from `told` until the growing part is as large as the field somewhere."""
        return _or_unknown(self.told.verdict.ruin if self.told else None)

    @property
    def overflow(self) -> Estimate:
        """Steps from `told` until the stored numbers overflow."""
        return _or_unknown(self.told.verdict.overflow if self.told else None)

    def text(self) -> str:
        """The same for an engineer, as plain text."""
        from monitor.reviewtext import write_up

        return write_up(self)

    def json_object(self) -> dict[str, object]:
        """One object that ``json.dumps(allow_nan=False)`` accepts; non-finite numbers are the
        strings "nan", "inf" and "-inf", as in the log."""
        growth, clean = self.growth, self.clean
        interval = [growth.low, growth.high]
        foresight = foreseeable_growth(self.told.evidence) if self.told else None
        return {
            "schema": SCHEMA,
            "run": self.run,
            "condition": self.condition,
            "pulse": self.pulse,
            "kind": self.kind,
            "alarmed": self.alarmed,
            "alarm_step": place(self.turn) if self.turn else None,
            "onset_step": self.onset_step,
            "onset_interval": list(self.onset) if self.onset else None,
            "field": self.field,
            "growth_per_step": growth.value,
            "growth_interval": None if None in interval else interval,
            "cells_per_wavelength": self.told.verdict.cells if self.told else None,
            "part": self.region.part,
            "region": [list(side) for side in self.region.box] if self.region.box else None,
            "region_source": self.region.source,
            "contamination": self.contamination.value,
            "local_contamination": self.local_contamination.value,
            "steps_to_ruin": _estimate_object(self.ruin),
            "steps_to_overflow": _estimate_object(self.overflow),
            "last_clean_snapshot": {
                "step": clean.step,
                "path": clean.path,
                "pinned": clean.pinned,
                "sha256": clean.sha256,
            }
            if clean
            else None,
            "foreseeable_growth": list(foresight) if foresight else None,
            "evidence": self.told.verdict.why if self.told else "",
            "drift_of_totals": {
                c.f: c.drift for c in self.told.evidence.channels if c.drift is not None
            }
            if self.told
            else {},
            "histories": [
                {
                    "name": h.name,
                    "step": h.step,
                    "value": h.value,
                    "condition": h.verdict.condition,
                    "alarmed": h.verdict.alarmed,
                    "growth_per_step": h.verdict.factor.value if h.verdict.factor else None,
                    "evidence": h.verdict.why,
                }
                for h in self.histories
            ],
            "snapshots": self.snapshots,
            "skipped": len(self.skipped),
            "segment": self.segment,
            "segments": [
                {
                    "number": s.number,
                    "why": s.why,
                    "first_step": s.first_step,
                    "last_step": s.last_step,
                    "snapshots": s.snapshots,
                    "condition": s.condition,
                    "alarmed": s.alarmed,
                    "alarm_step": s.alarm_step,
                    "overflowed": s.overflowed,
                }
                for s in self.segments
            ],
            "cautions": list(self.cautions),
        }


def summarise(contents: LogContents) -> Review:
    """Fold a growth log into one review; a log without judged snapshots is `gathering`."""
    records = contents.records
    judged = _only(Snapshot, records)
    heads = {head.number: head for head in _only(Segment, records)}
    groups: dict[int, list[Snapshot]] = {number: [] for number in heads}
    for snapshot in judged:
        groups.setdefault(snapshot.seg, []).append(snapshot)
    stretches = tuple(_stretch(n, heads.get(n), group) for n, group in sorted(groups.items()))
    number = _chosen(stretches)
    snaps = groups.get(number, [])
    turn = next((s for s in snaps if _turned(s)), None)
    told = turn or (snaps[-1] if snaps else None)
    pins = _only(PinRecord, records)
    heard = next((h for h in _only(History, records) if h.verdict.alarmed), None)
    cut = turn
    if turn is None and heard is not None and snaps:
        cut = as_turn(heard, "", snaps[-1].index + 1)
    pinned = clean_pins(pins, snaps, cut)
    loose = clean_files(snaps, cut)
    clean = pinned[-1] if pinned else (loose[-1] if loose else None)
    opened, pulses = _only(Opened, records), _only(PulseChange, records)
    last = records[-1] if records else None
    growth = (
        best_growth(snaps, turn) if turn else _or_unknown(told.verdict.factor if told else None)
    )
    share, local = shares(snaps, told, growth)
    review = Review(
        run=opened[-1].run if opened else "",
        pulse=pulses[-1].pulse if pulses else "arriving",
        snapshots=len(judged),
        segment=number,
        segments=stretches,
        skipped=tuple(_only(Skipped, records)),
        told=told,
        turn=turn,
        condition=snaps[-1].verdict.condition if snaps else "gathering",
        growth=growth,
        region=find_region(heads.get(number), snaps, turn),
        clean=clean,
        later=loose[-1] if clean and loose and loose[-1].step > clean.step else None,
        pins=tuple(kept_pins(pins)),
        deeds=deeds(records),
        ended=last.why if isinstance(last, Closed) else "",
        per="step" if all(s.step is not None for s in snaps) else "snapshot",
        contamination=share,
        local_contamination=local,
        histories=tuple({h.name: h for h in _only(History, records)}.values()),
        heard=heard,
    )
    return replace(review, cautions=(*_log_cautions(contents), *_cautions(review)))


def best_growth(snaps: Sequence[Snapshot], turn: Snapshot) -> Estimate:
    """The narrowest of the last estimates of the factor from the alarm on, while growth was free.

    Later records see more of the growing part and know its factor better, until it is so large
    that it no longer grows freely (local contamination above `FREE_GROWTH`).
    """
    known = [
        s.verdict.factor
        for s in (turn, *_free(snaps, turn))
        if s.verdict.field == turn.verdict.field and s.verdict.factor is not None
    ]
    return min(known[-_LAST:], key=_width, default=_or_unknown(None))


def shares(
    snaps: Sequence[Snapshot], told: Snapshot | None, growth: Estimate
) -> tuple[Estimate, Estimate]:
    """Contamination and local contamination at `told`.

    At an early alarm the growing part may not have a size of its own yet; then it is traced back,
    at the growth factor, from the first later record of free growth that gives one.
    """
    if told is None:
        return _or_unknown(None), _or_unknown(None)
    here = told.evidence.contamination, told.evidence.local
    factor = growth.value
    known = any(e is not None and e.value is not None for e in here)
    if known or not isinstance(factor, float | int) or factor <= 1.0:
        return _or_unknown(here[0]), _or_unknown(here[1])
    later = next(iter(_free(snaps, told)), None)
    if later is None:
        return _or_unknown(here[0]), _or_unknown(here[1])
    back = math.exp(-(place(later) - place(told)) * math.log(factor))
    return (
        _scaled(later.evidence.contamination, back),
        _scaled(later.evidence.local, back),
    )


def _scaled(estimate: Estimate | None, by: float) -> Estimate:
    """An estimate times a number; those without a number stay as they are."""
    whole = _or_unknown(estimate)
    ends = (whole.value, whole.low, whole.high)
    if not all(isinstance(e, float | int) for e in ends):
        return whole
    value, low, high = (float(e) * by for e in ends if isinstance(e, float | int))
    return Estimate(value, low, high, whole.coverage)


def find_region(head: Segment | None, snaps: Sequence[Snapshot], turn: Snapshot | None) -> Region:
    """Where it grew: the first box found on the cells from the alarm on, while the growth was
    free; without one the box of the alarm's worst tile.

    A record that gives the growing part a size knows it apart from all else, so these come first.
    """
    if turn is None:
        return Region()
    for snapshot in (*_free(snaps, turn), turn):
        evidence = snapshot.evidence
        if evidence.box is not None and evidence.where is not None:
            return Region(evidence.box, *evidence.where, "cells")
    worst = max(turn.evidence.worst, key=lambda w: w.share, default=None)
    if worst is not None and head is not None:
        tile = worst.tile
        for name, part, shape, edge in head.blocks:
            tiling = Tiling(tuple(shape), tuple(edge))
            if 0 <= tile < tiling.count:
                return Region(tiling.box(tile), name, part, "tile")
            tile -= tiling.count
    if turn.evidence.where is not None:
        return Region(None, *turn.evidence.where)
    return Region()


def deeds(records: Iterable[Record]) -> tuple[Deed, ...]:
    """Every intent with its last outcome, in order; attempts under one request id are counted."""
    found: dict[tuple[str, str], Deed] = {}
    for record in records:
        if isinstance(record, Intent):
            old = found.get((record.act, record.id))
            found[record.act, record.id] = Deed(
                old.at if old else record.at,
                record.act,
                record.target,
                max(record.attempt, old.attempts if old else 0),
                "open",
                "",
            )
        elif isinstance(record, Outcome) and (record.act, record.id) in found:
            old = found[record.act, record.id]
            found[record.act, record.id] = replace(
                old, outcome=record.outcome, detail=record.detail
            )
    return tuple(found.values())


def _only(kind: type[_R], records: Iterable[Record]) -> list[_R]:
    return [r for r in records if isinstance(r, kind)]


def _turned(snapshot: Snapshot) -> bool:
    return snapshot.verdict.alarmed or snapshot.verdict.condition == "overflowed"


def _stretch(number: int, head: Segment | None, snaps: Sequence[Snapshot]) -> Stretch:
    alarm = next((s for s in snaps if s.verdict.alarmed), None)
    return Stretch(
        number=number,
        why=head.why if head else "",
        first_step=place(snaps[0]) if snaps else None,
        last_step=place(snaps[-1]) if snaps else None,
        snapshots=len(snaps),
        condition=snaps[-1].verdict.condition if snaps else "gathering",
        alarmed=alarm is not None,
        alarm_step=place(alarm) if alarm else None,
        overflowed=any(s.verdict.condition == "overflowed" for s in snaps),
    )


def _chosen(stretches: Sequence[Stretch]) -> int:
    """The first alarmed segment, else the first overflowed one, else the last with snapshots."""
    for wanted in (
        [s for s in stretches if s.alarmed][:1],
        [s for s in stretches if s.overflowed][:1],
        [s for s in stretches if s.snapshots][-1:],
        stretches[-1:],
    ):
        if wanted:
            return wanted[0].number
    return 0


def _free(snaps: Sequence[Snapshot], turn: Snapshot) -> list[Snapshot]:
    """Records from the alarm on whose growth is still free exponential growth."""
    out = []
    for snapshot in snaps:
        share = snapshot.evidence.local
        value = share.value if share is not None else None
        free = isinstance(value, float | int) and value < FREE_GROWTH
        if snapshot.seq >= turn.seq and snapshot.verdict.condition == "runaway" and free:
            out.append(snapshot)
    return out


def _width(estimate: Estimate) -> float:
    """Width of an interval in ln, infinite without one."""
    low, high = estimate.low, estimate.high
    if not (isinstance(low, float | int) and isinstance(high, float | int)) or low <= 0.0:
        return math.inf
    return math.log(high / low)


def _or_unknown(estimate: Estimate | None) -> Estimate:
    return Estimate(reason="not known at this snapshot") if estimate is None else estimate


def _estimate_object(estimate: Estimate) -> dict[str, Num | str | None]:
    return {
        "value": estimate.value,
        "low": estimate.low,
        "high": estimate.high,
        "coverage": estimate.coverage,
        "reason": estimate.reason,
    }


def _log_cautions(contents: LogContents) -> list[str]:
    out = []
    if contents.bad_lines:
        out.append(f"{contents.bad_lines} line(s) of the log could not be read and were left out")
    if contents.torn:
        out.append("the log's last line is torn: guard was killed, or is writing right now")
    troubles = [r.text for r in _only(Remark, contents.records) if r.level == "trouble"]
    return out + list(dict.fromkeys(troubles))


def _cautions(review: Review) -> list[str]:
    """What a reader of this review should not overlook."""
    out = []
    if review.per == "snapshot" and review.snapshots:
        out.append("the files do not tell their steps: numbers and factors are per snapshot")
    if review.region.source == "tile":
        out.append("the region is a whole tile: no closer box was found on the cells")
    if review.turn is not None:
        out += _turn_cautions(review, review.turn)
    elif review.snapshots and review.heard is None:
        out.append("no alarm is no proof of stability")
    others = [s.number for s in review.segments if s.alarmed and s.number != review.segment]
    if others:
        out.append(f"further alarms in segment(s) {', '.join(map(str, others))}")
    missed = sum(1 for s in review.skipped if s.reason in ("missed", "late"))
    if missed:
        out.append(f"{missed} snapshot(s) came or went without being judged")
    for deed in review.deeds:
        if deed.outcome in ("open", "failed", "no-reaction"):
            out.append(f"{deed.act} {deed.target}: {_OUTCOMES[deed.outcome]}")
    if not review.ended:
        out.append("guard's closing record is missing: it still runs, or was killed")
    return out


_OUTCOMES = {
    "open": "meant to be done, and the log does not say whether it was",
    "failed": "failed",
    "no-reaction": "done, but the run did not react",
}


def _turn_cautions(review: Review, turn: Snapshot) -> list[str]:
    out = []
    stride, ruin = turn.evidence.stride, review.ruin.value
    near = stride and isinstance(ruin, float | int) and ruin < FEW_SNAPSHOTS * stride
    if near or (turn.verdict.condition == "overflowed" and review.growth.value is None):
        out.append(
            "snapshots are too far apart for this growth: it was detected, not predicted; "
            "write them at least three times as often"
        )
    if review.clean is None:
        out.append("no clean checkpoint is known: look for one older than this log")
    elif not review.clean.pinned:
        out.append("the last clean snapshot is not pinned: the solver may have removed it since")
    if review.clean is not None and review.growth.value is not None:
        out.append(
            "a restart with the same step and scheme grows again: the step must be inside the "
            "limit of what grew"
        )
    return out
