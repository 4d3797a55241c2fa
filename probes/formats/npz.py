"""``.npz``: a zip archive of ``.npy`` members, read as streams, compressed or not."""

from __future__ import annotations

import zipfile
import zlib
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import IO, Self

import numpy as np
from numpy.typing import NDArray

from probes.errors import NotYet, ReadError, Refused
from probes.formats.blocks import (
    KINDS,
    STEP_NAMES,
    TIME_NAMES,
    clock_value,
    contiguous_slabs,
    usable,
    whole,
)
from probes.formats.npy import read_header
from probes.snapshot import Contents, FieldInfo
from probes.spec import SnapshotSpec

_BROKEN = (zipfile.BadZipFile, zlib.error, EOFError, NotImplementedError, RuntimeError)


class NpzFile:
    """One open archive. Scalar members may hold step and time."""

    def __init__(self, path: Path, spec: SnapshotSpec) -> None:
        self._where, self._spec = str(path), spec
        try:
            self._archive = zipfile.ZipFile(path)
        except FileNotFoundError as error:
            raise NotYet("the file has gone", self._where) from error
        except (zipfile.BadZipFile, EOFError) as error:
            # The directory of a zip archive stands at its end: it may still come.
            raise NotYet("the archive has no directory yet", self._where) from error
        except OSError as error:
            raise ReadError(f"cannot be opened ({error.strerror or error})", self._where) from error

    def _open(self, member: str) -> IO[bytes]:
        try:
            return self._archive.open(member)
        except KeyError as error:
            raise ReadError(f"there is no member {member!r}", self._where) from error
        except (*_BROKEN, OSError) as error:
            raise ReadError(f"member {member!r} is damaged ({error})", self._where) from error

    def _header(self, member: str) -> FieldInfo:
        with self._open(member) as stream:
            try:
                return read_header(stream, member.removesuffix(".npy"), self._where)
            except _BROKEN as error:
                raise ReadError(f"member {member!r} is damaged ({error})", self._where) from error

    def _scalar(self, name: str) -> float | None:
        member = f"{name}.npy"
        if member not in self._archive.namelist():
            return None
        info = self._header(member)
        dtype = np.dtype(info.dtype)
        if dtype.kind not in "fiub" or info.nbytes != dtype.itemsize:
            return None
        with self._open(member) as stream:
            read_header(stream, name, self._where)
            data = stream.read(dtype.itemsize)
        if len(data) < dtype.itemsize:
            raise NotYet("the data end early", self._where)
        return float(np.frombuffer(data, dtype)[0])

    def contents(self) -> Contents:
        fields, notes = [], []
        for member in self._archive.namelist():
            if not member.endswith(".npy"):
                notes.append(f"{member!r} left out: no array")
                continue
            try:
                info = self._header(member)
            except Refused as error:
                notes.append(f"{member!r} left out: {error.what}")
                continue
            if info.shape in ((), (1,)) and np.dtype(info.dtype).kind in KINDS:
                continue
            why = usable(info.name, info.shape, np.dtype(info.dtype))
            if why:
                notes.append(why)
            else:
                fields.append(info)
        step = clock_value(self._spec.step, STEP_NAMES, _none, self._scalar)
        time = clock_value(self._spec.time, TIME_NAMES, _none, self._scalar)
        return Contents(tuple(fields), steps=(whole(step),), times=(time,), notes=tuple(notes))

    def slabs(self, field: str, record: int, planes: int) -> Iterator[NDArray[np.generic]]:
        if record:
            raise ReadError(f"there is no record {record}", self._where)
        with self._open(f"{field}.npy") as stream:
            try:
                info = read_header(stream, field, self._where)
                yield from contiguous_slabs(stream, info, planes, self._where)  # type: ignore[arg-type]
            except _BROKEN as error:
                raise ReadError(f"member {field!r} is damaged ({error})", self._where) from error

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._archive.close()


def _none(name: str) -> None:
    return None


class NpzReader:
    """Array members are fields; scalar members named like a step or a time are just that."""

    name = "npz"
    suffixes: tuple[str, ...] = (".npz",)

    def recognises(self, head: bytes, path: Path) -> bool:
        return head.startswith((b"PK\x03\x04", b"PK\x05\x06"))

    def open(self, path: Path, spec: SnapshotSpec) -> NpzFile:
        return NpzFile(path, spec)
