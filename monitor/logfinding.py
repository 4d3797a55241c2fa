"""Find a growth log from what a person typed: the log itself, or a run's folder."""

from __future__ import annotations

from pathlib import Path

from probes.errors import ReadError

LOG_NAME = "growth.jsonl"
SETTINGS_NAME = "stepwarden.toml"


def find_log(path: Path) -> Path:
    """The log at `path`, or that of the run in the folder `path`.

    In a folder, ``stepwarden.toml`` says where its log is; without one it is ``growth.jsonl``.
    Raises ReadError where there is none.
    """
    if not path.is_dir():
        if not path.exists():
            raise ReadError("there is no such file or folder", str(path))
        return path
    log = path / LOG_NAME
    settings = path / SETTINGS_NAME
    if settings.is_file():
        from monitor.config import load, log_path

        log = log_path(load(settings), path)
    if not log.is_file():
        raise ReadError(
            "no growth log here",
            str(log),
            "start `stepwarden guard` on this run first, or name the log itself",
        )
    return log
