"""HDF5 (and NetCDF-4, which is HDF5): datasets by path, per file or on a growing record axis.

The file is never locked, nothing outside it is followed, and nothing is read whole. Damaged files
can hang or crash the library; the reading process is there for that.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import h5py
import numpy as np
from numpy.typing import NDArray

from probes.errors import Held, NotYet, Refused
from probes.formats.blocks import STEP_NAMES, TIME_NAMES, clock_value, usable, whole
from probes.snapshot import Contents, FieldInfo
from probes.spec import SnapshotSpec

# Largest single chunk that is decompressed, and most objects that are looked at.
_LARGEST_CHUNK = 256 << 20
_MOST_OBJECTS = 10_000


def open_file(path: Path) -> h5py.File:
    """The only place that opens HDF5. Raises NotYet, Held or ReadError.

    Without `locking=False` a shared lock is taken, and the solver's next open for writing fails.
    """
    where = str(path)
    try:
        return h5py.File(path, "r", locking=False)
    except FileNotFoundError as error:
        raise NotYet("the file has gone", where) from error
    except BlockingIOError as error:
        raise Held(_HELD, where, _HELD_REMEDY) from error
    except OSError as error:
        text = str(error)
        if "already open for write" in text or "unable to lock" in text or error.errno == 11:
            raise Held(_HELD, where, _HELD_REMEDY) from error
        raise NotYet(f"cannot be opened yet ({_short(text)})", where) from error
    except (RuntimeError, ValueError, KeyError) as error:
        raise NotYet(f"cannot be opened yet ({_short(str(error))})", where) from error


_HELD = "its writer holds the file open for writing"
_HELD_REMEDY = "let the solver close the file after each record, or write in SWMR mode"


def _short(text: str) -> str:
    return text.split("(", 1)[-1].rstrip(")")[:160] or "no reason given"


class Hdf5File:
    """One open HDF5 file."""

    def __init__(self, path: Path, spec: SnapshotSpec) -> None:
        self._where, self._spec = str(path), spec
        self._file = open_file(path)
        self._growing = False

    # --- what is there ------------------------------------------------------------------

    def _datasets(self) -> tuple[dict[str, h5py.Dataset], list[str]]:
        """All datasets by path, found without following links out of the file or in circles."""
        found: dict[str, h5py.Dataset] = {}
        notes: list[str] = []
        seen: set[Any] = set()
        stack: list[tuple[str, h5py.Group]] = [("", self._file)]
        while stack:
            prefix, group = stack.pop()
            mark = h5py.h5o.get_info(group.id)
            if (mark.fileno, mark.addr) in seen:
                continue
            seen.add((mark.fileno, mark.addr))
            for name in group:
                path = f"{prefix}/{name}" if prefix else name
                kind = group.get(name, getlink=True)
                if isinstance(kind, h5py.ExternalLink):
                    notes.append(f"{path!r} left out: a link to another file")
                    continue
                if isinstance(kind, h5py.SoftLink):
                    continue
                item = group[name]
                if isinstance(item, h5py.Group):
                    stack.append((path, item))
                elif isinstance(item, h5py.Dataset):
                    found[path] = item
                if len(found) + len(stack) > _MOST_OBJECTS:
                    raise Refused(f"holds more than {_MOST_OBJECTS} objects", self._where)
        return found, notes

    def _check(self, path: str, dataset: h5py.Dataset) -> str:
        """Raises Refused for data from elsewhere and oversized chunks; returns why a dataset is no
        field, or ""."""
        if dataset.is_virtual:
            raise Refused(f"dataset {path!r} is virtual: its data lie in other files", self._where)
        if dataset.external:
            raise Refused(f"dataset {path!r} keeps its data in another file", self._where)
        if dataset.chunks is not None:
            chunk = math.prod(dataset.chunks) * dataset.dtype.itemsize
            if chunk > _LARGEST_CHUNK:
                raise Refused(
                    f"one chunk of dataset {path!r} is {chunk >> 20} MiB, the limit is "
                    f"{_LARGEST_CHUNK >> 20}",
                    self._where,
                    "write it in smaller chunks",
                )
        return usable(path, dataset.shape, dataset.dtype)

    def contents(self) -> Contents:
        try:
            return self._contents()
        except (OSError, RuntimeError, KeyError, ValueError) as error:
            raise NotYet(f"cannot be read yet ({_short(str(error))})", self._where) from error

    def _contents(self) -> Contents:
        datasets, notes = self._datasets()
        arrays = {
            p: d for p, d in datasets.items() if d.shape is not None and d.shape not in ((), (1,))
        }
        growing = self._records_on_axis(arrays)
        histories = {p for p in growing if len(arrays[p].shape) == 1}
        if growing and histories == set(growing):
            # Nothing but rows of numbers: the longest could be fields of one cell each.
            histories = {p for p in growing if _leaf(p) in (*STEP_NAMES, *TIME_NAMES)}
        scales = {p for p, d in arrays.items() if self._is_scale(p, d)}
        fields, counts = [], []
        for path, dataset in arrays.items():
            if path in histories or path in scales:
                continue
            record = path in growing
            shape = dataset.shape[1:] if record else dataset.shape
            if record:
                counts.append(dataset.shape[0])
                if 0 in dataset.shape[1:] or math.prod(shape) < 2:
                    continue
            why = self._check(path, dataset) if not record or dataset.shape[0] else ""
            if why:
                notes.append(why)
                continue
            fields.append(FieldInfo(path, tuple(int(n) for n in shape), dataset.dtype.str))
        if not growing:
            self._check_stored(arrays, fields)
            return Contents(
                tuple(fields),
                steps=(whole(self._clock(self._spec.step, STEP_NAMES, datasets)),),
                times=(self._clock(self._spec.time, TIME_NAMES, datasets),),
                notes=tuple(notes),
            )
        self._growing = True
        records = min(counts, default=0)
        steps = self._history(self._spec.step, STEP_NAMES, datasets, histories)
        times = self._history(self._spec.time, TIME_NAMES, datasets, histories)
        for history in (steps, times):
            records = min(records, len(history)) if history is not None else records
        # Fields without the record axis (coordinates, masks) do not change and are not judged.
        fields = [f for f in fields if f.name in growing]
        return Contents(
            tuple(fields),
            records=records,
            growing=True,
            steps=tuple(whole(s) for s in steps[:records]) if steps else (None,) * records,
            times=tuple(times[:records]) if times else (None,) * records,
            notes=tuple(notes),
        )

    def _records_on_axis(self, arrays: dict[str, h5py.Dataset]) -> set[str]:
        """Datasets whose first axis counts records."""
        if self._spec.record_axis == "no":
            return set()
        if self._spec.record_axis == "yes":
            return set(arrays)
        return {
            p for p, d in arrays.items() if d.maxshape and d.maxshape[0] is None and d.ndim >= 1
        }

    @staticmethod
    def _is_scale(path: str, dataset: h5py.Dataset) -> bool:
        """A NetCDF coordinate: a dimension scale, or a placeholder for a dimension."""
        return bool(dataset.ndim == 1 and dataset.attrs.get("CLASS") == b"DIMENSION_SCALE")

    def _check_stored(self, arrays: dict[str, h5py.Dataset], fields: list[FieldInfo]) -> None:
        """Contiguous data that are not all there yet: space is set aside when they are written."""
        for info in fields:
            dataset = arrays[info.name]
            stored = dataset.id.get_storage_size()
            if stored == 0 and dataset.size:
                raise NotYet(f"dataset {info.name!r} has no data yet", self._where)

    # --- clock --------------------------------------------------------------------------

    def _clock(
        self, wanted: str, names: tuple[str, ...], datasets: dict[str, h5py.Dataset]
    ) -> float | None:
        def attribute(name: str) -> float | None:
            holder, _, leaf = name.rpartition("@")
            places = [self._file[holder]] if holder in self._file and holder else []
            places += [self._file, *(self._file[g] for g in self._file if self._is_group(g))]
            for place in places:
                value = _number(place.attrs.get(leaf))
                if value is not None:
                    return value
            return None

        def dataset(name: str) -> float | None:
            found = datasets.get(name.lstrip("/"))
            if found is None or found.shape not in ((), (1,)):
                return None
            return _number(found[()])

        return clock_value(wanted, names, attribute, dataset)

    def _is_group(self, name: str) -> bool:
        link = self._file.get(name, getlink=True)
        return isinstance(link, h5py.HardLink) and isinstance(self._file[name], h5py.Group)

    def _history(
        self,
        wanted: str,
        names: tuple[str, ...],
        datasets: dict[str, h5py.Dataset],
        histories: set[str],
    ) -> list[float] | None:
        """Steps or times of all records, from a row of numbers."""
        if wanted in ("none", "name"):
            return None
        if wanted.startswith("dataset:"):
            path = wanted.partition(":")[2].lstrip("/")
            if path not in datasets:
                raise Refused(f"there is no dataset {path!r}", self._where)
        else:
            path = next((p for n in names for p in sorted(histories) if _leaf(p) == n), "")
        if not path or datasets[path].ndim != 1 or datasets[path].dtype.kind not in "fiu":
            return None
        return [float(v) for v in datasets[path][...]]

    # --- values -------------------------------------------------------------------------

    def slabs(self, field: str, record: int, planes: int) -> Iterator[NDArray[np.generic]]:
        try:
            dataset = self._file[field]
            self._check(field, dataset)
            growing = field in self._records_on_axis({field: dataset})
            if growing and record >= dataset.shape[0]:
                raise NotYet(f"record {record} is not there yet", self._where)
            yield from _slabs(dataset, record if growing else None, planes)
        except (OSError, RuntimeError, KeyError, ValueError) as error:
            raise NotYet(f"cannot be read yet ({_short(str(error))})", self._where) from error

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._file.close()


def _slabs(dataset: h5py.Dataset, record: int | None, planes: int) -> Iterator[NDArray[np.generic]]:
    """Blocks along the first axis, aligned with chunks so that none is decompressed twice."""
    shape = dataset.shape if record is None else dataset.shape[1:]
    chunks = dataset.chunks
    thick = 1 if chunks is None else chunks[0 if record is None else 1]
    step = max(1, planes // thick) * thick
    for at in range(0, shape[0], step):
        n = min(step, shape[0] - at)
        block = dataset[at : at + n] if record is None else dataset[record, at : at + n]
        for i in range(0, n, planes):
            yield block[i : i + planes]


def _leaf(path: str) -> str:
    return path.rsplit("/", 1)[-1]


def _number(value: Any) -> float | None:
    """A scalar of numbers as float; None for anything else."""
    if value is None:
        return None
    array = np.asarray(value)
    if array.size != 1 or array.dtype.kind not in "fiu":
        return None
    return float(array.reshape(-1)[0])


class Hdf5Reader:
    """Also reads NetCDF-4 files, whose variables are datasets."""

    name = "hdf5"
    suffixes: tuple[str, ...] = (".h5", ".hdf5", ".he5", ".nc", ".nc4")

    def recognises(self, head: bytes, path: Path) -> bool:
        return head.startswith(b"\x89HDF\r\n\x1a\n")

    def open(self, path: Path, spec: SnapshotSpec) -> Hdf5File:
        return Hdf5File(path, spec)
