"""Headerless binary files, laid out as ``[snapshots.raw]`` says."""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import Self

import numpy as np
from numpy.typing import NDArray

from probes.errors import NotYet, ReadError, Refused
from probes.formats.blocks import contiguous_slabs
from probes.snapshot import Contents, FieldInfo
from probes.spec import RawSpec, SnapshotSpec


class RawFile:
    """One open file of known layout."""

    def __init__(self, path: Path, raw: RawSpec) -> None:
        self._where, self._raw = str(path), raw
        self._fields = tuple(
            FieldInfo(name, raw.shape, raw.dtype, raw.order == "F") for name in raw.fields
        )
        try:
            self._file = open(path, "rb")  # noqa: SIM115 (closed by __exit__)
        except FileNotFoundError as error:
            raise NotYet("the file has gone", self._where) from error
        except OSError as error:
            raise ReadError(f"cannot be opened ({error.strerror})", self._where) from error
        size = os.fstat(self._file.fileno()).st_size
        needed = self._start(len(self._fields)) - (raw.gap_bytes if self._fields else 0)
        if size < needed:
            self._file.close()
            raise NotYet(f"{size} of {needed} bytes are there", self._where)

    def _start(self, index: int) -> int:
        one = self._fields[0].nbytes if self._fields else 0
        return self._raw.header_bytes + index * (one + self._raw.gap_bytes)

    def contents(self) -> Contents:
        return Contents(self._fields)

    def slabs(self, field: str, record: int, planes: int) -> Iterator[NDArray[np.generic]]:
        for index, info in enumerate(self._fields):
            if info.name == field and not record:
                self._file.seek(self._start(index))
                yield from contiguous_slabs(self._file, info, planes, self._where)
                return
        raise ReadError(f"there is no record {record} of {field!r}", self._where)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._file.close()


class RawReader:
    """Never recognised by content: needs ``[snapshots.raw]``."""

    name = "raw"
    suffixes: tuple[str, ...] = ()

    def recognises(self, head: bytes, path: Path) -> bool:
        return False

    def open(self, path: Path, spec: SnapshotSpec) -> RawFile:
        if spec.raw is None:
            raise Refused(
                "the layout of a headerless file is not known", str(path), "add [snapshots.raw]"
            )
        return RawFile(path, spec.raw)
