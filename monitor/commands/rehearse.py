"""Replay a run's history against other settings and say what would have been raised, and when: to
tune the alarm on one's own healthy runs. Nothing of the run or of its log is touched.

PATH is a growth log or the folder that holds one: [alarm] settings and bounds are tried on the
logged evidence. With --again the snapshots are read anew, so that other [sketch], [estimate] and
[fields] settings can be tried as well; PATH is then a stepwarden.toml, or a folder that holds one.

Exit status: 0 no alarm would have been raised; 10 alarm; 11 overflowed; 3 nothing readable.
"""

from __future__ import annotations

import re
from argparse import ArgumentParser, Namespace
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

from monitor.exits import Exit
from monitor.logfinding import SETTINGS_NAME, find_log
from probes.errors import SettingsError

if TYPE_CHECKING:
    from monitor.rehearse import Rehearsal


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("path", metavar="PATH", type=Path, help="growth log, folder or settings")
    parser.add_argument(
        "--set",
        metavar="SECTION.KEY=VALUE",
        action="append",
        default=[],
        dest="changes",
        help="a setting to try, e.g. alarm.decades=3 or fields.h.max=12.5; repeatable",
    )
    parser.add_argument(
        "--again", action="store_true", help="read and sketch the snapshots again (takes its time)"
    )
    parser.add_argument("--json", action="store_true", help="print one JSON object instead of text")


def run(options: Namespace) -> int:
    from monitor.rehearsetext import json_object, write_up

    tables = settings_typed(options.changes)
    rehearsal = _again(options.path, tables) if options.again else _logged(options.path, tables)
    if options.json:
        import json

        print(json.dumps(json_object(rehearsal), indent=1, allow_nan=False))
    else:
        print(write_up(rehearsal))
    if "overflowed" in rehearsal.rehearsed.snapshots:
        return Exit.OVERFLOWED
    return Exit.ALARM if rehearsal.rehearsed.alarm is not None else Exit.GOOD


def settings_typed(words: list[str]) -> dict[str, Any]:
    """Tables, as a settings file would give them, from words like "alarm.decades=3".

    A value is read as in the file; what is no value of TOML counts as text. Raises SettingsError
    for a word without section, key and value.
    """
    import tomllib

    tables: dict[str, Any] = {}
    for word in words:
        name, equals, text = word.partition("=")
        keys = [key.strip() for key in name.split(".")]
        if not equals or len(keys) < 2 or not all(keys):
            raise SettingsError("is no SECTION.KEY=VALUE", f"--set {word}", "like alarm.decades=3")
        try:
            value = tomllib.loads(f"value = {text}")["value"]
        except tomllib.TOMLDecodeError:
            value = text
        below = tables
        for key in keys[:-1]:
            below = below.setdefault(key, {})
        below[keys[-1]] = value
    return tables


def _logged(path: Path, tables: dict[str, Any]) -> Rehearsal:
    """From the evidence in a log. Raises SettingsError for settings that have no say in it."""
    from monitor.config import from_options
    from monitor.growthlog.read import each_record
    from monitor.rehearse import DECIDING, rehearse

    for name in _named(tables):
        if not any(re.fullmatch(pattern, name) for pattern in DECIDING):
            raise SettingsError(
                "changes what is read or measured, which a log cannot tell",
                f"--set {name}",
                "give --again to read the snapshots anew",
            )
    from_options(["*"], overrides=tables)
    log = find_log(path)
    return rehearse(each_record(log), tables.get("alarm", {}), tables.get("fields", {}))


def _again(path: Path, tables: dict[str, Any]) -> Rehearsal:
    """From the snapshots: guard takes them all into a log that is thrown away, and does nothing."""
    from tempfile import TemporaryDirectory

    from monitor.config import load
    from monitor.growthlog.read import each_record
    from monitor.guard import Guard
    from monitor.rehearse import rehearse

    file = path / SETTINGS_NAME if path.is_dir() else path
    settings = load(file, tables)
    with TemporaryDirectory(prefix="rehearse-") as folder:
        log = Path(folder) / "growth.jsonl"
        Guard(settings, file.resolve().parent, log, actions=False, catch_up=True, quiet=True).run()
        return rehearse(each_record(log))


def _named(tables: dict[str, Any], before: str = "") -> Iterator[str]:
    """Full names of all values: "alarm.decades"."""
    for key, value in tables.items():
        if isinstance(value, dict):
            yield from _named(value, f"{before}{key}.")
        else:
            yield before + key
