"""HDF5 beyond plain datasets: what is refused, what is left out, records, and no locks."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import h5py
import netCDF4
import numpy as np
import pytest

from probes.errors import Held, NotYet, Refused
from probes.formats import open_snapshot
from tests.probes.formats.writers import contents, read, spec


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "run.h5"


def names(path: Path, **more: object) -> list[str]:
    return [f.name for f in contents(path, **more).fields]


def test_data_in_another_file_are_refused(path: Path) -> None:
    """External storage would let a file name any other file of the user's."""
    other = path.with_name("secret.bin")
    other.write_bytes(np.arange(20.0).tobytes())
    with h5py.File(path, "w") as file:
        file.create_dataset("u", (20,), "<f8", external=[(str(other), 0, 160)])
    with pytest.raises(Refused, match="another file"):
        contents(path)


def test_virtual_data_are_refused(path: Path) -> None:
    """A virtual dataset reads other files too."""
    source = path.with_name("source.h5")
    with h5py.File(source, "w") as file:
        file["v"] = np.arange(20.0)
    with h5py.File(path, "w") as file:
        layout = h5py.VirtualLayout((20,), "<f8")
        layout[:] = h5py.VirtualSource(str(source), "v", shape=(20,))
        file.create_virtual_dataset("u", layout)
    with pytest.raises(Refused, match="virtual"):
        contents(path)


def test_links_are_not_followed(path: Path) -> None:
    """An external link is left out with a note, a soft link silently; a group that holds itself is
    walked once."""
    with h5py.File(path, "w") as file:
        file["a/u"] = np.ones((4, 4))
        file["away"] = h5py.ExternalLink("other.h5", "/v")
        file["again"] = h5py.SoftLink("/a/u")
        file["a/loop"] = file["a"]
        file["dangling"] = h5py.SoftLink("/nowhere")
    assert names(path) == ["a/u"]
    assert any("another file" in note for note in contents(path).notes)


def test_a_huge_chunk_is_refused(path: Path) -> None:
    """A file of a few kB may declare one chunk of gigabytes that a single zero would unpack."""
    with h5py.File(path, "w") as file:
        size = 300 << 17
        file.create_dataset("u", (size,), "<f8", chunks=(size,), compression="gzip")
    with pytest.raises(Refused, match="chunk"):
        contents(path)


def test_declared_but_never_written(path: Path) -> None:
    """A terabyte that was declared and not written takes no space: nothing to judge yet."""
    with h5py.File(path, "w") as file:
        file.create_dataset("u", (1 << 37,), "<f8", chunks=(1 << 16,))
    with pytest.raises(NotYet, match="no data yet"):
        contents(path)


def test_what_holds_no_numbers_is_left_out(path: Path) -> None:
    """Texts, records of several types and references do not hide the field beside."""
    with h5py.File(path, "w") as file:
        file["u"] = np.ones((3, 3))
        file["texts"] = ["one", "two"]
        file["fixed"] = np.array([b"ab", b"cd"])
        file["pairs"] = np.zeros(3, [("a", "<f8"), ("b", "<i4")])
        file.create_dataset("references", (2,), h5py.ref_dtype)
        file["empty"] = np.zeros((0, 4))
        file["nothing"] = h5py.Empty("<f8")
    assert names(path) == ["u"]


@pytest.mark.parametrize("place", ["attribute", "group", "dataset"])
def test_step_and_time(place: str, path: Path) -> None:
    """Found as attributes of the file or of a group, or as single numbers."""
    with h5py.File(path, "w") as file:
        file["u"] = np.ones((3, 3))
        if place == "dataset":
            file["step"], file["time"] = np.int32(40), np.array([0.5])
        else:
            holder = file if place == "attribute" else file.create_group("state")
            holder.attrs["iteration"], holder.attrs["time"] = np.int64(40), 0.5
    found = contents(path)
    assert (found.steps, found.times) == ((40,), (0.5,))
    assert names(path) == ["u"]


def test_named_step_and_time(path: Path) -> None:
    """Settings may name them; what is named and missing is refused."""
    with h5py.File(path, "w") as file:
        file["u"] = np.ones((3, 3))
        file["u"].attrs["k"] = 12
        file["clock/seconds"] = 3.5
    found = contents(path, step="attribute:u@k", time="dataset:/clock/seconds")
    assert (found.steps, found.times) == ((12,), (3.5,))
    with pytest.raises(Refused, match="nowhere"):
        contents(path, step="dataset:nowhere")


@pytest.mark.parametrize("library", ["h5py", "netCDF4"])
def test_records_of_a_growing_file(library: str, path: Path) -> None:
    """An unlimited first axis counts records; a row of steps tells how many are whole."""
    values = np.arange(60.0).reshape(3, 4, 5)
    if library == "h5py":
        with h5py.File(path, "w") as file:
            file.create_dataset("h", data=values, maxshape=(None, 4, 5), chunks=(1, 4, 5))
            file.create_dataset("step", data=[0, 10], maxshape=(None,))
            file["x"] = np.arange(5.0)
    else:
        with netCDF4.Dataset(path, "w") as data:
            for name, n in (("record", None), ("y", 4), ("x", 5)):
                data.createDimension(name, n)
            data.createVariable("h", "f8", ("record", "y", "x"))[:] = values
            data.createVariable("step", "i4", ("record",))[:2] = [0, 10]
            data.createVariable("x", "f8", ("x",))[:] = np.arange(5.0)
    found = contents(path)
    assert found.growing
    assert [f.name for f in found.fields] == ["h"]
    assert found.fields[0].shape == (4, 5)
    assert found.steps[:2] == (0, 10)
    for record in range(2):
        np.testing.assert_array_equal(read(path, "h", 3, record), values[record])
    with open_snapshot(path, spec()) as snapshot, pytest.raises(NotYet):
        list(snapshot.slabs("h", 3, 2))


def test_a_record_axis_can_be_denied(path: Path) -> None:
    """record_axis = "no" takes the whole array as one snapshot."""
    with h5py.File(path, "w") as file:
        file.create_dataset("h", data=np.ones((3, 4, 5)), maxshape=(None, 4, 5))
    assert contents(path, record_axis="no").fields[0].shape == (3, 4, 5)
    assert not contents(path, record_axis="no").growing


def test_reading_takes_no_lock(path: Path) -> None:
    """While a file is held open here, another process opens it for writing."""
    with h5py.File(path, "w") as file:
        file["u"] = np.ones((3, 3))
    code = "import h5py, sys; h5py.File(sys.argv[1], 'r+').close()"
    with open_snapshot(path, spec()) as snapshot:
        snapshot.contents()
        assert subprocess.run([sys.executable, "-c", code, str(path)], check=False).returncode == 0


def test_a_file_that_its_writer_holds(path: Path) -> None:
    """While another process keeps a file open for writing in the latest form, the library may not
    open it: then the reason given is the writer, with a remedy."""
    code = (
        "import h5py, sys; f = h5py.File(sys.argv[1], 'w', libver='latest');"
        "f['u'] = [[1.0, 2.0]]; f.flush(); print(flush=True); sys.stdin.read()"
    )
    words = [sys.executable, "-c", code, str(path)]
    with subprocess.Popen(words, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as writer:
        assert writer.stdout is not None
        writer.stdout.readline()
        with pytest.raises(Held, match="writer") as caught:
            contents(path)
        assert "SWMR" in caught.value.remedy
        writer.communicate(b"")
    assert names(path) == ["u"]
