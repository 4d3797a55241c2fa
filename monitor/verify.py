"""Is this checkpoint fit to restart from? Complete, finite, in bounds, clean by the log."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import msgspec
from msgspec.structs import replace

from monitor.config import Settings
from monitor.growthlog.records import Opened, PinRecord, Snapshot
from monitor.lastclean import clean_reason, place
from probes.errors import ReadError
from probes.spec import FieldSpec, SnapshotSpec, WatchSpec
from probes.wire import (
    BlockReply,
    Examine,
    Examined,
    Failed,
    Look,
    Looked,
    ReadSnapshot,
    Reply,
    Request,
    Sketched,
)

if TYPE_CHECKING:
    from monitor.growthlog.read import LogContents

Verdict = Literal["fit", "unfit", "overflowed", "unreadable"]
Ask = Callable[[Request, float], Reply]

LISTING_SECONDS = 30.0
READING_SECONDS = 600.0


@dataclass(frozen=True, slots=True)
class Finding:
    """What was found of one checkpoint. reasons: the facts behind the verdict."""

    path: Path
    verdict: Verdict
    reasons: tuple[str, ...]
    step: int | None = None

    def text(self) -> str:
        step = "" if self.step is None else f" (step {self.step})"
        return f"{self.path}{step}: {self.verdict}; {'; '.join(self.reasons)}"


@dataclass(frozen=True, slots=True)
class Known:
    """What a growth log knows: the run's settings, its snapshots in order, and its pins."""

    settings: Settings | None = None
    folder: Path = Path()
    snapshots: tuple[Snapshot, ...] = ()
    pins: tuple[PinRecord, ...] = ()

    def step_of(self, path: Path) -> int | None:
        """Step of a pinned file, or of a snapshot that is still under its name."""
        full = path.resolve()
        for pin in reversed(self.pins):
            if any((self.folder / pin.folder / name).resolve() == full for name in pin.files):
                return pin.step
        for snapshot in reversed(self.snapshots):
            if (self.folder / snapshot.path).resolve() == full:
                return place(snapshot)
        return None

    def judged(self, step: int) -> Snapshot | None:
        """The first judged snapshot at or after a step."""
        return next((s for s in self.snapshots if place(s) >= step), None)


def known(contents: LogContents, folder: Path) -> Known:
    """What the log in `folder` knows of its last segment's run."""
    opened = [r for r in contents.records if isinstance(r, Opened)]
    settings = None
    if opened:
        try:
            settings = msgspec.convert(opened[-1].settings, Settings, strict=False)
        except msgspec.ValidationError:
            settings = None  # written by another version: fields keep their defaults
    return Known(
        settings,
        folder,
        tuple(r for r in contents.records if isinstance(r, Snapshot)),
        tuple(r for r in contents.records if isinstance(r, PinRecord)),
    )


def verify(path: Path, log: Known | None, keeper: Callable[[WatchSpec], Ask]) -> Finding:
    """Judge one checkpoint file. `keeper` starts a reading process for a watch and returns how to
    ask it; only that process touches the file."""
    about = log or Known()
    try:
        watch = _watch(path, about.settings)
        found = keeper(watch)(Examine(path=str(path.resolve())), LISTING_SECONDS)
        if not isinstance(found, Examined):
            return Finding(path, "unreadable", (_why(found),))
        watch = replace(watch, fields=_specs(found, about.settings))
        ask = keeper(watch)
        looked = ask(Look(wait_s=5.0), LISTING_SECONDS)
        if not isinstance(looked, Looked) or not looked.arrivals:
            waiting = looked.pending if isinstance(looked, Looked) else ()
            why = waiting[0].detail if waiting else _why(looked)
            return Finding(path, "unreadable", (why or "it is not complete",))
        sketched = ask(ReadSnapshot(arrival=looked.arrivals[-1]), READING_SECONDS)
    except ReadError as error:
        return Finding(path, "unreadable", (str(error),))
    if not isinstance(sketched, Sketched):
        return Finding(path, "unreadable", (_why(sketched),))
    step = about.step_of(path)
    if step is None:
        step = sketched.arrival.step
    return judge(path, sketched.blocks, watch.fields, step, log)


def judge(
    path: Path,
    blocks: Sequence[BlockReply],
    specs: dict[str, FieldSpec],
    step: int | None,
    log: Known | None,
) -> Finding:
    """The verdict on what was read. Pure; non-finite values weigh more than all else."""
    snapshot = None if log is None or step is None else log.judged(step)
    bad = [b for b in blocks if b.bad]
    if bad and not _masked_before(snapshot, step):
        return Finding(
            path,
            "overflowed",
            tuple(
                f"{_name(b)}: {b.bad} non-finite value(s), first at {list(b.bad_at)}" for b in bad
            ),
            step,
        )
    cells = sum(math.prod(b.shape) for b in blocks)
    facts = [f"complete and finite ({cells} values)"]
    wrong = [
        f"{_name(block)}: {block.low:.4g} to {block.high:.4g} leaves its bounds"
        for block in blocks
        for spec in [specs.get(block.field.partition("[")[0], FieldSpec())]
        if (spec.min is not None and block.low < spec.min)
        or (spec.max is not None and block.high > spec.max)
    ]
    if wrong:
        return Finding(path, "unfit", tuple(wrong), step)
    if log is None:
        return Finding(path, "fit", (*facts, "no --log given: growth unknown"), step)
    if snapshot is None:
        why = "its step is unknown" if step is None else "the log does not reach it"
        return Finding(path, "fit", (*facts, f"{why}: growth unknown"), step)
    segment = [s for s in log.snapshots if s.seg == snapshot.seg]
    turn = next((s for s in segment if s.verdict.alarmed), None)
    before = [s for s in segment if turn is None or s.seq < turn.seq]
    reason = clean_reason(snapshot, turn, before)
    if not reason:
        word = snapshot.verdict.condition
        if turn is not None and turn.verdict.onset is not None:
            begun = f"the growth began between steps {turn.verdict.onset[0]} and "
            return Finding(path, "unfit", (f"{begun}{turn.verdict.onset[1]}",), step)
        return Finding(path, "unfit", (f"the log's condition there was {word}",), step)
    return Finding(path, "fit", (*facts, reason), step)


def _watch(path: Path, settings: Settings | None) -> WatchSpec:
    """Watch just this file. What has a meaning in patterns becomes the one-character wildcard."""
    literal = re.sub(r"[*?{}\[\]]", "?", path.name)
    spec = settings.snapshots if settings else SnapshotSpec(pattern=())
    return WatchSpec(
        folder=str(path.resolve().parent),
        snapshots=replace(spec, pattern=(literal,), parts=0),
    )


def _specs(found: Examined, settings: Settings | None) -> dict[str, FieldSpec]:
    """A spec for every field of the file. No mask may be learnt from the file under test: unless
    one was declared, every non-finite value counts."""
    given = settings.fields if settings else {}
    out = {}
    for name, _, _ in found.fields:
        spec = next(
            (
                s
                for n, s in given.items()
                if name in (n, s.path) or name.endswith(f"/{s.path or n}")
            ),
            FieldSpec(),
        )
        mask = "none" if spec.mask == "learn" else spec.mask
        out[name] = replace(spec, path=name, mask=mask)
    return out


def _masked_before(snapshot: Snapshot | None, step: int | None) -> bool:
    """True where guard judged this very step and its learnt mask covered what is not finite."""
    if snapshot is None or place(snapshot) != step:
        return False
    return all(channel.bad == 0 for channel in snapshot.evidence.channels)


def _why(reply: Reply) -> str:
    if isinstance(reply, Failed):
        return f"{reply.what}; {reply.remedy}" if reply.remedy else reply.what
    return "it is not complete"


def _name(block: BlockReply) -> str:
    return f"{block.field} of part {block.part}" if block.part else block.field
