"""Readers: one per file format, chosen by content first and name second.

Other distributions add readers through the entry-point group ``stepwarden.readers``; the
developers' guide shows a complete one. A reader is imported when a file first asks for it, so that
no format's library is loaded in vain.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from importlib.metadata import EntryPoint, entry_points
from pathlib import Path

from probes.errors import NotYet, ReadError, Refused
from probes.snapshot import OpenSnapshot, Reader
from probes.spec import SnapshotSpec

GROUP = "stepwarden.readers"
HEAD_BYTES = 512


def _npy() -> Reader:
    from probes.formats.npy import NpyReader

    return NpyReader()


def _npz() -> Reader:
    from probes.formats.npz import NpzReader

    return NpzReader()


def _hdf5() -> Reader:
    from probes.formats.hdf5 import Hdf5Reader

    return Hdf5Reader()


def _netcdf3() -> Reader:
    from probes.formats.netcdf3 import Netcdf3Reader

    return Netcdf3Reader()


def _raw() -> Reader:
    from probes.formats.raw import RawReader

    return RawReader()


# First bytes that decide a format without importing its reader, and the suffixes it may carry.
_OWN: dict[str, tuple[tuple[bytes, ...], tuple[str, ...], Callable[[], Reader]]] = {
    "npy": ((b"\x93NUMPY",), (".npy",), _npy),
    "npz": ((b"PK\x03\x04", b"PK\x05\x06"), (".npz",), _npz),
    "hdf5": ((b"\x89HDF\r\n\x1a\n",), (".h5", ".hdf5", ".he5", ".nc", ".nc4"), _hdf5),
    "netcdf3": ((b"CDF\x01", b"CDF\x02", b"CDF\x05"), (".nc", ".cdf"), _netcdf3),
    "raw": ((), (), _raw),
}


@cache
def _foreign() -> dict[str, EntryPoint]:
    return {e.name: e for e in entry_points(group=GROUP) if e.name not in _OWN}


@cache
def _loaded(name: str) -> Reader | str:
    """A reader of another distribution, or why it cannot be had."""
    try:
        reader = _foreign()[name].load()()
    except Exception as error:  # whatever a foreign module raises must not end the reading
        return f"reader {name!r} cannot be loaded: {type(error).__name__}: {error}"
    if not isinstance(reader, Reader):
        return f"reader {name!r} lacks name, suffixes, recognises or open"
    return reader


def readers() -> dict[str, Reader]:
    """Every reader that can be had, by name: our own first, then those of other distributions."""
    found = {name: make() for name, (_, _, make) in _OWN.items()}
    for name in _foreign():
        reader = _loaded(name)
        if not isinstance(reader, str):
            found[name] = reader
    return found


def notes() -> tuple[str, ...]:
    """What is wrong with readers of other distributions, in sentences."""
    return tuple(text for name in _foreign() if isinstance(text := _loaded(name), str))


def find_reader(path: Path, spec: SnapshotSpec) -> Reader:
    """The reader for a file: the one the settings name, else by content, else by suffix.

    Raises NotYet for an empty or vanished file, Refused for one that no reader recognises,
    ReadError where it cannot be opened.
    """
    if spec.format != "auto":
        return _named(spec.format)
    if spec.raw is not None:
        return _raw()
    if path.is_dir():
        head = b""
    else:
        try:
            with open(path, "rb", buffering=0) as file:
                head = file.read(HEAD_BYTES)
        except FileNotFoundError as error:
            raise NotYet("the file has gone", str(path)) from error
        except OSError as error:
            raise ReadError(f"cannot be opened ({error.strerror})", str(path)) from error
        if not head:
            raise NotYet("the file is empty", str(path))
    for starts, _, make in _OWN.values():
        if head.startswith(starts or (b"\0no format begins like this",)):
            return make()
    for name in _foreign():
        reader = _loaded(name)
        if not isinstance(reader, str) and reader.recognises(head, path):
            return reader
    for _, suffixes, _ in _OWN.values():
        if path.suffix.lower() in suffixes and head == b"\0" * len(head):
            # Zeros where the first bytes will be: the writer puts its header in last.
            raise NotYet("the header is not written yet", str(path))
    raise Refused(
        "no reader recognises this file",
        str(path),
        f"name one with format = ... (there are {', '.join(sorted(readers()))})",
    )


def _named(name: str) -> Reader:
    if name in _OWN:
        return _OWN[name][2]()
    if name not in _foreign():
        known = ", ".join(sorted([*_OWN, *_foreign()]))
        raise Refused(f"there is no reader {name!r}", remedy=f"there are {known}")
    reader = _loaded(name)
    if isinstance(reader, str):
        raise Refused(reader)
    return reader


def open_snapshot(path: Path, spec: SnapshotSpec) -> OpenSnapshot:
    """Open a snapshot file with the reader it needs; a context manager. Errors as find_reader."""
    return find_reader(path, spec).open(path, spec)
