"""Files of every format, written by the libraries that define them, and one way to read them."""

from __future__ import annotations

import zipfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import h5py
import netCDF4
import numpy as np
from numpy.typing import NDArray
from scipy.io import netcdf_file

from probes.formats import open_snapshot
from probes.snapshot import Contents
from probes.spec import RawSpec, SnapshotSpec

Array = NDArray[np.generic]
FLOATS = ("<f2", "<f4", "<f8", ">f4", ">f8")
INTEGERS = ("|i1", "|u1", "<i2", ">i4", "<i8", "<u8")
COMPLEX = ("<c8", "<c16", ">c16")


def spec(**more: object) -> SnapshotSpec:
    return SnapshotSpec(pattern=("*",), **more)  # type: ignore[arg-type]


def read(path: Path, field: str, planes: int = 3, record: int = 0, **more: object) -> Array:
    """All values of a field in logical order, put together from copies of its slabs."""
    with open_snapshot(path, spec(**more)) as snapshot:
        info = next(f for f in snapshot.contents().fields if f.name == field)
        slabs = [slab.copy() for slab in snapshot.slabs(field, record, planes)]
    assert all(s.shape[1:] == info.stored_shape[1:] and len(s) <= planes for s in slabs)
    whole = np.concatenate(slabs)
    assert whole.shape == info.stored_shape
    assert {s.dtype for s in slabs} == {np.dtype(info.dtype)}
    return whole.T if info.fortran else whole


def contents(path: Path, **more: object) -> Contents:
    with open_snapshot(path, spec(**more)) as snapshot:
        return snapshot.contents()


@dataclass(frozen=True)
class Form:
    """One way of writing one field "u" to a file.

    dtypes: number types it can hold. fixed: it has sizes that a cut file falls short of.
    """

    name: str
    suffix: str
    write: Callable[[Path, Array], None]
    dtypes: tuple[str, ...]
    fixed: bool = True

    def settings(self, values: Array) -> dict[str, object]:
        """What the reader must be told besides the file."""
        if self.name != "raw":
            return {}
        return {"raw": RawSpec(fields=("u",), shape=values.shape, dtype=values.dtype.str)}


def _npy(path: Path, values: Array) -> None:
    np.save(path, values)


def _npz(path: Path, values: Array) -> None:
    np.savez(path, u=values)


def _npz_packed(path: Path, values: Array) -> None:
    np.savez_compressed(path, u=values)


def _hdf5(path: Path, values: Array) -> None:
    with h5py.File(path, "w") as file:
        file["u"] = values


def _hdf5_packed(path: Path, values: Array) -> None:
    with h5py.File(path, "w") as file:
        chunks = tuple(min(n, 3) for n in values.shape)
        file.create_dataset("u", data=values, chunks=chunks, compression="gzip", shuffle=True)


def _netcdf4(path: Path, values: Array) -> None:
    _by_netcdf4(path, values, "NETCDF4")


def _netcdf3(path: Path, values: Array) -> None:
    _by_netcdf4(path, values, "NETCDF3_CLASSIC")


def _netcdf3_wide(path: Path, values: Array) -> None:
    _by_netcdf4(path, values, "NETCDF3_64BIT_DATA")


def _by_netcdf4(path: Path, values: Array, form: str) -> None:
    with netCDF4.Dataset(path, "w", format=form) as data:
        names = [f"axis{a}" for a in range(values.ndim)]
        for name, n in zip(names, values.shape, strict=True):
            data.createDimension(name, n)
        data.createVariable("u", values.dtype.newbyteorder("="), names)[...] = values


def _netcdf3_scipy(path: Path, values: Array) -> None:
    with netcdf_file(path, "w", version=2) as data:
        names = [f"axis{a}" for a in range(values.ndim)]
        for name, n in zip(names, values.shape, strict=True):
            data.createDimension(name, n)
        data.createVariable("u", values.dtype.newbyteorder(">"), names)[...] = values


def _raw(path: Path, values: Array) -> None:
    values.tofile(path)


_CLASSIC = ("|i1", "<i2", ">i4", "<f4", ">f4", "<f8", ">f8")

FORMS = (
    Form("npy", ".npy", _npy, FLOATS + INTEGERS + COMPLEX),
    Form("npz", ".npz", _npz, FLOATS + INTEGERS + COMPLEX),
    Form("npz-packed", ".npz", _npz_packed, FLOATS + INTEGERS + COMPLEX),
    Form("hdf5", ".h5", _hdf5, FLOATS + INTEGERS + COMPLEX),
    Form("hdf5-packed", ".h5", _hdf5_packed, FLOATS + INTEGERS + COMPLEX),
    Form("netcdf4", ".nc", _netcdf4, ("<f4", "<f8", "<i2", "<i4")),
    Form("netcdf3", ".nc", _netcdf3, _CLASSIC),
    Form("netcdf3-wide", ".nc", _netcdf3_wide, (*_CLASSIC, "<i8", "<u8", "|u1")),
    Form("netcdf3-scipy", ".nc", _netcdf3_scipy, ("<i2", ">i4", "<f4", ">f8")),
    Form("raw", ".bin", _raw, FLOATS + INTEGERS + COMPLEX),
)


def members(path: Path) -> list[str]:
    with zipfile.ZipFile(path) as archive:
        return archive.namelist()
