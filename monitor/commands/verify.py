"""Say whether checkpoints are fit to restart from: complete, finite, within their bounds, and clean
as far as the growth log of their run knows.

Exit status: 0 all fit; 3 unreadable or incomplete; 10 not clean or out of bounds; 11 non-finite.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.exits import Exit

if TYPE_CHECKING:
    from monitor.verify import Ask

# The worst verdict among several checkpoints decides.
_STATUS = {"overflowed": Exit.OVERFLOWED, "unfit": Exit.ALARM, "unreadable": Exit.UNREADABLE}


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("checkpoints", metavar="CHECKPOINT", nargs="+", type=Path)
    parser.add_argument(
        "--log", metavar="LOG", type=Path, help="growth log of the run, or the folder that holds it"
    )


def run(options: Namespace) -> int:
    from contextlib import ExitStack, closing

    from monitor.childkeeper import ChildKeeper
    from monitor.growthlog.read import read_log
    from monitor.logfinding import find_log
    from monitor.verify import known, verify
    from monitor.wording import clean
    from probes.spec import WatchSpec

    log = None
    if options.log:
        path = find_log(options.log)
        log = known(read_log(path), path.parent)
    found = set()
    for checkpoint in options.checkpoints:
        with ExitStack() as stack:

            def ask(watch: WatchSpec, stack: ExitStack = stack) -> Ask:
                return stack.enter_context(closing(ChildKeeper(watch, ()))).ask

            finding = verify(checkpoint, log, ask)
        print(clean(finding.text()))
        found.add(finding.verdict)
    return next((status for verdict, status in _STATUS.items() if verdict in found), Exit.GOOD)
