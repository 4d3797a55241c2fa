"""``.npy``: one array per file (NumPy enhancement proposal 1, the format's description)."""

from __future__ import annotations

import io
import os
import struct
from collections.abc import Iterator
from io import BufferedReader
from pathlib import Path
from tokenize import TokenError
from types import TracebackType
from typing import IO, Self

import numpy as np
from numpy.lib import format as npy_format
from numpy.typing import NDArray

from probes.errors import NotYet, ReadError, Refused
from probes.formats.blocks import contiguous_slabs, usable
from probes.snapshot import Contents, FieldInfo
from probes.spec import SnapshotSpec

# A header is a short dictionary; a longer one is damage, and parsing it would be slow.
_LONGEST_HEADER = 10_000
# What NumPy raises for headers that are no dictionary of the right kind, besides ValueError.
_DAMAGE = (EOFError, SyntaxError, TypeError, OverflowError, UnicodeDecodeError, TokenError)


def read_header(file: IO[bytes], name: str, where: str) -> FieldInfo:
    """Shape, type and order from the header at the present position.

    Raises NotYet for a header that ends early, Refused for objects, ReadError for damage.
    """
    try:
        version = npy_format.read_magic(file)
        size = struct.Struct("<H" if version == (1, 0) else "<I")
        start = file.read(size.size)
        if len(start) < size.size:
            raise NotYet("the header ends early", where)
        if size.unpack(start)[0] > _LONGEST_HEADER:
            raise ReadError(f"damaged header (of {size.unpack(start)[0]} bytes)", where)
        header = io.BytesIO(start + file.read(size.unpack(start)[0]))
        read = {
            (1, 0): npy_format.read_array_header_1_0,
            (2, 0): npy_format.read_array_header_2_0,
        }.get(version)
        if read is None:
            raise Refused(f"version {version[0]}.{version[1]} of the format is not known", where)
        shape, fortran, dtype = read(header, max_header_size=_LONGEST_HEADER)
    except ValueError as error:
        if "EOF" in str(error):
            raise NotYet("the header ends early", where) from error
        raise ReadError(f"damaged header ({error})", where) from error
    except _DAMAGE as error:
        raise ReadError(f"damaged header ({error})", where) from error
    if dtype.hasobject:
        raise Refused("holds Python objects, which are never loaded", where)
    if any(n < 0 for n in shape):
        raise ReadError(f"damaged header (shape {shape})", where)
    return FieldInfo(name, tuple(int(n) for n in shape), dtype.str, bool(fortran))


class NpyFile:
    """One open ``.npy`` file."""

    def __init__(self, path: Path) -> None:
        self._where = str(path)
        try:
            self._file: BufferedReader = open(path, "rb")  # noqa: SIM115 (closed by __exit__)
        except FileNotFoundError as error:
            raise NotYet("the file has gone", self._where) from error
        except OSError as error:
            raise ReadError(f"cannot be opened ({error.strerror})", self._where) from error
        try:
            self._info = read_header(self._file, path.stem, self._where)
            self._start = self._file.tell()
            size = os.fstat(self._file.fileno()).st_size
            if size < self._start + self._info.nbytes:
                raise NotYet(
                    f"{size - self._start} of {self._info.nbytes} bytes are there", self._where
                )
        except BaseException:
            self._file.close()
            raise

    def contents(self) -> Contents:
        why = usable(self._info.name, self._info.shape, np.dtype(self._info.dtype))
        return Contents(fields=() if why else (self._info,), notes=(why,) if why else ())

    def slabs(self, field: str, record: int, planes: int) -> Iterator[NDArray[np.generic]]:
        if field != self._info.name or record:
            raise ReadError(f"there is no record {record} of {field!r}", self._where)
        self._file.seek(self._start)
        yield from contiguous_slabs(self._file, self._info, planes, self._where)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._file.close()


class NpyReader:
    """The field takes the file's stem as its name; step and time are not in the file."""

    name = "npy"
    suffixes: tuple[str, ...] = (".npy",)

    def recognises(self, head: bytes, path: Path) -> bool:
        return head.startswith(b"\x93NUMPY")

    def open(self, path: Path, spec: SnapshotSpec) -> NpyFile:
        return NpyFile(path)
