"""Text logs as the reading process hands them on: new samples of each history, with their place."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from probes.errors import ReadError
from probes.formats.textlog import TextLog
from probes.spec import HistorySpec
from probes.wire import Heard, Packed

_NOTHING = Packed.of(np.zeros((0, 4)))


class Hearing:
    """One history. Counts the samples of its file, so that a reader of the growth log knows which
    of them were judged before."""

    def __init__(self, name: str, path: Path, spec: HistorySpec) -> None:
        self._name, self._path, self._spec = name, path, spec
        self.again()

    def again(self) -> None:
        """Begin from the start of the file."""
        self._log = TextLog(self._path, self._spec)
        self._file, self._count, self._begun, self._told = "", 0, 0, 0

    def read(self, budget: int) -> Heard:
        """What is new. A file that cannot be read gives a trouble instead of samples."""
        try:
            batch = self._log.read(budget)
        except ReadError as error:
            return Heard(name=self._name, table=_NOTHING, trouble=str(error))
        if self._begun != self._log.begun:
            self._begun, self._count, self._file = self._log.begun, 0, ""
        table = np.array(
            [batch.steps, batch.times, batch.values, batch.units], dtype=np.float64
        ).T.reshape(-1, 4)
        if not self._file and len(table):
            self._file = self._key(table[0])
        first, self._count = self._count, self._count + len(table)
        notes, self._told = tuple(self._log.notes[self._told :]), len(self._log.notes)
        return Heard(
            name=self._name,
            file=self._file,
            first=first,
            table=Packed.of(table),
            odd=batch.odd,
            mtime=self._log.mtime,
            more=batch.more,
            notes=notes,
        )

    def _key(self, first: NDArray[np.float64]) -> str:
        """A file is known by its inode, its first sample and how often it was begun again."""
        facts = f"{self._log.inode} {self._log.begun} ".encode() + first.tobytes()
        return hashlib.blake2b(facts, digest_size=8).hexdigest()
