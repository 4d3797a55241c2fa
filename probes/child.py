"""The reading process: the only one that touches the solver's files.

Started by guard with the interpreter's -P, it answers requests (probes.wire) one after the other.
A hanging mount, a corrupted file or a foreign reader can only take this process with it: it limits
its memory, dies with its parent, and sets itself an alarm for every request.
"""

from __future__ import annotations

import contextlib
import ctypes
import os
import resource
import signal
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

import msgspec

from probes.arrivals.groups import Describe
from probes.arrivals.watching import Watching
from probes.errors import (
    ArrivalError,
    ChildError,
    Held,
    NotYet,
    ReadError,
    Refused,
    SettingsError,
    StepwardenError,
)
from probes.fieldpass import FieldPass
from probes.formats import find_reader, notes, open_snapshot, readers
from probes.hearing import Hearing
from probes.masks import MaskBook
from probes.securing import drop, secure, stop_file
from probes.snapshot import Contents, FieldInfo, SketchedAlready
from probes.spec import FieldSpec, SnapshotSpec, WatchSpec
from probes.wire import (
    Arrival,
    BlockReply,
    Configure,
    Crop,
    Done,
    Drop,
    Examine,
    Examined,
    Failed,
    FileId,
    FindCheckpoint,
    Found,
    HistoriesRead,
    Look,
    ReadHistories,
    ReadSnapshot,
    Ready,
    Reply,
    Request,
    Secure,
    Settled,
    Sketched,
    StopFile,
    decode_request,
    encode,
    read_frame,
)

_PR_SET_PDEATHSIG = 1
_MOST_RECORDS_TOLD = 10_000
_CALM = 60.0


class Child:
    """Answers requests. Holds what one configuration has learnt."""

    def __init__(self) -> None:
        self._watch = WatchSpec(folder="/", snapshots=SnapshotSpec(pattern=()))
        self._watching: Watching | None = None
        self._masks = MaskBook()
        self._finding: dict[tuple[tuple[str, ...], int], Watching] = {}
        self._histories: dict[str, Hearing] = {}

    def answer(self, request: Request) -> Reply:
        """The reply to one request; expected failures become Failed."""
        try:
            return self._answer(request)
        except NotYet as error:
            return _failed("not-yet", error)
        except Refused as error:
            return _failed("refused", error)
        except ReadError as error:
            return _failed("read", error)
        except SettingsError as error:
            return _failed("settings", error)
        except ArrivalError as error:
            return _failed("arrival", error)
        except StepwardenError as error:
            return _failed("internal", error)
        except MemoryError:
            return Failed(
                kind="refused",
                what="more memory would be needed than guard may use",
                remedy="lower [sketch] budget_mb or write smaller chunks",
            )
        except Exception as error:  # the last line: a fault here must not kill the reading
            return Failed(kind="internal", what=f"{type(error).__name__}: {error}")

    def _answer(self, request: Request) -> Reply:
        match request:
            case Configure():
                return self._configure(request)
            case Look():
                return self._watched().look(request.wait_s)
            case ReadSnapshot():
                return self._read(request)
            case Settled():
                self._watched().settle(request.keys)
                return Done()
            case FindCheckpoint():
                return self._find(request)
            case Secure():
                return secure(request.files, request.folder, request.allow_link)
            case Drop():
                return drop(request.folder)
            case StopFile():
                return stop_file(request)
            case ReadHistories():
                return self._read_histories(request)
            case Examine():
                return self._examine(request)

    def _watched(self) -> Watching:
        if self._watching is None:
            raise ChildError("nothing is configured yet")
        return self._watching

    def _configure(self, request: Configure) -> Ready:
        if self._watching is not None:
            self._watching.close()
        self._watch = request.watch
        self._masks = MaskBook()
        self._finding = {}
        self._watching = Watching(
            request.watch.folder, request.watch.snapshots, self._describe, request.known
        )
        self._histories = {
            name: Hearing(name, Path(request.watch.folder) / spec.path, spec)
            for name, spec in request.watch.histories.items()
        }
        return Ready(readers=tuple(readers()), notes=notes())

    def _describe(self, path: str) -> Contents:
        with open_snapshot(Path(path), self._watch.snapshots) as snapshot:
            return snapshot.contents()

    # --- reading ------------------------------------------------------------------------

    def _read(self, request: ReadSnapshot) -> Sketched:
        if request.new_segment:
            self._masks = MaskBook()
        began = time.monotonic()
        arrival = request.arrival
        blocks: list[BlockReply] = []
        crops: list[Crop] = []
        told: list[str] = []
        read, begun = 0, ""
        for file in arrival.files:
            _unchanged(file, arrival.growing)
            with (
                _short_is_broken(file),
                open_snapshot(Path(file.path), self._watch.snapshots) as snapshot,
            ):
                contents = snapshot.contents()
                if arrival.record >= contents.records:
                    raise NotYet(f"record {arrival.record} is not there yet", file.path)
                arrival = _with_clock(arrival, contents, self._watch.snapshots.step_factor)
                if isinstance(snapshot, SketchedAlready):
                    tapped = snapshot.sketched(arrival.record, self._watch.sketch)
                    blocks += _wanted(tapped.blocks, self._watch)
                    told, begun = [*told, *tapped.notes], tapped.begun
                    continue
                chosen = _chosen(contents, file, self._watch)
                if len(arrival.files) == 1 or arrival.files[0] is file:
                    told += contents.notes
                for info, name, spec in chosen:
                    work = FieldPass(
                        info, name, file.part, spec, self._watch.sketch, self._masks, request.crops
                    )
                    for slab in snapshot.slabs(info.name, arrival.record, work.planes):
                        work.add(slab)
                        read += slab.nbytes
                    found, cut, remarks = work.finish()
                    blocks += found
                    crops += cut
                    told += remarks
        # What was read may have been changing under us: only unchanged files count, but for
        # records of a growing file that have others behind them.
        for file in arrival.files:
            _unchanged(file, arrival.growing and arrival.record < contents.records - 1)
        missing = set(self._watch.fields) - {b.field.split("[")[0] for b in blocks}
        if missing:
            there = ", ".join(sorted({b.field for b in blocks})) or "none"
            raise Refused(
                f"field {sorted(missing)[0]!r} is not there",
                arrival.files[0].path,
                f"the fields found are {there}",
            )
        if not blocks:
            raise Refused("holds no field that can be judged", arrival.files[0].path)
        return Sketched(
            arrival=arrival,
            blocks=tuple(blocks),
            crops=tuple(crops),
            notes=tuple(dict.fromkeys(told)),
            seconds=time.monotonic() - began,
            bytes_read=read,
            begun=begun,
        )

    def _read_histories(self, request: ReadHistories) -> HistoriesRead:
        for name in request.again:
            if name in self._histories:
                self._histories[name].again()
        known = [self._histories[name] for name in request.names if name in self._histories]
        return HistoriesRead(heard=tuple(history.read(request.budget) for history in known))

    def _find(self, request: FindCheckpoint) -> Found:
        found = self._complete(request.pattern, request.parts, self._describe_checkpoint)
        for pattern in request.companions:
            beside = self._complete((pattern,), 0, lambda path: Contents(()))
            found = _with_companions(found, beside, stepped="{step}" in pattern)
        return Found(checkpoints=found)

    def _complete(
        self, pattern: tuple[str, ...], parts: int, describe: Describe
    ) -> tuple[Arrival, ...]:
        """What is complete by a pattern, in order. The listing is kept from call to call."""
        what = (pattern, parts)
        if what not in self._finding:
            spec = SnapshotSpec(pattern=pattern, parts=parts, record_axis="no")
            self._finding[what] = Watching(self._watch.folder, spec, describe, events=False)
        return self._finding[what].complete_now()

    def _describe_checkpoint(self, path: str) -> Contents:
        """Step and time if they can be read. A checkpoint may have any format of its own."""
        try:
            with open_snapshot(Path(path), SnapshotSpec(pattern=(), record_axis="no")) as snapshot:
                return snapshot.contents()
        except NotYet:
            raise
        except ReadError:
            return Contents(())

    def _examine(self, request: Examine) -> Examined:
        path = Path(request.path)
        reader = find_reader(path, self._watch.snapshots)
        with reader.open(path, self._watch.snapshots) as snapshot:
            contents = snapshot.contents()
        return Examined(
            format=reader.name,
            fields=tuple((f.name, f.shape, f.dtype) for f in contents.fields),
            records=contents.records,
            growing=contents.growing,
            steps=contents.steps[-_MOST_RECORDS_TOLD:],
            times=contents.times[-_MOST_RECORDS_TOLD:],
            notes=contents.notes,
        )


def _failed(kind: str, error: StepwardenError) -> Failed:
    return msgspec.convert(
        {
            "say": "failed",
            "kind": kind,
            "what": error.what,
            "where": error.where,
            "remedy": error.remedy,
        },
        Failed,
    )


def _unchanged(file: FileId, growing: bool) -> None:
    """Raises NotYet unless the file still is the one that was listed. A growing file may grow."""
    try:
        now = os.stat(file.path)
    except FileNotFoundError as error:
        raise NotYet("the file has gone", file.path) from error
    except OSError as error:
        raise ReadError(f"cannot be looked at ({error.strerror})", file.path) from error
    same = (now.st_ino, now.st_size, now.st_mtime_ns) == (file.inode, file.size, file.mtime_ns)
    if not same and not (growing and now.st_ino == file.inode):
        raise NotYet("the file has been written again", file.path)


@contextlib.contextmanager
def _short_is_broken(file: FileId) -> Iterator[None]:
    """What is incomplete although nobody has written to it for a minute will stay so."""
    try:
        yield
    except Held:
        raise
    except NotYet as error:
        _unchanged(file, growing=False)
        calm = time.time() - file.mtime_ns / 1e9
        if calm < _CALM:
            raise
        what = f"{error.what}, and it has not changed for {calm:.0f} s"
        raise ReadError(what, error.where, error.remedy) from error


def _with_clock(arrival: Arrival, contents: Contents, factor: int) -> Arrival:
    """Step and time from the contents where the arrival has none. Raises NotYet where a record of
    a growing file is no longer that of the step it was."""
    step, time_ = arrival.step, arrival.time
    told = contents.steps[arrival.record]
    if step is None and told is not None:
        step = told * factor
    elif arrival.growing and told is not None and told * factor != step:
        raise NotYet("the file has been begun again", arrival.files[0].path)
    if time_ is None:
        time_ = contents.times[arrival.record]
    return msgspec.structs.replace(arrival, step=step, time=time_)


def _chosen(
    contents: Contents, file: FileId, watch: WatchSpec
) -> Iterator[tuple[FieldInfo, str, FieldSpec]]:
    """Fields to judge, with the names they have in the log and their settings."""
    leaves = [f.name.rsplit("/", 1)[-1] for f in contents.fields]
    stem = Path(file.path).stem
    for info, leaf in zip(contents.fields, leaves, strict=True):
        name = leaf if leaves.count(leaf) == 1 else info.name
        if len(contents.fields) == 1 and leaf == stem and file.field:
            # A file of one nameless array: its name says which field it is.
            name = file.field
        if not watch.fields:
            yield info, name, FieldSpec()
            continue
        for wanted, spec in watch.fields.items():
            path = spec.path.lstrip("/")
            same = info.name.lstrip("/") == path if path else wanted in (name, info.name, leaf)
            if same:
                yield info, wanted, spec


def _wanted(blocks: tuple[BlockReply, ...], watch: WatchSpec) -> Iterator[BlockReply]:
    """Blocks of a tapped step that are to be judged."""
    return (b for b in blocks if not watch.fields or b.field.split("[")[0] in watch.fields)


def _with_companions(
    found: tuple[Arrival, ...], beside: tuple[Arrival, ...], *, stepped: bool
) -> tuple[Arrival, ...]:
    """Each checkpoint with the companion files of its step; those without a step go with all. A
    checkpoint whose own companion has not come is not complete and left out."""
    out = []
    for arrival in found:
        more = tuple(f for b in beside if not stepped or b.step == arrival.step for f in b.files)
        if more or not stepped:
            out.append(msgspec.structs.replace(arrival, files=arrival.files + more))
    return tuple(out)


# --- the process ------------------------------------------------------------------------------


def limit_self(memory_mb: int) -> None:
    """Die with the parent, and use no more memory than stated beyond what is mapped now."""
    with contextlib.suppress(OSError, AttributeError):
        ctypes.CDLL(None, use_errno=True).prctl(_PR_SET_PDEATHSIG, signal.SIGKILL)
    mapped = 0
    with contextlib.suppress(OSError, ValueError, IndexError):
        pages = int(Path("/proc/self/statm").read_text().split()[0])
        mapped = pages * os.sysconf("SC_PAGE_SIZE")
    limit = mapped + (memory_mb << 20)
    with contextlib.suppress(OSError, ValueError):
        resource.setrlimit(resource.RLIMIT_AS, (limit, limit))


def serve(requests: BinaryIO, replies: BinaryIO) -> None:
    """Answer until the requests end. In front of each request comes a frame with its time limit,
    seconds as decimal text."""
    child = Child()
    while True:
        limit = read_frame(requests)
        payload = read_frame(requests) if limit is not None else None
        if limit is None or payload is None:
            return
        # The default action of SIGALRM ends the process: the parent sees it and starts another.
        signal.setitimer(signal.ITIMER_REAL, float(limit.decode()))
        reply = child.answer(decode_request(payload))
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        replies.write(encode(reply))
        replies.flush()


def main() -> None:
    """Entry of the process: memory limit in MiB as the only argument."""
    # The protocol gets descriptors of its own, so that nothing printed can get into it.
    requests = os.fdopen(os.dup(0), "rb")
    replies = os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)
    nothing = os.open(os.devnull, os.O_RDONLY)
    os.dup2(nothing, 0)
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        # The terminal's signals are the parent's business.
        signal.signal(number, signal.SIG_IGN)
    limit_self(int(sys.argv[1]))
    try:
        serve(requests, replies)
    except (ChildError, BrokenPipeError):
        sys.exit(1)


if __name__ == "__main__":
    main()
