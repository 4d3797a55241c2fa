"""Say what happened to a run, from its growth log alone: when growth began, what it was, where,
how fast, which checkpoint is still clean, and what was done about it.

Exit status: 0 no alarm; 10 alarm; 11 overflowed; 3 no log.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from pathlib import Path

from monitor.exits import Exit


def declare(parser: ArgumentParser) -> None:
    parser.add_argument(
        "log", metavar="LOG", type=Path, help="growth log, or the folder that holds it"
    )
    parser.add_argument("--json", action="store_true", help="print one JSON object instead of text")


def run(options: Namespace) -> int:
    from monitor.growthlog.read import read_log
    from monitor.logfinding import find_log
    from monitor.review import summarise

    log = find_log(options.log)
    contents = read_log(log)
    review = summarise(contents)
    advice = None
    if review.alarmed or review.overflowed:
        from monitor.limits.restarting import advise, settings_of

        advice = advise(settings_of(contents), log.parent, review.growth)
    if options.json:
        import json

        plain = review.json_object()
        plain["restart"] = None if advice is None else advice.json_object()
        print(json.dumps(plain, indent=1, allow_nan=False))
    else:
        print(review.text())
        if advice is not None:
            print(advice.write_up())
    if review.overflowed:
        return Exit.OVERFLOWED
    return Exit.ALARM if review.alarmed else Exit.GOOD
