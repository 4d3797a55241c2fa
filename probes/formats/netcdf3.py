"""NetCDF-3: classic, 64-bit offset and 64-bit data files, read by offset from their header.

The header gives every variable's place in the file (Unidata, "NetCDF Classic Format
Specification"), so that blocks are read as they are needed; record variables are interleaved
record by record.
"""

from __future__ import annotations

import math
import os
import struct
from collections.abc import Iterator
from dataclasses import dataclass, field
from io import BufferedReader
from pathlib import Path
from types import TracebackType
from typing import Self

import numpy as np
from numpy.typing import NDArray

from probes.errors import NotYet, ReadError
from probes.formats.blocks import (
    STEP_NAMES,
    TIME_NAMES,
    clock_value,
    contiguous_slabs,
    fill,
    usable,
    whole,
)
from probes.snapshot import Contents, FieldInfo
from probes.spec import SnapshotSpec

_TYPES = {
    1: ">i1",
    2: "S1",
    3: ">i2",
    4: ">i4",
    5: ">f4",
    6: ">f8",
    7: ">u1",
    8: ">u2",
    9: ">u4",
    10: ">i8",
    11: ">u8",
}
_DIMENSION, _VARIABLE, _ATTRIBUTE = 10, 11, 12
_STREAMING = {4: 0xFFFFFFFF, 8: 0xFFFFFFFFFFFFFFFF}
# More than any real header; a damaged count must not make us loop or allocate.
_MOST = 100_000


@dataclass(frozen=True)
class _Variable:
    name: str
    shape: tuple[int, ...]
    dtype: np.dtype[np.generic]
    begin: int
    record: bool

    @property
    def nbytes(self) -> int:
        """Of one record, or of the whole where there is no record axis."""
        return math.prod(self.shape) * self.dtype.itemsize


@dataclass
class _Header:
    records: int = 0
    streaming: bool = False
    attributes: dict[str, float] = field(default_factory=dict)
    variables: dict[str, _Variable] = field(default_factory=dict)
    dimensions: frozenset[str] = frozenset()
    stride: int = 0


class _Cursor:
    """Reads the header's big-endian items; a header that ends early is not written yet."""

    def __init__(self, file: BufferedReader, where: str) -> None:
        self._file, self._where = file, where
        self.wide = 4

    def take(self, n: int) -> bytes:
        data = self._file.read(n)
        if len(data) < n:
            raise NotYet("the header ends early", self._where)
        return data

    def word(self) -> int:
        """A 32-bit number (tags, types)."""
        return int(struct.unpack(">I", self.take(4))[0])

    def size(self) -> int:
        """A count: 64 bits wide in the 64-bit data form."""
        return int(struct.unpack(">Q" if self.wide == 8 else ">I", self.take(self.wide))[0])

    def count(self) -> int:
        n = self.size()
        if n > _MOST:
            raise ReadError(f"damaged header (a list of {n} items)", self._where)
        return n

    def name(self) -> str:
        n = self.count()
        text = self.take(n).decode("utf-8", "replace")
        self.take(-n % 4)
        return text

    def listed(self, tag: int) -> int:
        """Number of entries of a list with this tag; absent lists are two zeros."""
        found = self.word()
        n = self.count()
        if found not in (0, tag) or (found == 0 and n):
            raise ReadError("damaged header (a list has the wrong tag)", self._where)
        return n

    def kind(self) -> np.dtype[np.generic]:
        code = self.word()
        if code not in _TYPES:
            raise ReadError(f"damaged header (number type {code})", self._where)
        return np.dtype(_TYPES[code])

    def attributes(self) -> dict[str, float]:
        out = {}
        for _ in range(self.listed(_ATTRIBUTE)):
            name, dtype, n = self.name(), self.kind(), self.count()
            data = self.take(n * dtype.itemsize)
            self.take(-(n * dtype.itemsize) % 4)
            if n == 1 and dtype.kind in "fiu":
                out[name] = float(np.frombuffer(data, dtype)[0])
        return out


def _parse(file: BufferedReader, where: str) -> _Header:
    cursor = _Cursor(file, where)
    magic = cursor.take(4)
    if magic[:3] != b"CDF" or magic[3] not in (1, 2, 5):
        raise ReadError("is no NetCDF-3 file", where)
    offset_format = ">I" if magic[3] == 1 else ">Q"
    cursor.wide = 8 if magic[3] == 5 else 4
    header = _Header()
    header.records = cursor.size()
    header.streaming = header.records == _STREAMING[cursor.wide]
    dimensions = [(cursor.name(), cursor.size()) for _ in range(cursor.listed(_DIMENSION))]
    # A variable named like a dimension holds its coordinates.
    header.dimensions = frozenset(name for name, _ in dimensions)
    header.attributes = cursor.attributes()
    for _ in range(cursor.listed(_VARIABLE)):
        name = cursor.name()
        ids = [cursor.size() for _ in range(cursor.count())]
        cursor.attributes()
        dtype = cursor.kind()
        cursor.size()  # the stored size, too small a number for large variables: computed anew
        begin = int(struct.unpack(offset_format, cursor.take(struct.calcsize(offset_format)))[0])
        if any(i >= len(dimensions) for i in ids):
            raise ReadError("damaged header (a dimension that is not there)", where)
        sizes = [dimensions[i][1] for i in ids]
        record = bool(sizes) and sizes[0] == 0
        shape = tuple(sizes[1:] if record else sizes)
        header.variables[name] = _Variable(name, shape, dtype, begin, record)
    records = [v for v in header.variables.values() if v.record]
    if len(records) == 1:
        # The one exception: a single record variable is not padded to four bytes.
        header.stride = records[0].nbytes
    else:
        header.stride = sum(v.nbytes + -v.nbytes % 4 for v in records)
    return header


class Netcdf3File:
    """One open NetCDF-3 file."""

    def __init__(self, path: Path, spec: SnapshotSpec) -> None:
        self._where, self._spec = str(path), spec
        try:
            self._file = open(path, "rb")  # noqa: SIM115 (closed by __exit__)
        except FileNotFoundError as error:
            raise NotYet("the file has gone", self._where) from error
        except OSError as error:
            raise ReadError(f"cannot be opened ({error.strerror})", self._where) from error
        try:
            self._header = _parse(self._file, self._where)
            self._size = os.fstat(self._file.fileno()).st_size
            for v in self._header.variables.values():
                if not v.record and v.begin + v.nbytes > self._size:
                    raise NotYet(f"variable {v.name!r} is not all there yet", self._where)
        except BaseException:
            self._file.close()
            raise

    def _growing(self) -> bool:
        return self._spec.record_axis != "no" and any(
            v.record for v in self._header.variables.values()
        )

    def _records(self) -> int:
        """Complete records: what the header counts, but no more than the file holds."""
        ends = [v.begin + v.nbytes for v in self._header.variables.values() if v.record]
        if not ends or not self._header.stride:
            return 0
        whole_ones = max(0, (self._size - max(ends)) // self._header.stride + 1)
        if self._header.streaming:
            return whole_ones
        return min(self._header.records, whole_ones)

    def _row(self, v: _Variable) -> list[float]:
        """A record variable of single numbers, all records."""
        out = []
        for record in range(self._records()):
            self._file.seek(v.begin + record * self._header.stride)
            buffer = bytearray(v.dtype.itemsize)
            fill(self._file, memoryview(buffer), self._where)
            out.append(float(np.frombuffer(buffer, v.dtype)[0]))
        return out

    def contents(self) -> Contents:
        variables, growing = self._header.variables, self._growing()
        fields, notes = [], []
        for v in variables.values():
            if growing != v.record:
                continue
            if v.shape in ((), (1,)) or (len(v.shape) == 1 and v.name in self._header.dimensions):
                continue
            why = usable(v.name, v.shape, v.dtype)
            if why:
                notes.append(why)
            else:
                fields.append(FieldInfo(v.name, v.shape, v.dtype.str))
        if not growing:
            return Contents(
                tuple(fields),
                steps=(whole(self._clock(self._spec.step, STEP_NAMES)),),
                times=(self._clock(self._spec.time, TIME_NAMES),),
                notes=tuple(notes),
            )
        records = self._records()
        steps = self._history(self._spec.step, STEP_NAMES)
        times = self._history(self._spec.time, TIME_NAMES)
        return Contents(
            tuple(fields),
            records=records,
            growing=True,
            steps=tuple(whole(s) for s in steps) if steps else (None,) * records,
            times=tuple(times) if times else (None,) * records,
            notes=tuple(notes),
        )

    def _clock(self, wanted: str, names: tuple[str, ...]) -> float | None:
        def dataset(name: str) -> float | None:
            v = self._header.variables.get(name)
            if v is None or v.record or v.shape not in ((), (1,)) or v.dtype.kind not in "fiu":
                return None
            self._file.seek(v.begin)
            buffer = bytearray(v.dtype.itemsize)
            fill(self._file, memoryview(buffer), self._where)
            return float(np.frombuffer(buffer, v.dtype)[0])

        return clock_value(wanted, names, self._header.attributes.get, dataset)

    def _history(self, wanted: str, names: tuple[str, ...]) -> list[float] | None:
        chosen = names
        if wanted.startswith("dataset:"):
            chosen = (wanted.partition(":")[2],)
        elif wanted != "auto":
            return None
        for name in chosen:
            v = self._header.variables.get(name)
            if v is not None and v.record and v.shape in ((), (1,)) and v.dtype.kind in "fiu":
                return self._row(v)
        return None

    def slabs(self, field: str, record: int, planes: int) -> Iterator[NDArray[np.generic]]:
        v = self._header.variables.get(field)
        if v is None or (record and not v.record):
            raise ReadError(f"there is no record {record} of {field!r}", self._where)
        if v.record and record >= self._records():
            raise NotYet(f"record {record} is not there yet", self._where)
        self._file.seek(v.begin + (record * self._header.stride if v.record else 0))
        info = FieldInfo(v.name, v.shape, v.dtype.str)
        yield from contiguous_slabs(self._file, info, planes, self._where)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._file.close()


class Netcdf3Reader:
    """Classic, 64-bit offset and 64-bit data files."""

    name = "netcdf3"
    suffixes: tuple[str, ...] = (".nc", ".cdf")

    def recognises(self, head: bytes, path: Path) -> bool:
        return head.startswith((b"CDF\x01", b"CDF\x02", b"CDF\x05"))

    def open(self, path: Path, spec: SnapshotSpec) -> Netcdf3File:
        return Netcdf3File(path, spec)
