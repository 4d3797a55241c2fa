"""Stand-ins for the growth log and the reading process, and a run's snapshots by hand."""

from __future__ import annotations

import hashlib
import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np

from monitor.growthlog.records import AnyRecord, Channel, Evidence, Outcome, Snapshot, Verdict
from probes.wire import (
    Arrival,
    BlockReply,
    Done,
    Drop,
    Failed,
    FileId,
    FindCheckpoint,
    Found,
    Packed,
    ReadSnapshot,
    Reply,
    Request,
    Secure,
    Secured,
    Sketched,
    StopFile,
)


class FakeLog:
    """Keeps records in a list, and whether each was synced."""

    def __init__(self) -> None:
        self.records: list[AnyRecord] = []
        self.synced: list[bool] = []
        self.next_seq = 1
        self.failing = ""

    def append(self, record: AnyRecord, sync: bool = False) -> None:
        assert record.seq == self.next_seq
        self.records.append(record)
        self.synced.append(sync)
        self.next_seq += 1

    def only(self, kind: type[AnyRecord]) -> list[AnyRecord]:
        return [r for r in self.records if isinstance(r, kind)]

    def outcomes(self, act: str) -> list[str]:
        return [r.outcome for r in self.records if isinstance(r, Outcome) and r.act == act]


class FakeChild:
    """Does with real files what the reading process does, for one field called "T" in .npy files.

    before: called with each request first; what it returns, if not None, is the reply.
    """

    def __init__(self) -> None:
        self.requests: list[Request] = []
        self.checkpoints: tuple[Arrival, ...] = ()
        self.before: Callable[[Request], Reply | None] = lambda request: None

    def ask(self, request: Request, limit_s: float) -> Reply:
        self.requests.append(request)
        forced = self.before(request)
        if forced is not None:
            return forced
        match request:
            case StopFile():
                return self._stop_file(request)
            case Secure():
                return self._secure(request)
            case Drop():
                shutil.rmtree(request.folder)
                return Done()
            case FindCheckpoint():
                return Found(checkpoints=self.checkpoints)
            case ReadSnapshot():
                return self._read(request)
        return Failed(kind="internal", what="not faked")

    @staticmethod
    def _stop_file(request: StopFile) -> Reply:
        path = Path(request.path)
        if request.action in ("create", "write"):
            path.write_text(request.text)
        elif request.action == "remove":
            path.unlink(missing_ok=True)
        return Done(exists=path.exists())

    @staticmethod
    def _secure(request: Secure) -> Reply:
        for file in request.files:
            status = Path(file.path).stat() if Path(file.path).exists() else None
            if status is None or (status.st_ino, status.st_mtime_ns) != (file.inode, file.mtime_ns):
                return Failed(kind="not-yet", what="it has changed")
        folder = Path(request.folder)
        folder.mkdir(parents=True)
        total = hashlib.sha256()
        for file in request.files:
            copy = folder / Path(file.path).name
            if request.allow_link:
                copy.hardlink_to(file.path)
            else:
                shutil.copyfile(file.path, copy)
            total.update(copy.read_bytes())
        return Secured(
            method="link" if request.allow_link else "copy",
            files=tuple(Path(f.path).name for f in request.files),
            sha256=total.hexdigest(),
            bytes=sum(f.size for f in request.files),
        )

    @staticmethod
    def _read(request: ReadSnapshot) -> Reply:
        try:
            values = np.load(request.arrival.files[0].path, allow_pickle=False)
        except (OSError, ValueError):
            return Failed(kind="read", what="not an array")
        return Sketched(arrival=request.arrival, blocks=(block(values),))


def block(values: np.ndarray) -> BlockReply:
    """The reply for one field "T"; its sketch is just its values in one tile."""
    finite = values[np.isfinite(values)]
    return BlockReply(
        field="T",
        part="",
        shape=values.shape,
        tile=values.shape,
        columns=Packed.of(np.nan_to_num(values).reshape(1, -1)),
        exponent=0,
        positions=Packed.of(np.ones((1, 1), dtype=np.float32)),
        peak=Packed.of(np.ones(1, dtype=np.float32)),
        low=float(finite.min()),
        high=float(finite.max()),
        total=float(finite.sum()),
        zeros=0,
        dtype="<f8",
        spacing_of_storage=2.0**-52,
        bad=values.size - finite.size,
    )


def file_id(path: Path) -> FileId:
    status = path.stat()
    return FileId(
        path=str(path), size=status.st_size, mtime_ns=status.st_mtime_ns, inode=status.st_ino
    )


def arrival(path: Path, step: int | None) -> Arrival:
    file = file_id(path)
    return Arrival(key=f"{step}", files=(file,), step=step, mtime_ns=file.mtime_ns)


def snapshot(
    seq: int,
    step: int,
    values: np.ndarray | None = None,
    *,
    seg: int = 1,
    index: int | None = None,
    **verdict: object,
) -> Snapshot:
    """A record; quiet unless the verdict says otherwise."""
    channel = Channel(f="T", lo=0.0, hi=1.0)
    if values is not None:
        b = block(values)
        channel = Channel(f="T", lo=b.low, hi=b.high, bad=b.bad, total=b.total)
    return Snapshot(
        seq=seq,
        at=1000.0 + seq,
        key=str(step),
        path=f"T_{step}.npy",
        index=index if index is not None else seq,
        seg=seg,
        step=step,
        evidence=Evidence(channels=(channel,)),
        verdict=Verdict(**{"condition": "quiet", **verdict}),  # type: ignore[arg-type]
    )
