"""Archives: members of all kinds, and nothing that runs or swells."""

from __future__ import annotations

import io
import zipfile
from pathlib import Path

import numpy as np
import pytest

from probes.errors import ReadError, Refused
from tests.probes.formats.writers import contents, read


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "state.npz"


def test_fields_and_clock(path: Path) -> None:
    """Arrays are fields, single numbers named like a step and a time are just that."""
    np.savez(path, h=np.ones((3, 4)), u=np.zeros((3, 5), "f4"), step=np.int64(30), time=1.5)
    found = contents(path)
    assert [(f.name, f.shape, f.dtype) for f in found.fields] == [
        ("h", (3, 4), "<f8"),
        ("u", (3, 5), "<f4"),
    ]
    assert (found.steps, found.times) == ((30,), (1.5,))


def test_objects_are_never_loaded(path: Path) -> None:
    """A pickled member is left out with a note; a file of one is refused."""
    np.savez(path, h=np.ones((3, 3)), bad=np.array([{"a": 1}], dtype=object))
    found = contents(path)
    assert [f.name for f in found.fields] == ["h"]
    assert any("objects" in note for note in found.notes)
    alone = path.with_suffix(".npy")
    np.save(alone, np.array([object()], dtype=object), allow_pickle=True)
    with pytest.raises(Refused, match="objects"):
        contents(alone)


def test_names_of_members_are_text(path: Path) -> None:
    """Control characters in a name neither break the reading nor reach a terminal unescaped."""
    with zipfile.ZipFile(path, "w") as archive:
        for name in ("a\x1b[31m.npy", "note\n.txt"):
            stream = io.BytesIO()
            np.save(stream, np.ones(4))
            archive.writestr(name, stream.getvalue())
    found = contents(path)
    assert [f.name for f in found.fields] == ["a\x1b[31m"]
    assert all(note.isprintable() for note in found.notes)


def test_a_member_that_declares_more_than_it_holds(path: Path) -> None:
    """A header of a terabyte over a few bytes ends the reading early instead of filling memory."""
    stream = io.BytesIO()
    np.lib.format.write_array_header_1_0(
        stream, {"descr": "<f8", "fortran_order": False, "shape": (1 << 20, 1 << 17)}
    )
    with zipfile.ZipFile(path, "w") as archive:
        archive.writestr("h.npy", stream.getvalue() + b"\0" * 64)
    with pytest.raises(ReadError):
        read(path, "h", 1)


def test_a_bomb_is_read_in_slabs(path: Path) -> None:
    """Eighty megabytes of zeros packed into as many kB come out in pieces of the asked size."""
    from probes.formats import open_snapshot
    from tests.probes.formats.writers import spec

    np.savez_compressed(path, h=np.zeros((10_000, 1000)))
    assert path.stat().st_size < 200_000
    with open_snapshot(path, spec()) as snapshot:
        largest = max(slab.nbytes for slab in snapshot.slabs("h", 0, 16))
    assert largest == 16 * 8000


def test_damaged_data_of_a_member(path: Path) -> None:
    """The checksum of the archive is heeded."""
    np.savez_compressed(path, h=np.random.default_rng(3).standard_normal((40, 40)))
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0xFF
    path.write_bytes(bytes(data))
    with pytest.raises(ReadError):
        read(path, "h", 5)
