"""The command line: finds the subcommand, runs it, and turns what happens into an exit status.

This is the only place that sets exit statuses (see `monitor.exits`). Standard output carries data
only; everything said to a person on the way goes to standard error.
"""

from __future__ import annotations

import os
import signal
import sys
from argparse import ArgumentParser, RawDescriptionHelpFormatter
from collections.abc import Sequence
from difflib import get_close_matches
from importlib import import_module
from typing import cast

from monitor.commands import COMMANDS, Command
from monitor.exits import Exit
from probes.errors import (
    ArrivalError,
    ChildError,
    ReadError,
    SettingsError,
    StepwardenError,
)

_ABOUT = """\
Watches an explicit simulation through the snapshots it writes: sees an instability grow while
the field is still clean, keeps a clean checkpoint safe and has the run stopped.
"""

_STATUSES = """\
exit status: 0 nothing against it; 1 internal error; 2 usage or settings; 3 nothing readable;
10 alarm, unstable or unfit; 11 overflowed; 12 a configured action failed; 128+n ended by signal n
"""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command line (default: the process's own) and return its exit status."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    try:
        return _dispatch(words)
    except SystemExit as error:  # argparse: usage errors and --help
        return error.code if isinstance(error.code, int) else Exit.USAGE
    except StepwardenError as error:
        _say(str(error))
        return _status_of(error)
    except KeyboardInterrupt:
        return 128 + signal.SIGINT
    except BrokenPipeError:
        # The reader of our output is gone; keep the interpreter from flushing into the void.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 128 + signal.SIGPIPE
    except Exception as error:
        if os.environ.get("STEPWARDEN_TRACE"):
            raise
        _say(
            f"internal error: {type(error).__name__}: {error}; this is a fault of stepwarden "
            "itself, set STEPWARDEN_TRACE=1 to see where it happened"
        )
        return Exit.INTERNAL


def _dispatch(words: list[str]) -> int:
    name = words[0] if words else ""
    if name in COMMANDS:
        # Only the chosen module is imported, so that no command pays for another's libraries.
        command = cast(Command, import_module(f"monitor.commands.{name}"))
        parser = ArgumentParser(
            prog=f"stepwarden {name}",
            allow_abbrev=False,
            description=command.__doc__,
            formatter_class=RawDescriptionHelpFormatter,
        )
        command.declare(parser)
        status = command.run(parser.parse_args(words[1:]))
        sys.stdout.flush()
        return status
    if name == "--version":
        from importlib.metadata import version

        print(f"stepwarden {version('stepwarden')}")
        return Exit.GOOD
    parser = _top_parser()
    if not words:
        parser.print_help(sys.stderr)
        return Exit.USAGE
    if not name.startswith("-"):
        near = get_close_matches(name, COMMANDS, 1)
        hint = f"did you mean {near[0]!r}?" if near else f"known are {', '.join(COMMANDS)}"
        raise SettingsError(f"there is no command {name!r}", remedy=hint)
    parser.parse_args(words)  # --help leaves here, anything else is refused
    raise SettingsError("no command given", remedy="see stepwarden --help")


def _top_parser() -> ArgumentParser:
    listing = "\n".join(f"  {name:10}{text}" for name, text in COMMANDS.items())
    parser = ArgumentParser(
        prog="stepwarden",
        allow_abbrev=False,
        usage="stepwarden COMMAND [options]",
        description=f"{_ABOUT}\ncommands (stepwarden COMMAND --help tells more):\n{listing}",
        epilog=_STATUSES,
        formatter_class=RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="store_true", help="print the version and exit")
    return parser


def _status_of(error: StepwardenError) -> int:
    if isinstance(error, SettingsError):
        return Exit.USAGE
    if isinstance(error, ReadError | ArrivalError | ChildError):
        return Exit.UNREADABLE
    return Exit.INTERNAL


def _say(text: str) -> None:
    """One message on standard error; names of files may hold anything, so control characters are
    escaped."""
    safe = "".join(
        c if c.isprintable() or c == "\n" else c.encode("unicode_escape").decode() for c in text
    )
    sys.stderr.write(f"stepwarden: {safe}\n")
