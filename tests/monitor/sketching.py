"""Snapshots held in memory, sketched as the reading process would, for tests of what follows."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np

from monitor import condition
from monitor.config import Settings
from monitor.growthlog.records import Evidence, Verdict
from monitor.growthlog.write import as_logged
from monitor.measure import Measured, Measurer
from probes.fieldpass import FieldPass
from probes.masks import MaskBook
from probes.snapshot import FieldInfo
from probes.spec import FieldSpec, SketchSpec, SnapshotSpec
from probes.wire import Arrival, BlockReply, Crop, Sketched

Fields = dict[str, np.ndarray]
Snapshots = Iterable[tuple[int, float | None, Fields]]


def settings(**sections: object) -> Settings:
    """Settings with a pattern that is never looked at."""
    return Settings(snapshots=SnapshotSpec(pattern=("u_{step}.npy",)), **sections)


def sketch(
    fields: Fields, step: int, time: float | None, book: MaskBook, crops: tuple[Crop, ...] = ()
) -> Sketched:
    """One snapshot as it comes from the reading process."""
    blocks: list[BlockReply] = []
    filled: list[Crop] = []
    for name, u in fields.items():
        info = FieldInfo(name, u.shape, u.dtype.str)
        work = FieldPass(info, name, "", FieldSpec(), SketchSpec(), book, crops)
        for i in range(0, u.shape[0], work.planes):
            work.add(u[i : i + work.planes])
        found, cut, _ = work.finish()
        blocks += found
        filled += cut
    arrival = Arrival(key=f"{step:016x}", files=(), step=step, time=time)
    return Sketched(arrival=arrival, blocks=tuple(blocks), crops=tuple(filled))


def follow(
    snapshots: Snapshots, chosen: Settings | None = None
) -> Iterator[tuple[int, Evidence, Verdict, Measured]]:
    """Measure and decide as guard does: (step, evidence as logged, verdict, measured)."""
    chosen = chosen or settings()
    measurer, state, book = Measurer(chosen), condition.start(), MaskBook()
    for index, (step, time, fields) in enumerate(snapshots):
        sketched = sketch(fields, step, time, book, measurer.wanted_crops())
        measured = measurer.take(sketched, step, time)
        evidence = as_logged(measured.evidence)
        state, verdict = condition.decide(state, evidence, step, index, chosen.alarm, chosen.fields)
        yield step, evidence, verdict, measured
