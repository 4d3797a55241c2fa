"""The state that a guard needs to go on after it was killed, in a folder beside the log.

Each save is one file named by the sequence number of the snapshot record that follows it, written
under a temporary name and renamed. The last two are kept: the guard may be killed between the save
and the record.
"""

from __future__ import annotations

import contextlib
import os
import zlib
from pathlib import Path

import msgspec

_MAGIC = b"stepwarden window 1\n"
_KEPT = 2


class Window:
    """Saves of one guard. failing: "" or why the last one could not be written."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self.failing = ""

    def save(self, seq: int, payload: dict[str, bytes]) -> None:
        """Keep `payload` under `seq`. Trouble goes to `failing`: guarding goes on without it.

        Not synced: a killed guard loses nothing by that, and after a crash of the machine the
        checksum tells a torn file.
        """
        body = msgspec.msgpack.encode(payload)
        part = self._folder / f"{seq}.part"
        try:
            self._folder.mkdir(parents=True, exist_ok=True)
            with part.open("wb") as file:
                file.write(_MAGIC + zlib.crc32(body).to_bytes(4, "big"))
                file.write(body)
            os.replace(part, self._path(seq))
            self._forget(seq)
        except OSError as error:
            with contextlib.suppress(OSError):
                part.unlink()
            self.failing = (
                f"{self._folder} cannot be written ({error.strerror or error}); "
                "a guard that is started again would have to gather afresh"
            )
        else:
            self.failing = ""

    def load(self, seq: int) -> dict[str, bytes] | None:
        """What was saved under `seq`; None where there is nothing or it is damaged."""
        try:
            data = self._path(seq).read_bytes()
        except OSError:
            return None
        start = len(_MAGIC) + 4
        body = data[start:]
        if data[:start] != _MAGIC + zlib.crc32(body).to_bytes(4, "big"):
            return None
        try:
            return msgspec.msgpack.decode(body, type=dict[str, bytes])
        except msgspec.MsgspecError:
            return None

    def _path(self, seq: int) -> Path:
        return self._folder / f"{seq}.win"

    def clear(self) -> None:
        """Forget all saves: they belong to a log that is no longer there."""
        with contextlib.suppress(OSError):
            for _, path in self._files():
                path.unlink()

    def _forget(self, newest: int) -> None:
        """Remove all but the last saves, and what an interrupted one left. Numbers above the newest
        come from a log that was removed."""
        files = self._files()
        saved = sorted((n, path) for n, path in files if path.suffix == ".win" and n <= newest)
        kept = {path for _, path in saved[-_KEPT:]}
        for _, path in files:
            if path not in kept:
                path.unlink()

    def _files(self) -> list[tuple[int, Path]]:
        return [
            (int(path.stem), path)
            for path in self._folder.iterdir()
            if path.suffix in (".win", ".part") and path.stem.isdecimal()
        ]
