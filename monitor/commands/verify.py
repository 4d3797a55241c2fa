"""Say whether checkpoints are fit to restart from: complete, finite, within their bounds, and clean
as far as the growth log of their run knows.

Exit status: 0 all fit; 3 unreadable or incomplete; 10 not clean or out of bounds; 11 non-finite.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from pathlib import Path

from monitor.exits import Exit


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("checkpoints", metavar="CHECKPOINT", nargs="+", type=Path)
    parser.add_argument(
        "--log", metavar="LOG", type=Path, help="growth log of the run, or the folder that holds it"
    )


def run(options: Namespace) -> int:
    from monitor.growthlog.read import read_log
    from monitor.logfinding import find_log
    from monitor.verify import examine
    from monitor.wording import clean

    contents = read_log(find_log(options.log)) if options.log else None
    findings = [examine(path, contents) for path in options.checkpoints]
    for finding in findings:
        print(clean(finding.text()))
    worst = {"overflowed": Exit.OVERFLOWED, "unfit": Exit.ALARM, "unreadable": Exit.UNREADABLE}
    found = {finding.verdict for finding in findings}
    return next((status for verdict, status in worst.items() if verdict in found), Exit.GOOD)
