"""Watch a small solver go unstable in a corner of its grid: solver and guard run as processes of
their own, the desk shows them. Guard raises the alarm, keeps a clean checkpoint and stops the
solver; when you leave the desk, the review is printed.

Without a terminal, or with --plain, lines are printed instead, and the exit status is 0 only if the
alarm came, a clean checkpoint was pinned and verified, and the solver was stopped before ruin.
"""

from __future__ import annotations

import sys
from argparse import ArgumentParser, Namespace
from pathlib import Path

from monitor.exits import Exit


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("scene", metavar="NAME", nargs="?", default="plate", help="which solver")
    parser.add_argument("--plain", action="store_true", help="no screen: print lines")
    parser.add_argument("--ascii", action="store_true", help="draw with plain characters only")
    parser.add_argument(
        "--folder", metavar="DIR", type=Path, help="empty folder to work in (default: temporary)"
    )
    parser.add_argument(
        "--step-factor",
        metavar="F",
        type=float,
        default=1.02,
        help="time step over the solver's limit (default 1.02; below 1 it stays quiet)",
    )
    parser.add_argument(
        "--pace", metavar="S", type=float, default=0.25, help="seconds per snapshot (default 0.25)"
    )


def run(options: Namespace) -> int:
    from monitor.demo import (
        SCENES,
        Plan,
        fresh_folder,
        shortcomings,
        show_on_screen,
        show_plain,
    )
    from monitor.review import summarise
    from probes.errors import SettingsError

    if options.scene not in SCENES:
        raise SettingsError(
            f"there is no demo {options.scene!r}", remedy=f"known are {', '.join(SCENES)}"
        )
    plan = Plan(options.scene, fresh_folder(options.folder), options.step_factor, options.pace)
    about = SCENES[plan.scene].about
    print(f"demo: {about}, time step {plan.step_factor:g} of its limit", flush=True)
    print(f"files: {plan.folder}", flush=True)
    screen = all(stream.isatty() for stream in (sys.stdin, sys.stdout, sys.stderr))
    if options.plain or not screen:
        contents = show_plain(plan)
        print(f"\n{summarise(contents).text()}")
        missing = shortcomings(plan, contents)
        for what in missing:
            print(f"stepwarden: the demo fell short: {what}", file=sys.stderr)
        return Exit.INTERNAL if missing else Exit.GOOD
    status, contents = show_on_screen(plan, ascii_only=options.ascii)
    print(summarise(contents).text())
    return status
