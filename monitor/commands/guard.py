"""Follow a run without a screen: read each snapshot once, write the growth log, raise the alarm,
pin a clean checkpoint and, where that is configured, have the run stopped.

Without FILE and --snapshots, stepwarden.toml in the current folder is taken. Options given here win
over the file.

Exit status: 0 no alarm; 2 settings; 3 nothing readable; 10 alarm; 11 overflowed; 12 a configured
action failed; 128+n ended by signal n.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from monitor.exits import Exit
from monitor.logfinding import SETTINGS_NAME
from probes.errors import SettingsError

if TYPE_CHECKING:
    from monitor.config import Settings


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("file", metavar="FILE.toml", nargs="?", type=Path, help="settings")
    what = parser.add_argument_group("what to watch")
    what.add_argument(
        "--snapshots",
        metavar="PATTERN",
        action="append",
        default=[],
        help="files to watch, e.g. 'out/h_{step}.npy' ({step} {part} {field} * ?); repeatable",
    )
    what.add_argument("--fields", metavar="A,B", help="fields to judge (default: all)")
    what.add_argument("--log", metavar="PATH", type=Path, help="growth log to write")
    what.add_argument("--name", help="what to call the run")
    end = parser.add_argument_group("when the run ends")
    end.add_argument("--pid", type=int, help="when this process ends")
    end.add_argument("--last-step", metavar="N", type=int, help="with this step")
    end.add_argument("--end-file", metavar="PATH", help="when this file appears")
    end.add_argument("--idle", metavar="SECONDS", type=float, help="so long without a snapshot")
    stop = parser.add_argument_group("stopping (off unless configured here or in FILE.toml)")
    stop.add_argument("--stop-file", metavar="PATH", help="create this file to stop the run")
    stop.add_argument(
        "--stop-signal", metavar="NAME", help="then send this signal to --pid (TERM, USR1, ...)"
    )
    stop.add_argument(
        "--show-stop", action="store_true", help="say what a stop would do, try nothing, and exit"
    )
    parser.add_argument(
        "--catch-up", action="store_true", help="take what is there in step order, then exit"
    )
    parser.add_argument(
        "--no-actions", action="store_true", help="only record: no pin, no stop, no notice"
    )
    parser.add_argument(
        "--take-over", action="store_true", help="take the log's lock from another host's guard"
    )
    parser.add_argument("--quiet", action="store_true", help="no line per snapshot")


def run(options: Namespace) -> int:
    settings, folder, log = settings_of(options)
    if options.show_stop:
        from monitor.actions.stop import describe

        print(describe(settings, folder, log))
        return Exit.GOOD
    from monitor.guard import Guard

    return Guard(
        settings,
        folder,
        log,
        actions=not options.no_actions,
        catch_up=options.catch_up,
        take_over=options.take_over,
        quiet=options.quiet,
    ).run()


def settings_of(options: Namespace) -> tuple[Settings, Path, Path]:
    """Settings in force, the folder that relative patterns start from, and the growth log.

    Raises SettingsError where nothing says what to watch.
    """
    from monitor.config import checked, from_options, load, log_path

    file = options.file
    if file is None and not options.snapshots:
        file = Path(SETTINGS_NAME)
        if not file.is_file():
            raise SettingsError(
                f"there is no {SETTINGS_NAME} here, and no --snapshots says what to watch",
                str(Path.cwd()),
                "try `stepwarden scout . --write`, or name a file or a pattern",
            )
    if file is None:
        settings, folder = from_options(options.snapshots), Path.cwd()
    else:
        settings, folder = load(file), file.resolve().parent
    settings = checked(overlay(settings, options))
    # A typed log starts from the current folder, one in the file from the file's.
    return settings, folder, options.log.absolute() if options.log else log_path(settings, folder)


def overlay(settings: Settings, options: Namespace) -> Settings:
    """`settings` with what was typed put over it; options that were not typed change nothing."""
    from msgspec.structs import replace

    from monitor.config import StopStep
    from probes.spec import FieldSpec

    typed: dict[str, Any] = {
        "name": options.name,
        "pid": options.pid,
        "last_step": options.last_step,
        "end_file": options.end_file,
        "idle_seconds": options.idle,
    }
    changes: dict[str, Any] = {
        "run": replace(settings.run, **{k: v for k, v in typed.items() if v is not None})
    }
    if options.snapshots:
        changes["snapshots"] = replace(settings.snapshots, pattern=tuple(options.snapshots))
    if options.fields:
        names = [name.strip() for name in options.fields.split(",") if name.strip()]
        changes["fields"] = {name: settings.fields.get(name, FieldSpec()) for name in names}
    rungs = []
    if options.stop_file:
        rungs.append(StopStep(do="file", path=options.stop_file))
    if options.stop_signal:
        if not changes["run"].pid:
            raise SettingsError(
                "a signal needs a process", "--stop-signal", "give the solver's --pid as well"
            )
        rungs.append(StopStep(do="signal", signal=options.stop_signal))
    if rungs:
        changes["stop"] = tuple(rungs)
    return replace(settings, **changes)
