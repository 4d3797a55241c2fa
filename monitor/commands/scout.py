"""Look at a run's folder and say what was understood: formats, fields, shapes, types, steps and
cadence. With --write, propose a commented stepwarden.toml.

Exit status: 0 something readable was found; 2 the file to write exists; 3 nothing readable.
"""

from __future__ import annotations

import os
from argparse import ArgumentParser, Namespace
from pathlib import Path

from monitor.exits import Exit
from monitor.logfinding import SETTINGS_NAME
from probes.errors import ReadError, SettingsError


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("path", metavar="PATH", type=Path, help="a run's folder, or one file")
    parser.add_argument(
        "--write",
        metavar="FILE",
        nargs="?",
        type=Path,
        const=Path(),
        help=f"write a starter configuration (default: {SETTINGS_NAME} in that folder)",
    )
    parser.add_argument("--force", action="store_true", help="overwrite the file if it exists")


def run(options: Namespace) -> int:
    from monitor.childkeeper import ChildKeeper
    from monitor.proposal import describe, propose
    from monitor.scout import scout
    from probes.spec import SnapshotSpec, WatchSpec

    folder: Path = options.path if options.path.is_dir() else options.path.parent
    target = None
    if options.write is not None:
        target = folder / SETTINGS_NAME if options.write == Path() else options.write
        if target.exists() and not options.force:
            raise SettingsError("it exists already", str(target), "give --force to overwrite it")
    watch = WatchSpec(folder=str(folder.resolve()), snapshots=SnapshotSpec(pattern=("*",)))
    keeper = ChildKeeper(watch, ())
    try:
        scouted = scout(options.path, lambda request: keeper.ask(request, 60.0))
    finally:
        keeper.close()
    if scouted.snapshots is None:
        seen = [f"{s.group.pattern}: {s.failure}" for s in scouted.sights[:3]]
        raise ReadError(
            "nothing here could be read as a snapshot",
            str(options.path),
            "; ".join(["headerless files need [snapshots.raw]", *seen]),
        )
    print(describe(scouted))
    if target is not None:
        # Patterns start from the folder of the configuration file.
        base = os.path.relpath(folder, target.parent)
        target.write_text(propose(scouted, "" if base == "." else base), encoding="utf-8")
        print(f"\nwrote {target}")
    return Exit.GOOD
