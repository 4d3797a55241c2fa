"""Growth logs made by hand: what a guard would have written of an invented run."""

from __future__ import annotations

import math
from collections.abc import Sequence

from monitor.growthlog.read import LogContents
from monitor.growthlog.records import (
    AnyRecord,
    Channel,
    Condition,
    Estimate,
    Evidence,
    Opened,
    Segment,
    Snapshot,
    Verdict,
    Worst,
)

FACTOR, STRIDE = 1.02, 20


def contents(records: Sequence[AnyRecord], bad_lines: int = 0, torn: bool = False) -> LogContents:
    return LogContents(records=list(records), bad_lines=bad_lines, torn=torn, size=0)


def opened(seq: int = 1, run: str = "cooling plate") -> Opened:
    return Opened(seq=seq, at=100.0, run=run, settings={}, versions={}, host="node7", pid=4711)


def segment(seq: int, number: int = 1, why: str = "start") -> Segment:
    """Two parts of one field, 40 x 30 and 20 x 30 cells, in tiles of 16 x 16."""
    return Segment(
        seq=seq,
        at=100.0,
        number=number,
        why=why,
        blocks=(("T", "a", (40, 30), (16, 16)), ("T", "b", (20, 30), (16, 16))),
    )


def evidence(
    local: float | None = None, worst: tuple[Worst, ...] = (), floor: float | None = None
) -> Evidence:
    share = None if local is None else Estimate(local, local / 2, local * 2, 0.8)
    return Evidence(
        channels=(Channel(f="T", lo=290.0, hi=310.0, floor=floor),),
        stride=STRIDE,
        fresh=6,
        local=share,
        contamination=None if local is None else Estimate(local / 10, local / 20, local / 5, 0.8),
        worst=worst,
    )


def snap(
    seq: int,
    condition: Condition = "quiet",
    *,
    index: int | None = None,
    seg: int = 1,
    path: str | None = None,
    steps: bool = True,
    evidence_: Evidence | None = None,
    **verdict: object,
) -> Snapshot:
    """Snapshot number `index` (default: seq) at step 20 x index."""
    number = seq if index is None else index
    return Snapshot(
        seq=seq,
        at=100.0 + seq,
        key=f"{seq:016x}",
        path=path or f"out/T_{number * STRIDE:06d}.npy",
        index=number,
        seg=seg,
        step=number * STRIDE if steps else None,
        evidence=evidence_ or evidence(),
        verdict=Verdict(condition=condition, **verdict),  # type: ignore[arg-type]
    )


def alarmed_run(**changes: object) -> list[AnyRecord]:
    """Thirty quiet snapshots, then growth by 1.02 per step seen from snapshot 31 on, alarm at 33.

    The growing part is 1e-6 of the field at the alarm (worst tile), growing to 4e-2 at snapshot 60.
    """
    records: list[AnyRecord] = [opened(1), segment(2)]
    records += [snap(n) for n in range(3, 31)]
    for n in range(31, 61):
        local = 1e-6 * math.exp((n - 33) * STRIDE * math.log(FACTOR))
        wide = 0.004 / (n - 30)
        records.append(
            snap(
                n,
                "runaway" if n >= 33 else "swelling",
                evidence_=evidence(local, (Worst(3, 0.9, FACTOR), Worst(0, 0.1, 1.0))),
                kind="numerical",
                alarmed=n >= 33,
                why="T grows by 1.02 per step over 2.1 decades at 2.1 cells per wavelength",
                field="T",
                factor=Estimate(FACTOR + wide / 4, FACTOR - wide, FACTOR + wide, 0.8),
                cells=2.1,
                onset=(280, 420),
                ruin=Estimate(700.0, 600.0, 800.0, 0.8),
                overflow=Estimate(36000.0, 35000.0, 37000.0, 0.8),
                **changes,
            )
        )
    return records
