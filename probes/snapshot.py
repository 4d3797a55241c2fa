"""What a snapshot file holds, and the contract that every reader fulfils.

A reader describes a file (:class:`Contents`) and hands out the values of one field as *slabs*:
C-contiguous blocks cut along the slowest stored axis, so that a snapshot of any size is read once,
in order, in bounded memory.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Protocol, Self, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from probes.spec import SketchSpec, SnapshotSpec
from probes.wire import Sketched


@dataclass(frozen=True, slots=True)
class FieldInfo:
    """One array in a file, as stored.

    name: dataset path or member name ("h", "/fields/u").
    shape: logical shape of one record, without the record axis.
    dtype: NumPy type string with byte order (">f4", "<c16", "<i4").
    fortran: True where the *first* axis varies fastest on disk; slabs then come with all axes
        reversed (slowest first), and the sketch turns its result back.
    """

    name: str
    shape: tuple[int, ...]
    dtype: str
    fortran: bool = False

    @property
    def stored_shape(self) -> tuple[int, ...]:
        """Shape in storage order, slowest axis first: what slabs are cut from."""
        return self.shape[::-1] if self.fortran else self.shape

    @property
    def nbytes(self) -> int:
        """Bytes of one record as stored without compression."""
        count = 1
        for n in self.shape:
            count *= n
        return count * np.dtype(self.dtype).itemsize


@dataclass(frozen=True, slots=True)
class Contents:
    """What an opened file says of itself.

    fields: the arrays that may be judged (numeric, at least one cell, scalars left out).
    records: number of complete records on the record axis; 1 for a file without one.
    growing: True where the file has a record axis and may get longer.
    steps, times: per record; None where the file does not say.
    notes: remarks for a person ("field 'mask' skipped: strings").
    """

    fields: tuple[FieldInfo, ...]
    records: int = 1
    growing: bool = False
    steps: tuple[int | None, ...] = (None,)
    times: tuple[float | None, ...] = (None,)
    notes: tuple[str, ...] = ()


@runtime_checkable
class OpenSnapshot(Protocol):
    """A file held open just for reading one snapshot; a context manager."""

    def contents(self) -> Contents:
        """Describe the file. Raises NotYet (incomplete), Refused (declined) or ReadError."""
        ...

    def slabs(self, field: str, record: int, planes: int) -> Iterator[NDArray[np.generic]]:
        """Yield the values of one record of `field` in storage order.

        Each slab has shape (n, *stored_shape[1:]) with n <= planes, in the file's own dtype (any
        byte order), and may be overwritten by the next one: use it or copy it before going on.
        Raises NotYet if the data end early.
        """
        ...

    def __enter__(self) -> Self: ...

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None: ...


@runtime_checkable
class SketchedAlready(Protocol):
    """An open file that holds sketches in place of values (see `probes.tap`)."""

    def sketched(self, record: int, spec: SketchSpec) -> Sketched:
        """What was sketched at one record. Raises Refused where the settings differ."""
        ...


@runtime_checkable
class Reader(Protocol):
    """A file format. Registered under the entry-point group ``stepwarden.readers``."""

    name: str
    suffixes: tuple[str, ...]

    def recognises(self, head: bytes, path: Path) -> bool:
        """Tell from the first 512 bytes (and, if these do not decide, the name)."""
        ...

    def open(self, path: Path, spec: SnapshotSpec) -> OpenSnapshot:
        """Open without ever taking a lock or writing. Raises NotYet, Refused or ReadError."""
        ...
