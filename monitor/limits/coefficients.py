"""Coefficients from files: one value per cell, or a formula of a snapshot's fields."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from probes.errors import ReadError, SettingsError
from probes.formats import open_snapshot
from probes.limits.formula import evaluate
from probes.snapshot import FieldInfo, OpenSnapshot
from probes.spec import SnapshotSpec

Array = NDArray[np.float64]

_FILE = re.compile(r"(?P<path>.+\.(?:npy|npz|h5|hdf5|he5|nc|nc4|cdf))(?::(?P<field>.+))?", re.I)
# Larger coefficient fields are better analysed as a coarser sample.
_LARGEST = 2 << 30


class Coefficients:
    """Looks texts of settings up. folder: that relative paths start from. snapshot: the file whose
    fields formulas name, or "". layout: how its format is read."""

    def __init__(self, folder: Path, snapshot: str, layout: SnapshotSpec | None = None) -> None:
        self._folder = folder
        self._snapshot = folder / snapshot if snapshot else None
        self._layout = layout or SnapshotSpec(pattern=("*",))
        self._fields: dict[str, Array] = {}

    def __call__(self, text: str, where: str) -> Array:
        """Values of a text like "k.npy", "run.h5:/k" or "sqrt(9.81 * h)".

        Raises SettingsError naming `where`.
        """
        found = _FILE.fullmatch(text.strip())
        if found:
            return self._read(self._folder / found["path"], found["field"] or "", where)
        return evaluate(text, lambda name: self._field(name, where), where)

    def _field(self, name: str, where: str) -> Array:
        if self._snapshot is None:
            raise SettingsError(
                f"names the field {name!r}, but no snapshot is given",
                where,
                "give --snapshot FILE or [scheme] snapshot, or a number",
            )
        if name not in self._fields:
            self._fields[name] = self._read(self._snapshot, name, where)
        return self._fields[name]

    def _read(self, path: Path, name: str, where: str) -> Array:
        if not path.exists():
            raise SettingsError(f"there is no file {path}", where)
        try:
            with open_snapshot(path, self._layout) as snapshot:
                contents = snapshot.contents()
                info = _chosen(contents.fields, name, path, where)
                if info.nbytes > _LARGEST:
                    what = f"{info.name} holds {info.nbytes / 2**30:.1f} GiB"
                    raise SettingsError(what, where, "give every second or fourth cell of it")
                return _whole(snapshot, info, max(0, contents.records - 1))
        except (ReadError, OSError) as error:
            raise SettingsError(f"cannot be read: {error}", where) from error


def _chosen(fields: tuple[FieldInfo, ...], name: str, path: Path, where: str) -> FieldInfo:
    """The field of that name or whose path ends in it; the only one if no name is given."""
    found = [f for f in fields if f.name.strip("/") == name.strip("/")]
    found = found or [f for f in fields if f.name.rsplit("/", 1)[-1] == name]
    if not name or len(fields) == 1:
        found = list(fields)
    if len(found) != 1:
        held = ", ".join(f.name for f in fields[:8]) or "no array"
        what = f"{path.name} holds {held}" + (f", not {name!r}" if name else "")
        raise SettingsError(what, where, "name one, like FILE:FIELD")
    if "c" in found[0].dtype:
        raise SettingsError(f"{found[0].name} is complex", where, "coefficients must be real")
    return found[0]


def _whole(snapshot: OpenSnapshot, info: FieldInfo, record: int) -> Array:
    out = np.empty(info.stored_shape, dtype=np.float64)
    at = 0
    for slab in snapshot.slabs(info.name, record, 64):
        out[at : at + slab.shape[0]] = slab
        at += slab.shape[0]
    return out.T if info.fortran else out
