"""The `HOLD` file beside the log: a stopped run must not be restarted or resubmitted by itself."""

from __future__ import annotations

import contextlib
import os
from datetime import datetime
from pathlib import Path
from typing import Literal

HOLD_NAME = "HOLD"


def hold_text(now: float, why: str) -> str:
    """What the file says. now: seconds since the epoch."""
    when = datetime.fromtimestamp(now).astimezone().isoformat(timespec="seconds")
    return (
        f"This run was stopped by stepwarden guard on {when}.\n"
        f"Why: {why}\n"
        "A restart with the same time step and scheme grows again; `stepwarden review` names the\n"
        "checkpoint to restart from. When the cause is mended, remove this file: job scripts that\n"
        "honour it neither restart nor resubmit the run while it is here.\n"
    )


def write_hold(path: Path, text: str) -> tuple[Literal["done", "found-done", "failed"], str]:
    """Write the file unless it is there already; returns outcome and detail."""
    if path.exists():
        return "found-done", "it is there already"
    part = path.with_name(f".{path.name}.part")
    try:
        with part.open("w", encoding="utf-8") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.replace(part, path)
    except OSError as error:
        with contextlib.suppress(OSError):
            part.unlink()
        return "failed", error.strerror or str(error)
    return "done", ""
