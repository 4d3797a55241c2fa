"""A keeper whose reading process follows a script; what it reads are arrays in memory, sketched by
the real pass."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from probes.errors import ChildError
from probes.fieldpass import FieldPass
from probes.masks import MaskBook
from probes.snapshot import FieldInfo
from probes.spec import FieldSpec, WatchSpec
from probes.wire import (
    Arrival,
    Failed,
    FileId,
    Look,
    Looked,
    ReadSnapshot,
    Reply,
    Request,
    Sketched,
)

Content = np.ndarray | Failed | ChildError


class ScriptedKeeper:
    """looks: replies to Look, one after the other, then nothing new for ever. contents: by key,
    what reading gives, one after the other, the last one again and again.

    Contents that were offered and not settled are offered again, as the real one does.
    """

    def __init__(
        self, looks: Iterable[Looked | Failed | ChildError], contents: dict[str, list[Content]]
    ) -> None:
        self.looks, self.contents = list(looks), contents
        self.requests: list[Request] = []
        self.done: set[str] = set()
        self.open: dict[str, Arrival] = {}
        self.notes: tuple[str, ...] = ()
        self.closed = False

    def start(self, watch: WatchSpec, known: Iterable[str]) -> ScriptedKeeper:
        """In place of the constructor."""
        self.watch, self.book = watch, MaskBook()
        self.done |= set(known)
        return self

    def ask(self, request: Request, limit_s: float) -> Reply:
        self.requests.append(request)
        if isinstance(request, Look):
            return self._look()
        if isinstance(request, ReadSnapshot):
            return self._read(request)
        return Failed(kind="internal", what="not in the script")

    def settled(self, keys: Iterable[str]) -> None:
        for key in keys:
            self.done.add(key)
            self.open.pop(key, None)

    def close(self) -> None:
        self.closed = True

    def reads(self) -> list[ReadSnapshot]:
        return [r for r in self.requests if isinstance(r, ReadSnapshot)]

    def _look(self) -> Reply:
        reply = self.looks.pop(0) if self.looks else Looked(wakeup="events")
        if isinstance(reply, ChildError):
            raise reply
        if isinstance(reply, Failed):
            return reply
        self.open.update({a.key: a for a in reply.arrivals})
        arrivals = tuple(self.open.values()) if self.open else reply.arrivals
        return Looked(arrivals=arrivals, pending=reply.pending, wakeup="events")

    def _read(self, request: ReadSnapshot) -> Reply:
        if request.new_segment:
            self.book = MaskBook()
        contents = self.contents[request.arrival.key]
        content = contents.pop(0) if len(contents) > 1 else contents[0]
        if isinstance(content, ChildError):
            raise content
        if isinstance(content, Failed):
            return content
        info = FieldInfo(name="T", shape=content.shape, dtype=content.dtype.str)
        fields = FieldPass(info, "T", "", FieldSpec(), self.watch.sketch, self.book, request.crops)
        for row in range(0, content.shape[0], fields.planes):
            fields.add(content[row : row + fields.planes].copy())
        blocks, crops, _ = fields.finish()
        return Sketched(
            arrival=self.as_read(request.arrival),
            blocks=tuple(blocks),
            crops=tuple(crops),
            notes=self.notes,
        )

    def as_read(self, arrival: Arrival) -> Arrival:
        """Steps that stand in the file alone are those at the end of its key ("k-20")."""
        if arrival.step is not None:
            return arrival
        return Arrival(
            key=arrival.key,
            files=arrival.files,
            step=int(arrival.key.split("-")[-1]),
            mtime_ns=arrival.mtime_ns,
        )


def arrival(step: int | None, *, key: str = "", at: float | None = None) -> Arrival:
    """One file, last changed at `at` (default: the step in seconds)."""
    time = int((at if at is not None else float(step or 0)) * 1e9)
    name = key or f"k-{step}"
    file = FileId(path=f"/run/out/T_{name}.npy", size=800, mtime_ns=time, inode=1)
    return Arrival(key=name, files=(file,), step=step, mtime_ns=time)


def values(step: int, size: int = 24) -> np.ndarray:
    """A smooth field that decays."""
    x = np.sin(np.pi * np.linspace(0.0, 1.0, size))
    return 1.0 + x[:, None] * x[None, :] * 0.99**step
