"""Keep copies of checkpoints safe, and handle stop files: everything that changes the solver's
file system, done in the reading process because a mount may hang."""

from __future__ import annotations

import contextlib
import fcntl
import hashlib
import os
import shutil
from collections.abc import Sequence
from pathlib import Path
from typing import Literal

from probes.errors import NotYet, ReadError, Refused
from probes.wire import Done, FileId, Secured, StopFile

MARKER = ".stepwarden-pin"
_MAKING = ".making"
_CHUNK = 8 << 20
# FICLONE of linux/fs.h: share blocks between two files (btrfs, XFS, bcachefs).
_CLONE = 0x40049409


def secure(files: Sequence[FileId], folder: str, allow_link: bool) -> Secured:
    """Copies of `files` in `folder`, synced, under names that say where they come from.

    The folder appears under its name only when everything is in it. A hard link is made only if
    allowed, else blocks are shared where the file system can, else copied. Raises NotYet where a
    file is no longer the one meant, Refused where the folder exists, ReadError where it fails.
    """
    target = Path(folder)
    if target.exists() or target.is_symlink():
        raise Refused("exists already", folder)
    making = target.with_name(f".{target.name}{_MAKING}")
    try:
        _sweep(target.parent)
        making.mkdir(parents=True)
        (making / MARKER).touch()
        methods: set[Literal["link", "reflink", "copy"]] = set()
        digest, size, names = hashlib.sha256(), 0, _names(files)
        for file, name in zip(files, names, strict=True):
            _same(file)
            methods.add(_keep(file, making / name, allow_link))
            _same(file)
            size += _digest(making / name, digest)
        _sync(making)
        making.rename(target)
        _sync(target.parent)
    except (NotYet, Refused):
        shutil.rmtree(making, ignore_errors=True)
        raise
    except OSError as error:
        shutil.rmtree(making, ignore_errors=True)
        where = str(error.filename or folder)
        raise ReadError(f"cannot be secured ({error.strerror or error})", where) from error
    worst: Literal["link", "reflink", "copy"] = "copy"
    if methods == {"link"}:
        worst = "link"
    elif "copy" not in methods:
        worst = "reflink"
    return Secured(method=worst, files=tuple(names), sha256=digest.hexdigest(), bytes=size)


def _names(files: Sequence[FileId]) -> list[str]:
    """Base names; where two are equal, with as many of their folders as it takes."""
    paths = [Path(f.path) for f in files]
    for depth in range(1, max((len(p.parts) for p in paths), default=1) + 1):
        names = ["__".join(p.parts[-depth:]).replace(os.sep, "") for p in paths]
        if len(set(names)) == len(names):
            return names
    raise Refused("the same file is named twice", files[0].path)


def _same(file: FileId) -> None:
    """Raises NotYet unless the file still is the one that was meant."""
    try:
        now = os.stat(file.path)
    except FileNotFoundError as error:
        raise NotYet("the file has gone", file.path) from error
    if (now.st_ino, now.st_size, now.st_mtime_ns) != (file.inode, file.size, file.mtime_ns):
        raise NotYet("the file has been written again", file.path)


def _keep(file: FileId, target: Path, allow_link: bool) -> Literal["link", "reflink", "copy"]:
    if allow_link:
        with contextlib.suppress(OSError):
            os.link(os.path.realpath(file.path), target)
            if os.stat(target).st_ino != file.inode:
                raise NotYet("the file has been written again", file.path)
            return "link"
    with open(file.path, "rb", buffering=0) as old, open(target, "xb", buffering=0) as new:
        if os.fstat(old.fileno()).st_ino != file.inode:
            raise NotYet("the file has been written again", file.path)
        method: Literal["reflink", "copy"] = "copy"
        try:
            fcntl.ioctl(new.fileno(), _CLONE, old.fileno())
            method = "reflink"
        except OSError:
            while block := old.read(_CHUNK):
                view = memoryview(block)
                while view:
                    view = view[new.write(view) or 0 :]
        os.fsync(new.fileno())
    return method


def _digest(path: Path, digest: hashlib._Hash) -> int:
    size = 0
    with open(path, "rb", buffering=0) as file:
        while block := file.read(_CHUNK):
            digest.update(block)
            size += len(block)
        # It will not be read again soon: leave the memory to the solver.
        os.posix_fadvise(file.fileno(), 0, 0, os.POSIX_FADV_DONTNEED)
    return size


def _sweep(parent: Path) -> None:
    """Remove what a process that was killed left half made. Guard's lock means that nobody else
    is making anything here."""
    for left in parent.glob(f".*{_MAKING}"):
        if left.is_dir() and not left.is_symlink() and _ours(left):
            shutil.rmtree(left, ignore_errors=True)


def _ours(folder: Path) -> bool:
    """Whether `secure` made it: by its marker, or empty, as a kill may leave it at either end."""
    return (folder / MARKER).is_file() or not any(folder.iterdir())


def _sync(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def drop(folder: str) -> Done:
    """Remove a folder that `secure` made. Raises Refused for any other, ReadError on failure."""
    path = Path(folder)
    try:
        _sweep(path.parent)
        if not path.exists():
            return Done(detail="was not there")
        if path.is_symlink() or not path.is_dir() or not _ours(path):
            raise Refused("is no folder of ours", folder)
        # The marker goes last, so that a removal that was cut off can be taken up again.
        for kept in sorted(path.iterdir(), key=lambda p: p.name == MARKER):
            kept.unlink()
        path.rmdir()
        _sync(path.parent)
    except OSError as error:
        raise ReadError(f"cannot be removed ({error.strerror or error})", folder) from error
    return Done(detail="removed")


def stop_file(request: StopFile) -> Done:
    """Create, write or remove the file that a solver looks for, or look whether it is there.

    Raises ReadError with the system's reason where that fails.
    """
    path = Path(request.path)
    try:
        if request.action in ("create", "write"):
            text = (
                request.text
                if request.text.endswith("\n") or not request.text
                else (request.text + "\n")
            )
            flags = os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC
            if request.action == "write":
                flags |= os.O_TRUNC
            handle = os.open(path, flags, 0o644)
            try:
                if text:
                    os.write(handle, text.encode())
                os.fsync(handle)
            finally:
                os.close(handle)
        elif request.action == "remove":
            path.unlink(missing_ok=True)
        return Done(exists=path.exists())
    except OSError as error:
        reason = error.strerror or str(error)
        raise ReadError(f"{request.action} failed ({reason})", request.path) from error
