"""What the services share: finding programs, running them, waiting for what they do."""

from __future__ import annotations

import os
import shutil
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

SBIN = ("/usr/local/sbin", "/usr/sbin", "/sbin")


class Unavailable(Exception):
    """What is missing on this machine."""


def program(name: str) -> str:
    """Full path of a program. Raises Unavailable."""
    path = shutil.which(name, path=os.pathsep.join([os.environ["PATH"], *SBIN]))
    if path is None:
        raise Unavailable(f"there is no {name}")
    return path


def free_port() -> int:
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        return int(listener.getsockname()[1])


def wait_until(true: Callable[[], bool], seconds: float, what: str) -> None:
    end = time.monotonic() + seconds
    while not true():
        if time.monotonic() > end:
            raise AssertionError(f"after {seconds:.0f} s still not: {what}")
        time.sleep(0.1)


def quietly(
    words: Sequence[str], environment: Mapping[str, str] | None = None, cwd: Path | None = None
) -> subprocess.CompletedProcess[str]:
    """Run to the end without a terminal; what it says is kept."""
    return subprocess.run(
        words,
        capture_output=True,
        text=True,
        check=False,
        stdin=subprocess.DEVNULL,
        env=environment,
        cwd=cwd,
    )


def with_own_path() -> dict[str, str]:
    """An environment in which `stepwarden` and this Python come first."""
    here = str(Path(sys.executable).parent)
    return {**os.environ, "PATH": os.pathsep.join([here, os.environ["PATH"]])}


class Daemons:
    """Processes in the foreground of their own, ended in the reverse order of their start."""

    def __init__(self, folder: Path, environment: Mapping[str, str] | None = None) -> None:
        self._folder, self._environment = folder, environment
        self._running: list[subprocess.Popen[bytes]] = []

    def start(self, name: str, words: Sequence[str]) -> subprocess.Popen[bytes]:
        """What it says goes to NAME.log."""
        with self.log(name).open("wb") as out:
            process = subprocess.Popen(
                words, env=self._environment, stdin=subprocess.DEVNULL, stdout=out, stderr=out
            )
        self._running.append(process)
        return process

    def log(self, name: str) -> Path:
        return self._folder / f"{name}.log"

    def said(self, name: str) -> str:
        return self.log(name).read_text(errors="replace")

    def close(self) -> None:
        for process in reversed(self._running):
            process.terminate()
            try:
                process.wait(20)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()
        self._running.clear()
