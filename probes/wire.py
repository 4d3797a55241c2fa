"""What guard and its reading process say to each other: length-prefixed MessagePack, never pickle.

A frame is an unsigned 32-bit big-endian length and that many bytes. Each request is answered by
exactly one reply (possibly `Failed`). Arrays travel as raw little-endian bytes with their shape.
"""

from __future__ import annotations

import struct
from typing import BinaryIO, Literal

import msgspec
import numpy as np
from numpy.typing import NDArray

from probes.errors import ChildError
from probes.spec import WatchSpec

PROTOCOL = 1
LARGEST_FRAME = 1 << 30


class Message(msgspec.Struct, frozen=True, kw_only=True, tag_field="say"):
    """Base of everything sent in either direction."""


# --- values ---------------------------------------------------------------------------------


class Packed(msgspec.Struct, frozen=True, array_like=True):
    """An array as bytes: NumPy type string (little-endian), shape, C-ordered data."""

    dtype: str
    shape: tuple[int, ...]
    data: bytes

    @classmethod
    def of(cls, array: NDArray[np.generic]) -> Packed:
        little = np.ascontiguousarray(array, dtype=array.dtype.newbyteorder("<"))
        return cls(little.dtype.str, little.shape, little.tobytes())

    def array(self) -> NDArray[np.float64]:
        """The values as a read-only float64 array."""
        return np.frombuffer(self.data, dtype=self.dtype).reshape(self.shape).astype(np.float64)


class FileId(msgspec.Struct, frozen=True, kw_only=True):
    """One file of an arrival. path is absolute; part and field are "" without place-holder."""

    path: str
    size: int
    mtime_ns: int
    inode: int
    part: str = ""
    field: str = ""


class Arrival(msgspec.Struct, frozen=True, kw_only=True):
    """A complete snapshot that can be read: one or several files, or one record of a file.

    key: 16 hexadecimal digits that identify the *content* (inode, size, time of change, step, part
        of every file, or inode, record and step for a growing file), never the name. The device
        number is left out: it may differ when a requeued job sees the same mount elsewhere.
    step: solver step (number found times step_factor), None if unknown.
    mtime_ns: latest change of any file; for a record of a growing file the time it was first seen.
    record: index on the record axis, 0 for a file without one.
    """

    key: str
    files: tuple[FileId, ...]
    step: int | None = None
    time: float | None = None
    record: int = 0
    growing: bool = False
    mtime_ns: int = 0


class Pending(msgspec.Struct, frozen=True, kw_only=True):
    """Something that looks like a snapshot but cannot be judged, and why.

    reason is one of: "writing" (still changing or truncated), "parts" (incomplete group), "held"
    (its writer refuses readers), "refused" (declined, see detail), "broken" (unreadable although it
    stopped changing), "empty".
    since: wall-clock seconds since the epoch when it was first seen like this.
    """

    key: str
    path: str
    reason: Literal["writing", "parts", "held", "refused", "broken", "empty"]
    detail: str
    since: float
    step: int | None = None


class Crop(msgspec.Struct, frozen=True, kw_only=True):
    """Raw values of a small box: `field` and `part` name the block, lo/hi the index box."""

    field: str
    part: str
    lo: tuple[int, ...]
    hi: tuple[int, ...]
    values: Packed | None = None


class BlockReply(msgspec.Struct, frozen=True, kw_only=True):
    """The sketch of one gridded array (one component of one field of one part).

    shape: cells per axis after ghost cells and components are taken off, logical order.
    tile: nominal cells per tile edge, per axis; tiles are numbered in C order of the tile grid.
    columns: float64 (tiles, width) sums scaled by 2**-exponent; the layout follows from
        (shape, tile, SketchSpec) alone, see probes.sketch.Layout.
    positions: float32 (tiles, groups): valid stencil positions behind each column group.
    peak: float32 (tiles,): largest finite |value| per tile.
    low, high: exact extremes of the finite values (0 if there are none).
    total: sum of the finite values, math.fsum of slab sums; NaN where it exceeds the number type.
    masked: cells left out because the mask says so; bad: further non-finite cells;
    bad_at: index of the first of these (logical order), () if none; bad_tile: its tile or -1.
    unmasked: cells that the mask covers but that are finite now.
    zeros: cells exactly zero.
    spacing_of_storage: relative spacing of the stored number type (2**-23 for float32), 0 for
        integers, whose spacing is absolute and one.
    mask: bit-packed mask of non-finite cells, only sent while the mask is being learnt.
    """

    field: str
    part: str
    shape: tuple[int, ...]
    tile: tuple[int, ...]
    columns: Packed
    exponent: int
    positions: Packed
    peak: Packed
    low: float
    high: float
    total: float
    zeros: int
    dtype: str
    spacing_of_storage: float
    masked: int = 0
    bad: int = 0
    unmasked: int = 0
    bad_at: tuple[int, ...] = ()
    bad_tile: int = -1


# --- requests -------------------------------------------------------------------------------


class Configure(Message, frozen=True, kw_only=True, tag="configure"):
    """First request: what to watch and which content keys are already in the log."""

    watch: WatchSpec
    known: tuple[str, ...] = ()


class Look(Message, frozen=True, kw_only=True, tag="look"):
    """List what is new. Waits up to `wait_s` for something to appear (events may wake it early)."""

    wait_s: float = 0.0


class ReadSnapshot(Message, frozen=True, kw_only=True, tag="read"):
    """Sketch one arrival in one pass; crops are boxes whose raw values are wanted as well.

    new_segment: forget learnt masks (restart, new shape). The mask is learnt from the first
    snapshot of a segment and confirmed by the third.
    """

    arrival: Arrival
    crops: tuple[Crop, ...] = ()
    new_segment: bool = False


class Settled(Message, frozen=True, kw_only=True, tag="settled"):
    """These keys are in the log now: never offer them again."""

    keys: tuple[str, ...]


class FindCheckpoint(Message, frozen=True, kw_only=True, tag="find"):
    """List complete checkpoints (newest last) by a pattern of their own, with companions."""

    pattern: tuple[str, ...]
    companions: tuple[str, ...] = ()
    parts: int = 0


class Secure(Message, frozen=True, kw_only=True, tag="secure"):
    """Keep copies of `files` in `folder` (created). Method "link" only where asked for.

    The reply comes after the copy is synced; identity is checked before and after.
    """

    files: tuple[FileId, ...]
    folder: str
    allow_link: bool = False


class Drop(Message, frozen=True, kw_only=True, tag="drop"):
    """Remove a pin's folder that Secure made (refused for any other folder)."""

    folder: str


class StopFile(Message, frozen=True, kw_only=True, tag="stopfile"):
    """Create, write or remove a file that the solver looks for."""

    path: str
    action: Literal["create", "write", "remove", "exists"]
    text: str = ""


class ReadHistories(Message, frozen=True, kw_only=True, tag="histories"):
    """What the text logs of these histories have that was not read yet, `budget` bytes each at
    most. A new reading process begins them from the start, and so it does those named by `again`.
    """

    names: tuple[str, ...]
    budget: int = 1 << 20
    again: tuple[str, ...] = ()


class Examine(Message, frozen=True, kw_only=True, tag="examine"):
    """Describe one file or folder for `scout`: format, fields, shapes, steps."""

    path: str


# --- replies --------------------------------------------------------------------------------


class Heard(msgspec.Struct, frozen=True, kw_only=True):
    """New samples of one history, in file order.

    first: number of the first of them, from 0 in this file as it was begun. file: 16 hexadecimal
    digits for the file and how often it was begun again. table: float64 (samples, 4): step, time
    (both NaN if unknown), value, unit of its print. odd: how unusual values were printed, by row.
    mtime: of the file, seconds. more: bytes are left. trouble: why it cannot be read, or "".
    """

    name: str
    file: str = ""
    first: int = 0
    table: Packed
    odd: dict[int, str] = {}
    mtime: float = 0.0
    more: bool = False
    trouble: str = ""
    notes: tuple[str, ...] = ()


class HistoriesRead(Message, frozen=True, kw_only=True, tag="heard"):
    heard: tuple[Heard, ...]


class Ready(Message, frozen=True, kw_only=True, tag="ready"):
    protocol: int = PROTOCOL
    readers: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


class Looked(Message, frozen=True, kw_only=True, tag="looked"):
    """arrivals in step order (numeric); wakeup: "events" or "polling", with the reason."""

    arrivals: tuple[Arrival, ...] = ()
    pending: tuple[Pending, ...] = ()
    wakeup: Literal["events", "polling"] = "polling"
    wakeup_reason: str = ""
    listed: int = 0


class Sketched(Message, frozen=True, kw_only=True, tag="sketched"):
    """arrival: as read, with step and time filled from the contents where the name had none.

    begun: digits of the solver process that it was tapped in; another one begins a new segment.
    """

    arrival: Arrival
    blocks: tuple[BlockReply, ...]
    crops: tuple[Crop, ...] = ()
    notes: tuple[str, ...] = ()
    seconds: float = 0.0
    bytes_read: int = 0
    begun: str = ""


class Found(Message, frozen=True, kw_only=True, tag="found"):
    checkpoints: tuple[Arrival, ...] = ()


class Secured(Message, frozen=True, kw_only=True, tag="secured"):
    method: Literal["link", "reflink", "copy"]
    files: tuple[str, ...]
    sha256: str
    bytes: int


class Done(Message, frozen=True, kw_only=True, tag="done"):
    detail: str = ""
    exists: bool = False


class Examined(Message, frozen=True, kw_only=True, tag="examined"):
    format: str
    fields: tuple[tuple[str, tuple[int, ...], str], ...]
    records: int
    growing: bool
    steps: tuple[int | None, ...]
    times: tuple[float | None, ...]
    notes: tuple[str, ...] = ()


class Failed(Message, frozen=True, kw_only=True, tag="failed"):
    """kind: "not-yet", "refused", "read", "settings", "arrival", "internal"."""

    kind: Literal["not-yet", "refused", "read", "settings", "arrival", "internal"]
    what: str
    where: str = ""
    remedy: str = ""


Request = (
    Configure
    | Look
    | ReadSnapshot
    | Settled
    | FindCheckpoint
    | Secure
    | Drop
    | StopFile
    | ReadHistories
    | Examine
)
Reply = Ready | Looked | Sketched | Found | Secured | Done | HistoriesRead | Examined | Failed

_encoder = msgspec.msgpack.Encoder()
_requests: msgspec.msgpack.Decoder[Request] = msgspec.msgpack.Decoder(Request)
_replies: msgspec.msgpack.Decoder[Reply] = msgspec.msgpack.Decoder(Reply)


def encode(message: Message) -> bytes:
    """A whole frame: length prefix and payload."""
    payload = _encoder.encode(message)
    return struct.pack(">I", len(payload)) + payload


def decode_request(payload: bytes) -> Request:
    """Raises ChildError where the payload is not a known request."""
    try:
        return _requests.decode(payload)
    except msgspec.MsgspecError as error:
        raise ChildError(f"request not understood: {error}") from error


def decode_reply(payload: bytes) -> Reply:
    """Raises ChildError where the payload is not a known reply."""
    try:
        return _replies.decode(payload)
    except msgspec.MsgspecError as error:
        raise ChildError(f"reply not understood: {error}") from error


def read_frame(stream: BinaryIO) -> bytes | None:
    """The payload of the next frame, None at a clean end. Raises ChildError on a torn frame."""
    head = stream.read(4)
    if not head:
        return None
    if len(head) < 4:
        raise ChildError("frame torn in its length")
    (length,) = struct.unpack(">I", head)
    if length > LARGEST_FRAME:
        raise ChildError(f"frame of {length} bytes is over the limit")
    payload = stream.read(length)
    if len(payload) < length:
        raise ChildError("frame torn in its payload")
    return payload
