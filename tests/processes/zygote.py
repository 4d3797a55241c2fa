"""Starts guards quickly: imports everything once, then forks a process per line on standard input.

Each line holds the arguments of `stepwarden guard`; the answer is the number of the new process.
Their ends are not waited for: the kernel reaps them.
"""

from __future__ import annotations

import os
import shlex
import signal
import sys

from monitor.cli import main
from monitor.guard import Guard


def serve() -> None:
    assert Guard is not None  # imported for what it brings with it
    for line in sys.stdin:
        child = os.fork()
        if child == 0:
            signal.signal(signal.SIGCHLD, signal.SIG_DFL)
            os._exit(main(["guard", *shlex.split(line)]))
        print(child, flush=True)


if __name__ == "__main__":
    # A guard that was killed must not stay behind as a zombie.
    signal.signal(signal.SIGCHLD, signal.SIG_IGN)
    serve()
