"""Follow a run, or look at a growth log, on a screen. Only reads: closing it changes nothing.

PATH is a growth log or a run's folder. Without a terminal, or with --plain, lines are printed
instead.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("path", metavar="PATH", help="growth log, or the folder of a run")
    parser.add_argument("--ascii", action="store_true", help="draw with plain characters only")
    parser.add_argument("--plain", action="store_true", help="no screen: print lines")


def run(options: Namespace) -> int:
    from monitor.desk import run as show

    return show(options.path, ascii=options.ascii, plain=options.plain)
