"""Growth logs of invented runs, record by record: what the desk is shown in tests.

A plate of 256 x 256 cells in tiles of 32 x 32, a snapshot every 20 steps and 15 seconds. From step
2,000 on a sawtooth grows by a known factor in one tile, from round-off.
"""

from __future__ import annotations

import base64
import math
import random
from collections.abc import Iterable
from pathlib import Path

from monitor.growthlog.records import (
    AnyRecord,
    Channel,
    Closed,
    CloseUp,
    Condition,
    Estimate,
    Evidence,
    Intent,
    Opened,
    Outcome,
    PinRecord,
    PulseChange,
    Remark,
    Segment,
    Skipped,
    Snapshot,
    TileMap,
    Verdict,
    Worst,
)
from monitor.growthlog.write import encode

EPOCH = 1_772_000_000.0
STRIDE, SECONDS = 20, 15.0
FACTOR = 1.0204
SEEN, ALARM = 100, 112  # snapshots
_FLOOR = -36.0

SETTINGS: dict[str, object] = {
    "snapshots": {"pattern": ["out/T_{step}.npy"], "format": "auto"},
    "alarm": {"run_length": 100000.0, "decades": 2.0},
    "pins": {"enabled": True, "folder": "pins"},
    "stop": [
        {"do": "file", "path": "STOP", "wait_seconds": 60.0},
        {"do": "signal", "signal": "TERM", "wait_seconds": 30.0},
    ],
}


class Maker:
    """Appends records with running numbers and times."""

    def __init__(self, seed: int = 5821, name: str = "cooling plate") -> None:
        self.records: list[AnyRecord] = []
        self.noise = random.Random(seed)
        self.at = EPOCH
        self.name = name

    def add(self, kind: type, **values: object) -> None:
        self.records.append(kind(seq=len(self.records) + 1, at=self.at, **values))

    def open(self, settings: dict[str, object] | None = None, **values: object) -> None:
        self.add(
            Opened,
            run=self.name,
            settings=SETTINGS if settings is None else settings,
            versions={"stepwarden": "0.1.0", "numpy": "2.1.0"},
            host="node7",
            pid=4711,
            **values,
        )

    def segment(self, number: int = 1, why: str = "start", step: int = 20) -> None:
        self.add(
            Segment, number=number, why=why, step=step, blocks=(("T", "", (256, 256), (32, 32)),)
        )

    def channel(self, n: int, name: str = "T", grows: bool = False) -> Channel:
        """Levels of snapshot n: a bulk that decays, ripple at its rounding, a growing part."""
        wobble = self.noise.gauss(0.0, 0.12)
        ripple = _FLOOR + 1.2 + wobble
        bulk = -4.0 - 0.0004 * STRIDE * n + 0.1 * wobble
        if grows and n > SEEN:
            grown = _FLOOR + 1.0 + (n - SEEN) * STRIDE * math.log(FACTOR)
            ripple = math.log(math.exp(ripple) + math.exp(grown))
            bulk = math.log(math.exp(bulk) + math.exp(grown))
        return Channel(
            f=name,
            lo=290.0,
            hi=310.0,
            bulk=bulk,
            ripple=ripple,
            own=ripple - 1.0,
            floor=_FLOOR,
            cells=2.1,
            vary=1.5,
            total=2.0e7,
        )

    def snap(
        self,
        n: int,
        condition: Condition = "quiet",
        *,
        grows: bool = False,
        seg: int = 1,
        fields: Iterable[str] = ("T",),
        path: str = "",
        evidence: dict[str, object] | None = None,
        **verdict: object,
    ) -> None:
        """Snapshot number n at step 20 n."""
        self.at = EPOCH + 4.0 + n * SECONDS
        made = Evidence(
            **{
                "channels": tuple(self.channel(n, name, grows) for name in fields),
                "stride": STRIDE,
                "dt": 0.0125,
                "fresh": min(n, 6),
                **(evidence or {}),
            }
        )  # type: ignore[arg-type]
        self.add(
            Snapshot,
            key=f"{n:016x}",
            path=path or f"out/T_{n * STRIDE:06d}.npy",
            index=n,
            seg=seg,
            step=n * STRIDE,
            time=n * STRIDE * 0.0125,
            mtime=self.at - 1.0,
            evidence=made,
            verdict=Verdict(condition=condition, **verdict),  # type: ignore[arg-type]
        )

    def pin(self, n: int, state: str = "provisional", **values: object) -> None:
        step = n * STRIDE
        self.add(
            PinRecord,
            **{
                "pin": f"T-{step:06d}",
                "state": state,
                "folder": f"pins/{step:06d}",
                "files": (f"T_{step:06d}.npy",),
                "step": step,
                "sha256": "9f" * 32,
                "method": "hard link",
                "bytes": 524_416,
                "verified": True,
                **values,
            },
        )

    def map(
        self, worst: float, at: tuple[int, int] = (6, 5), shape: tuple[int, ...] = (8, 8)
    ) -> None:
        """Noise below one everywhere and one tile with ln factor `worst`, its neighbours less."""
        low, high = -0.4, max(0.3, worst)
        cells = []
        for n in range(math.prod(shape)):
            row, column = divmod(n, shape[-1])
            near = math.hypot(row % shape[-2] - at[0], column - at[1]) if len(shape) > 1 else 9.0
            value = max(self.noise.uniform(-0.4, 0.15), worst - 0.12 * near * near)
            step = round((value - low) / (high - low) * 35)
            cells.append("0123456789abcdefghijklmnopqrstuvwxyz"[min(35, max(0, step))])
        self.add(
            TileMap,
            of=len(self.records),
            f="T",
            part="",
            shape=shape,
            cells="".join(cells),
            low=low,
            high=high,
        )

    def growing(self, n: int) -> dict[str, object]:
        """Evidence and verdict of a snapshot that shows the growing part."""
        local = 1e-11 * math.exp((n - SEEN) * STRIDE * math.log(FACTOR))
        left = -math.log(min(local, 1.0)) / math.log(FACTOR)
        wide = 0.02 / (n - SEEN)
        return {
            "evidence": {
                "worst": (Worst(53, 0.93, FACTOR), Worst(52, 0.04, 1.0201)),
                "contamination": Estimate(local / 8, local / 16, local / 4, 0.8),
                "local": Estimate(local, local / 2, local * 2, 0.8),
                "where": ("T", ""),
                "box": ((196, 218), (164, 190)),
                "edges": {"axis 0 high": 0.02},
            },
            "kind": "numerical" if n >= ALARM else "undetermined",
            "alarmed": n >= ALARM,
            "why": (
                f"T: grid-scale ripple grew ×{math.exp((n - SEEN) * 0.4):.3g} on a straight line "
                f"over {n - SEEN} snapshots, {FACTOR} per step, 2.1 cells long"
            ),
            "field": "T",
            "factor": Estimate(FACTOR, FACTOR - wide, FACTOR + wide, 0.9),
            "cells": 2.1,
            "onset": (1940, 2060),
            "ruin": Estimate(left, left * 0.96, left * 1.05, 0.8),
            "overflow": Estimate(left + 34000.0, left + 33000.0, left + 36000.0, 0.8),
        }


def healthy(snapshots: int = 90) -> Maker:
    made = Maker()
    made.open()
    made.segment()
    for n in range(1, snapshots + 1):
        made.snap(n, "gathering" if n < 4 else "quiet")
        if n % 32 == 4:
            made.map(0.1)
        if n % 30 == 0:
            made.pin(n)
    return made


def runaway(until: int = 124, stopping: bool = True) -> Maker:
    """Swelling at snapshot 105, alarm at 112 (step 2,240), a pin promoted, a stop file written."""
    made = healthy(SEEN)
    for n in range(SEEN + 1, until + 1):
        if n < 105:
            made.snap(n, grows=True)
            continue
        made.snap(n, "runaway" if n >= ALARM else "swelling", grows=True, **made.growing(n))
        if n == 105:
            made.map(0.41)
            corner = base64.b64encode(b"\0\0\x80\x3f" * 4).decode()
            made.add(
                CloseUp,
                of=len(made.records),
                f="T",
                part="",
                lo=(200, 170),
                hi=(202, 172),
                before=corner,
                now=corner,
            )
        if n == ALARM:
            made.map(0.43)
            made.pin(90, "kept", detail="from before the growth began")
            if stopping:
                made.add(Intent, act="stop-file", id="r1", target="STOP")
                made.add(Outcome, act="stop-file", id="r1", outcome="done", detail="created")
    return made


def stopped() -> Maker:
    """As above, and the run ends in time."""
    made = runaway(114)
    made.add(Outcome, act="stop-file", id="r1", outcome="accepted", detail="the process ended")
    made.add(PulseChange, pulse="finished", detail="the process ended")
    made.add(Closed, why="the run ended", status=10)
    return made


def overflowed() -> Maker:
    """Nobody stops it; at snapshot 130 the field holds infinities."""
    made = runaway(129, stopping=False)
    made.snap(
        130,
        "overflowed",
        kind="numerical",
        alarmed=True,
        field="T",
        why="T holds 412 values that are not finite, first at [207, 171]",
        evidence={
            "channels": (Channel(f="T", lo="-inf", hi="nan", bad=412, total="nan"),),
            "bad_at": ("T", "", (207, 171)),
        },
    )
    return made


def stalled() -> Maker:
    made = healthy(60)
    made.at += 700.0
    made.add(Remark, text="the folder is on a network mount: looking every 5 s")
    made.add(PulseChange, pulse="stalled", detail="no snapshot for 10 min, usually every 15 s")
    made.add(
        Skipped, path="out/T_001220.npy", reason="held", detail="its writer holds it", step=1220
    )
    return made


def three_fields() -> Maker:
    """h, u and v of a basin; nothing grows."""
    made = Maker(9377, "harbour basin")
    made.open(settings={**SETTINGS, "stop": []})
    made.segment()
    for n in range(1, 41):
        made.snap(n, "gathering" if n < 4 else "quiet", fields=("h", "u", "v"))
    return made


def hostile() -> Maker:
    """Names and texts that try to play with the terminal or with markup."""
    nasty = "\x1b[2J\x1b]0;owned\x07[bold red]x[/]\u202e\n"
    made = Maker(733, f"run{nasty}")
    made.open()
    made.segment()
    for n in range(1, 12):
        made.snap(n, fields=(f"T{nasty}",), path=f"out/{nasty}{n}.npy")
    made.snap(
        12,
        "swelling",
        fields=(f"T{nasty}",),
        kind="undetermined",
        why=f"why {nasty}",
        field=f"T{nasty}",
        factor=Estimate(1.01, 1.0, 1.02, 0.9),
        ruin=Estimate(reason=nasty),
    )
    made.add(Remark, text=f"remark {nasty}", level="trouble")
    made.pin(3, "kept", folder=f"pins/{nasty}", detail=nasty)
    made.add(Skipped, path=nasty, reason="broken", detail=nasty)
    return made


def write(path: Path, records: Iterable[AnyRecord], junk: bytes = b"") -> Path:
    """A log file; `junk` is put after its first line."""
    lines = [encode(record) for record in records]
    path.write_bytes(b"".join([*lines[:1], junk, *lines[1:]]))
    return path
