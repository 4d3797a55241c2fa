"""Events of the local file system, to be woken early. Polling stays the truth.

Events never tell of writes from other nodes, may be lost, and cannot be had where watches run out.
Our own reading makes "opened" and "closed without writing" events, which must not wake anybody.
"""

from __future__ import annotations

import contextlib
import os
import threading
from collections.abc import Iterable
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from watchdog.observers.api import BaseObserver

MOST_FOLDERS = 64


class Wakeups:
    """Wakes on new, renamed and closed files in a set of folders.

    reason: why there are no events ("" if there are).
    """

    def __init__(self) -> None:
        self._event = threading.Event()
        self._lock = threading.Lock()
        self._closed: dict[str, tuple[int, int, int]] = {}
        self._observer: BaseObserver | None = None
        self._folders: tuple[tuple[str, int], ...] = ()
        self.reason = "not started"

    @property
    def live(self) -> bool:
        return self._observer is not None and self._observer.is_alive()

    def refuse(self, reason: str) -> None:
        """No events are to be had here, for a reason."""
        self.stop()
        self.reason = reason

    def watch(self, folders: Iterable[str]) -> None:
        """Watch these folders instead of the present ones, if they are others: a folder that was
        removed and made again under its name is another, and sends nothing to the old watch."""
        wanted = tuple((folder, inode) for folder in folders if (inode := _inode(folder)))
        if wanted == self._folders and (self.live or self.reason):
            return
        self.stop()
        self._folders = wanted
        if not wanted:
            self.reason = "the folder is not there yet"
            return
        if len(wanted) > MOST_FOLDERS:
            self.reason = f"there are {len(wanted)} folders to watch"
            return
        try:
            self._start([folder for folder, _ in wanted])
        except (OSError, RuntimeError, ImportError) as error:
            self.stop()
            self._folders = wanted
            self.reason = f"the system gives no more watches ({error})"

    def _start(self, folders: list[str]) -> None:
        from watchdog.events import (
            FileClosedEvent,
            FileCreatedEvent,
            FileMovedEvent,
            FileSystemEvent,
            FileSystemEventHandler,
        )
        from watchdog.observers import Observer

        wake = self._wake

        class Handler(FileSystemEventHandler):
            def on_created(self, event: FileSystemEvent) -> None:
                if isinstance(event, FileCreatedEvent):
                    wake("")

            def on_closed(self, event: FileSystemEvent) -> None:
                if isinstance(event, FileClosedEvent):
                    wake(str(event.src_path))

            def on_moved(self, event: FileSystemEvent) -> None:
                if isinstance(event, FileMovedEvent):
                    wake(str(event.dest_path))

        observer = Observer()
        observer.daemon = True
        handler = Handler()
        for folder in folders:
            observer.schedule(handler, folder)
        observer.start()
        self._observer, self.reason = observer, ""

    def _wake(self, closed: str) -> None:
        if closed:
            # As it is right now: if it is opened again before the next look, it is another.
            with contextlib.suppress(OSError):
                found = os.stat(closed)
                with self._lock:
                    self._closed[closed] = found.st_ino, found.st_size, found.st_mtime_ns
        self._event.set()

    def wait(self, seconds: float) -> None:
        """Until something happens or the time is over."""
        self._event.wait(seconds)
        self._event.clear()

    def closed(self) -> dict[str, tuple[int, int, int]]:
        """Paths renamed into place or closed after writing since the last call, with inode, size
        and time of change in ns as they were then."""
        with self._lock:
            out, self._closed = self._closed, {}
        return out

    def stop(self) -> None:
        observer, self._observer = self._observer, None
        self._folders = ()
        if observer is not None:
            observer.stop()


def _inode(folder: str) -> int:
    """0 where it is not there."""
    try:
        return os.stat(folder).st_ino
    except OSError:
        return 0
