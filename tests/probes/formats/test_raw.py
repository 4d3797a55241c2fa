"""Headerless files by their description; Fortran's unformatted records as one."""

from __future__ import annotations

import struct
from pathlib import Path

import numpy as np
import pytest

from probes.errors import NotYet, Refused
from probes.spec import RawSpec
from tests.probes.formats.writers import contents, read


def test_fortran_unformatted_records(tmp_path: Path) -> None:
    """Two fields in column order, each between four-byte markers (sequential access; the markers
    are common practice of compilers, no standard fixes them)."""
    path = tmp_path / "state.dat"
    u, v = np.arange(12.0).reshape(3, 4), np.arange(12.0, 24.0).reshape(3, 4)
    mark = struct.pack("<i", u.nbytes)
    path.write_bytes(b"".join(mark + a.tobytes(order="F") + mark for a in (u, v)))
    raw = RawSpec(fields=("u", "v"), shape=(3, 4), order="F", header_bytes=4, gap_bytes=8)
    assert [f.stored_shape for f in contents(path, raw=raw).fields] == [(4, 3), (4, 3)]
    np.testing.assert_array_equal(read(path, "u", 2, raw=raw), u)
    np.testing.assert_array_equal(read(path, "v", 3, raw=raw), v)


def test_a_short_file_is_not_there_yet(tmp_path: Path) -> None:
    """One byte less than the description asks for; the last gap may be missing."""
    path = tmp_path / "u.bin"
    raw = RawSpec(fields=("a", "b"), shape=(5,), header_bytes=3, gap_bytes=2)
    path.write_bytes(bytes(3 + 40 + 2 + 40))
    assert len(contents(path, raw=raw).fields) == 2
    path.write_bytes(bytes(3 + 40 + 2 + 39))
    with pytest.raises(NotYet, match="84 of 85 bytes"):
        contents(path, raw=raw)


def test_without_a_description(tmp_path: Path) -> None:
    """Asked for by name, the reader says what is missing."""
    path = tmp_path / "u.bin"
    path.write_bytes(bytes(80))
    with pytest.raises(Refused, match="layout") as caught:
        contents(path, format="raw")
    assert "[snapshots.raw]" in caught.value.remedy
