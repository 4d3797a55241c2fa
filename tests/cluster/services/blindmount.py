"""A folder seen through a file system in user space, which raises no events and can be frozen."""

from __future__ import annotations

import os
import signal
from pathlib import Path

from tests.cluster.services.processes import Daemons, program, quietly, wait_until


class Forbidden(Exception):
    """The kernel does not let this machine mount such a file system; the text says what it said."""


class BlindMount:
    """What is written on the far side raises no file event on the near one, as on a network mount.

    Raises Forbidden where the kernel does not allow it.
    """

    def __init__(self, folder: Path) -> None:
        self.far, self.near = folder / "far", folder / "near"
        self._unmount = program("umount")
        words = [program("bindfs"), "-f", str(self.far), str(self.near)]
        try:
            os.close(os.open("/dev/fuse", os.O_RDWR))
        except OSError as error:
            raise Forbidden(f"/dev/fuse: {error.strerror}") from error
        for side in (self.far, self.near):
            side.mkdir()
        self._daemons = Daemons(folder)
        self._server = self._daemons.start("bindfs", words)
        try:
            wait_until(self._settled, 10, "mounted")
        except BaseException:
            self.close()
            raise
        if self._server.poll() is not None:
            said = self._daemons.said("bindfs")
            assert "not permitted" in said or "denied" in said, said
            raise Forbidden(said.strip())

    def _settled(self) -> bool:
        return os.path.ismount(self.near) or self._server.poll() is not None

    def freeze(self) -> None:
        """From now on every access hangs."""
        self._server.send_signal(signal.SIGSTOP)

    def thaw(self) -> None:
        self._server.send_signal(signal.SIGCONT)

    def close(self) -> None:
        self.thaw()
        quietly([self._unmount, "-l", str(self.near)])
        self._daemons.close()
