"""NetCDF-3 records: interleaving, padding, streaming counts, coordinates and clocks."""

from __future__ import annotations

from pathlib import Path

import netCDF4
import numpy as np
import pytest

from probes.errors import NotYet, ReadError
from tests.probes.formats.writers import contents, read


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "run.nc"


def make(path: Path, form: str = "NETCDF3_CLASSIC", kind: str = "i2", alone: bool = False) -> None:
    """Three records of h (3 cells of `kind`, so that each is padded) beside others."""
    with netCDF4.Dataset(path, "w", format=form) as data:
        data.createDimension("record", None)
        data.createDimension("x", 3)
        data.createVariable("h", kind, ("record", "x"))[:] = np.arange(9).reshape(3, 3)
        if not alone:
            data.createVariable("v", "f8", ("record", "x"))[:] = np.arange(9).reshape(3, 3) / 7
            data.createVariable("time", "f8", ("record",))[:] = [0.0, 0.5, 1.0]
            data.createVariable("step", "i4", ("record",))[:] = [0, 5, 10]
            data.createVariable("x", "f4", ("x",))[:] = [0, 1, 2]


@pytest.mark.parametrize("form", ["NETCDF3_CLASSIC", "NETCDF3_64BIT_OFFSET", "NETCDF3_64BIT_DATA"])
def test_records_lie_between_each_other(form: str, path: Path) -> None:
    """Every record of every variable, as the defining library wrote it."""
    make(path, form)
    found = contents(path)
    assert found.growing
    assert [f.name for f in found.fields] == ["h", "v"]
    assert (found.steps, found.times) == ((0, 5, 10), (0.0, 0.5, 1.0))
    for record in range(3):
        np.testing.assert_array_equal(
            read(path, "h", 2, record), [3 * record + i for i in range(3)]
        )
        np.testing.assert_array_equal(
            read(path, "v", 2, record), np.arange(9).reshape(3, 3)[record] / 7
        )


def test_a_single_record_variable_is_not_padded(path: Path) -> None:
    """The exception of the format: six bytes a record, not eight."""
    make(path, alone=True)
    np.testing.assert_array_equal(read(path, "h", 3, 2), [6, 7, 8])


def test_the_last_record_counts_when_it_is_all_there(path: Path) -> None:
    """A cut file has the records that are whole (8 + 24 + 8 + 4 bytes each), whatever its header
    counts."""
    make(path)
    data = path.read_bytes()
    for cut, records in ((0, 3), (1, 2), (44, 2), (45, 1), (88, 1), (89, 0)):
        path.write_bytes(data[: len(data) - cut])
        assert contents(path).records == records


def test_a_streaming_count(path: Path) -> None:
    """A writer that does not know the number yet writes all ones; the size of the file tells."""
    make(path)
    data = bytearray(path.read_bytes())
    data[4:8] = b"\xff" * 4
    path.write_bytes(bytes(data))
    assert contents(path).records == 3


def test_clock_from_attributes(path: Path) -> None:
    """Without a record axis step and time are global attributes or single numbers."""
    with netCDF4.Dataset(path, "w", format="NETCDF3_CLASSIC") as data:
        data.createDimension("x", 4)
        data.createVariable("u", "f4", ("x",))[:] = np.arange(4)
        data.createVariable("time", "f8", ())[...] = 2.5
        data.step = np.int32(7)
    found = contents(path)
    assert (found.steps, found.times) == ((7,), (2.5,))
    assert [f.name for f in found.fields] == ["u"]


@pytest.mark.parametrize("at", [8, 12])
def test_counts_beyond_reason(at: int, path: Path) -> None:
    """A damaged count of list entries neither loops nor allocates."""
    make(path)
    data = bytearray(path.read_bytes())
    data[at : at + 4] = b"\x7f\xff\xff\xff"
    path.write_bytes(bytes(data))
    with pytest.raises((NotYet, ReadError)):
        contents(path)
