"""One snapshot after the other through measure and decide, segment by segment, into the log."""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path

import msgspec
from msgspec.structs import replace

from monitor import condition
from monitor.actions.proof import digest
from monitor.config import Settings
from monitor.growthlog.numbers import spell
from monitor.growthlog.records import (
    Channel,
    Condition,
    Evidence,
    HeardAlarm,
    Segment,
    Skipped,
    Snapshot,
    TileMap,
    Verdict,
)
from monitor.growthlog.records import CloseUp as CloseUpRecord
from monitor.growthlog.window import Window
from monitor.growthlog.write import as_logged
from monitor.guarding.cadence import Strides
from monitor.guarding.journal import Journal
from monitor.guarding.masks import MaskMemory
from monitor.guarding.pictures import closeup_values, map_values
from monitor.guarding.resume import Resumed
from monitor.guarding.sorting import Place
from monitor.guarding.totals import First, Totals
from monitor.measure import Measured, Measurer
from probes.wire import Crop, Sketched

MAP_EVERY = 32
GROWING: tuple[Condition, ...] = ("swelling", "runaway", "overflowed")

Blocks = tuple[tuple[str, str, tuple[int, ...], tuple[int, ...]], ...]


class _Memory(msgspec.Struct):
    """What goes into the window besides the measurer's own memory."""

    state: condition.State
    index: int
    steps: tuple[int, ...]
    masked: dict[str, int]
    totals: dict[str, First] = {}
    begun: str = ""


@dataclass(frozen=True, slots=True)
class Judged:
    """before: the condition before this snapshot."""

    record: Snapshot
    before: Condition

    @property
    def changed(self) -> bool:
        return self.record.verdict.condition != self.before


class Judge:
    """The present segment of a run: measures, decides, records.

    place: of the last judged snapshot. count: snapshots judged in all segments.
    """

    def __init__(
        self, settings: Settings, folder: Path, journal: Journal, window: Window, resumed: Resumed
    ) -> None:
        self._settings, self._folder = settings, folder
        self._journal, self._window = journal, window
        self._measurer = Measurer(settings)
        self._state = condition.start()
        self._strides = Strides()
        self._masks = MaskMemory()
        self._totals = Totals(settings.fields)
        self._begun = ""
        self._index = 0
        self._number = resumed.segment.number if resumed.segment is not None else 0
        self._blocks: Blocks = resumed.segment.blocks if resumed.segment is not None else ()
        self._why = "start"
        self.place: Place | None = None
        self.count = resumed.total

    # --- starting -----------------------------------------------------------------------

    def take_up(self, resumed: Resumed) -> str:
        """Go on where the last guard ended. Returns "" or why that is not possible; then the next
        snapshot begins a new segment."""
        if resumed.segment is None or resumed.last is None:
            return "" if resumed.segment is None else self._begin_afresh("gap", "no snapshot")
        last = resumed.last
        self.place = Place(last.step, last.mtime)
        if resumed.opened is not None and self._settings_differ(resumed.opened.settings):
            return self._begin_afresh("settings", "the settings of the sketch have changed")
        payload = self._window.load(last.seq)
        if payload is None:
            return self._begin_afresh("gap", "what the last guard held is lost")
        try:
            memory = msgspec.msgpack.decode(payload.pop("guard"), type=_Memory)
            self._measurer.load(payload)
        except (KeyError, ValueError, msgspec.MsgspecError) as error:
            self._measurer = Measurer(self._settings)
            return self._begin_afresh("gap", f"what the last guard held is damaged ({error})")
        self._state, self._index = memory.state, memory.index
        self._strides, self._masks = Strides(memory.steps), MaskMemory(memory.masked)
        self._totals = Totals(self._settings.fields, memory.totals)
        self._begun = memory.begun
        self._why = ""
        return ""

    def _begin_afresh(self, why: str, text: str) -> str:
        self._why = why
        return text

    def restart(self, why: str) -> None:
        """The next snapshot begins a new segment."""
        self._why = why

    @property
    def beginning(self) -> bool:
        """Whether the next snapshot begins a segment."""
        return bool(self._why)

    @property
    def number(self) -> int:
        return self._number

    @property
    def index(self) -> int:
        """Snapshots judged in the segment."""
        return self._index

    @property
    def state(self) -> condition.State:
        return self._state

    def wanted_crops(self) -> tuple[Crop, ...]:
        return () if self.beginning else self._measurer.wanted_crops()

    def differs(self, sketched: Sketched) -> str:
        """Why this cannot follow what the segment holds, "" if it can: "restart" where another
        solver process tapped it, "shape" where its blocks are others."""
        if self.beginning:
            return ""
        if sketched.begun != self._begun:
            return "restart"
        return "shape" if Measurer.blocks(sketched) != self._blocks else ""

    # --- judging ------------------------------------------------------------------------

    def judge(self, sketched: Sketched, heard: tuple[HeardAlarm, ...] = ()) -> Judged:
        """Measure, decide and record one snapshot, which follows the last one in step order.

        heard: histories that alarm there.
        """
        arrival = sketched.arrival
        if self.beginning:
            self._begin(sketched)
        missed = self._strides.add(arrival.step)
        if missed:
            self._record_missed(missed)
        sketched = self._masks.check(sketched)
        before = self._state.condition
        self._index += 1
        measured = self._measure(sketched)
        evidence = self._totals.told(measured.evidence, sketched.blocks)
        evidence = as_logged(replace(evidence, heard=heard))
        self._state, verdict = self._decide(evidence, arrival.step)
        self._save(self._journal.next_seq)
        record = self._journal.write(
            Snapshot,
            sync=verdict.condition != before,
            key=arrival.key,
            path=relative(arrival.files[0].path, self._folder),
            index=self._index,
            seg=self._number,
            step=arrival.step,
            time=arrival.time,
            mtime=arrival.mtime_ns / 1e9,
            record=arrival.record if arrival.growing else None,
            evidence=evidence,
            verdict=verdict,
        )
        self.place = Place(arrival.step, record.mtime)
        self.count += 1
        judged = Judged(record, before)
        self._picture(measured, judged)
        return judged

    def _measure(self, sketched: Sketched) -> Measured:
        """Evidence of one snapshot. A fault in an estimate must not end the guarding of a run:
        extremes and non-finite values are judged all the same, and growth afresh."""
        arrival = sketched.arrival
        try:
            return self._measurer.take(sketched, arrival.step, arrival.time)
        except Exception as error:
            self._measurer = Measurer(self._settings)
            self._journal.trouble(
                f"growth could not be measured in {arrival.files[0].path} "
                f"({type(error).__name__}: {error}), a fault of stepwarden itself; growth is "
                "judged afresh from here on"
            )
            return Measured(bare_evidence(sketched), None, None)

    def _decide(self, evidence: Evidence, step: int | None) -> tuple[condition.State, Verdict]:
        """The verdict; a fault in it leaves the condition as it was, but for an overflow."""
        alarm, fields = self._settings.alarm, self._settings.fields
        try:
            return condition.decide(self._state, evidence, step, self._index, alarm, fields)
        except Exception as error:
            self._journal.trouble(
                f"no decision could be made ({type(error).__name__}: {error}), a fault of "
                "stepwarden itself",
                once=True,
            )
            if not any(channel.bad for channel in evidence.channels):
                state = self._state
                return state, Verdict(
                    condition=state.condition, kind=state.kind, alarmed=state.alarmed
                )
            state = replace(self._state, condition="overflowed", kind="numerical", alarmed=True)
            why = "values that are not finite beyond the mask"
            return state, Verdict(condition="overflowed", kind="numerical", alarmed=True, why=why)

    def _begin(self, sketched: Sketched) -> None:
        self._number += 1
        self._blocks = Measurer.blocks(sketched)
        self._measurer.new_segment()
        self._state = condition.start()
        self._strides, self._masks, self._index = Strides(), MaskMemory(), 0
        self._totals = Totals(self._settings.fields)
        self._begun = sketched.begun
        self._journal.write(
            Segment,
            sync=True,
            number=self._number,
            why=self._why,
            step=sketched.arrival.step,
            blocks=self._blocks,
        )
        self._why = ""

    def _record_missed(self, missed: tuple[int, ...]) -> None:
        which = f"step {missed[0]}"
        if len(missed) > 1:
            which = f"{len(missed)} snapshots, steps {missed[0]} to {missed[-1]}"
        self._journal.write(
            Skipped,
            path="",
            reason="missed",
            detail=f"{which}, came and went unseen, if the run kept its stride",
            step=missed[0],
        )

    def _save(self, seq: int) -> None:
        memory = _Memory(
            self._state,
            self._index,
            self._strides.steps,
            self._masks.masked,
            self._totals.firsts,
            self._begun,
        )
        payload = {**self._measurer.dump(), "guard": msgspec.msgpack.encode(memory)}
        self._window.save(seq, payload)
        if self._window.failing:
            self._journal.trouble(self._window.failing, once=True)

    def _picture(self, measured: Measured, judged: Judged) -> None:
        due = judged.changed or self._index % MAP_EVERY == 0
        if not due:
            return
        of = judged.record.seq
        if measured.grid is not None:
            self._journal.write(TileMap, **map_values(measured.grid, of))
        if measured.closeup is not None and judged.record.verdict.condition in GROWING:
            self._journal.write(CloseUpRecord, **closeup_values(measured.closeup, of))

    def _settings_differ(self, logged: dict[str, object]) -> bool:
        """Whether sketches made now cannot be compared with those before."""
        return _sketching(msgspec.to_builtins(self._settings)) != _sketching(logged)


def bare_evidence(sketched: Sketched) -> Evidence:
    """Extremes, sums and non-finite values alone."""
    bad = next((b for b in sketched.blocks if b.bad), None)
    return Evidence(
        channels=tuple(
            Channel(f=name, lo=spell(low), hi=spell(high), bad=count, total=spell(total))
            for name, (low, high, total, count) in digest(sketched.blocks).items()
        ),
        bad_at=(bad.field, bad.part, bad.bad_at) if bad is not None else None,
    )


def relative(path: str, folder: Path) -> str:
    """A path as the log has it: relative to the run's folder where it lies inside."""
    base = os.path.abspath(folder)
    inside = os.path.isabs(path) and os.path.commonpath([base, path]) == base
    return os.path.relpath(path, base) if inside else path


# Settings that change nothing about sketch and measurement.
_FREE = {
    "snapshots": {"poll_seconds", "stale_seconds", "settle_seconds", "pattern", "parts"},
    "fields": {"min", "max", "conserved", "growth_per_time", "spacing", "origin", "periodic"},
}


def _sketching(settings: object) -> object:
    if not isinstance(settings, dict):
        return None
    snapshots = settings.get("snapshots")
    fields = settings.get("fields")
    return (
        settings.get("sketch"),
        settings.get("estimate"),
        _without(snapshots, _FREE["snapshots"]),
        {k: _without(v, _FREE["fields"]) for k, v in fields.items()}
        if isinstance(fields, dict)
        else None,
    )


def _without(section: object, free: set[str]) -> object:
    if not isinstance(section, dict):
        return None
    # A log holds lists where the settings have tuples.
    return {k: list(v) if isinstance(v, tuple) else v for k, v in section.items() if k not in free}
