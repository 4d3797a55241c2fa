"""The process that runs a user's step function: states in, stepped states out.

Started as ``python -P -m monitor.limits.stepchild FOLDER MODULE:FUNCTION``. Messages are eight
bytes of length and an array in .npy form, without pickles; a text instead of an array says what
went wrong. What the function prints goes to standard error.
"""

from __future__ import annotations

import io
import os
import sys
import traceback
from importlib import import_module
from typing import IO, Any

import numpy as np

_LENGTH = 8


def send(pipe: IO[bytes], value: Any) -> None:
    """An array, or a text."""
    buffer = io.BytesIO()
    array = np.frombuffer(value.encode(), dtype=np.uint8) if isinstance(value, str) else value
    np.save(buffer, array, allow_pickle=False)
    kind = b"t" if isinstance(value, str) else b"a"
    pipe.write(len(buffer.getvalue()).to_bytes(_LENGTH, "little") + kind + buffer.getvalue())
    pipe.flush()


def receive(pipe: IO[bytes]) -> Any:
    """An array or a text; None at the end of the pipe. Raises ValueError for anything else."""
    head = pipe.read(_LENGTH + 1)
    if len(head) < _LENGTH + 1:
        return None
    body = pipe.read(int.from_bytes(head[:_LENGTH], "little"))
    array = np.load(io.BytesIO(body), allow_pickle=False)
    return bytes(array).decode(errors="replace") if head[_LENGTH:] == b"t" else array


def main(words: list[str]) -> int:
    folder, name = words
    # The pipe to the parent moves out of the way of whatever the function prints.
    answers = os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)
    sys.path.insert(0, folder)
    try:
        module, _, attribute = name.partition(":")
        function = getattr(import_module(module), attribute)
    except BaseException as error:
        send(answers, f"{name} cannot be loaded: {_last_line(error)}")
        return 1
    send(answers, "ready")
    while (state := receive(sys.stdin.buffer)) is not None:
        try:
            stepped = np.asarray(function(state.copy()), dtype=np.float64)
        except BaseException as error:
            traceback.print_exc()
            send(answers, f"{name} raised {_last_line(error)}")
            return 1
        send(answers, stepped)
    return 0


def _last_line(error: BaseException) -> str:
    return traceback.format_exception_only(error)[-1].strip()[:300]


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
