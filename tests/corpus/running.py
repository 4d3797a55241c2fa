"""Run the detector over the snapshots of a case, in this process and without files.

Arrays become sketches as in the reading process, sketches evidence and evidence a verdict as in
guard; that files and guard give the same is tested (`tests.corpus.filing`).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from monitor import condition
from monitor.config import Settings
from monitor.growthlog.records import Evidence, Verdict
from monitor.growthlog.write import as_logged
from monitor.measure import Measurer
from probes.fieldpass import FieldPass
from probes.masks import MaskBook
from probes.snapshot import FieldInfo
from probes.spec import FieldSpec, SnapshotSpec
from probes.wire import Arrival, BlockReply, Crop, Sketched
from tests.corpus.case import Fields, Run, Stored


@dataclass(frozen=True, slots=True)
class Said:
    """What the detector made of one snapshot. number: in the run, from 0."""

    number: int
    step: int
    evidence: Evidence
    verdict: Verdict


def settings_of(run: Run) -> Settings:
    """Default settings, with what a case tells of its fields."""
    fields = {name: run.specs.get(name, FieldSpec()) for name in run.snapshots[0].fields}
    return Settings(snapshots=SnapshotSpec(pattern=("{field}_{step}.npy",)), fields=fields)


def follow(run: Run, timed: bool = True) -> Iterator[Said]:
    """Judge the snapshots one after the other, as guard would. A step that is not above the last
    one begins a new segment. timed: False as for files that do not tell their time."""
    settings = settings_of(run)
    measurer, state, masks = Measurer(settings), condition.start(), MaskBook()
    last, index = -1, 0
    for number, snapshot in enumerate(run.snapshots):
        if snapshot.step <= last:
            measurer.new_segment()
            state, masks, index = condition.start(), MaskBook(), 0
        last, index = snapshot.step, index + 1
        time = snapshot.time if timed else None
        sketched = sketch(snapshot, run, settings, masks, measurer.wanted_crops())
        measured = measurer.take(sketched, snapshot.step, time)
        evidence = as_logged(measured.evidence)
        state, verdict = condition.decide(
            state, evidence, snapshot.step, index, settings.alarm, settings.fields
        )
        yield Said(number, snapshot.step, evidence, verdict)


def sketch(
    snapshot: Stored, run: Run, settings: Settings, masks: MaskBook, crops: tuple[Crop, ...]
) -> Sketched:
    """One snapshot as it comes from the reading process."""
    blocks: list[BlockReply] = []
    filled: list[Crop] = []
    for name, part, values in files(snapshot.fields, run):
        info = FieldInfo(name, values.shape, values.dtype.str)
        spec = settings.fields[name]
        work = FieldPass(info, name, part, spec, settings.sketch, masks, crops)
        for i in range(0, values.shape[0], work.planes):
            work.add(values[i : i + work.planes])
        found, cut, _ = work.finish()
        blocks += found
        filled += cut
    arrival = Arrival(key=f"{snapshot.step:016x}", files=(), step=snapshot.step, time=snapshot.time)
    return Sketched(arrival=arrival, blocks=tuple(blocks), crops=tuple(filled))


def files(fields: Fields, run: Run) -> Iterator[tuple[str, str, np.ndarray]]:
    """(field, part, values) of every file that a snapshot is written to, in the order in which
    guard reads them: by field, then by part."""
    for name in sorted(fields):
        if not run.parts:
            yield name, "", fields[name]
        for part in sorted(run.parts):
            yield name, part, np.ascontiguousarray(fields[name][run.parts[part]])
