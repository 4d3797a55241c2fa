"""List the checkpoints that guard keeps safe from the solver's rotation, oldest step first.

Provisional pins are held while a run is quiet and give way to newer ones; an alarm keeps those from
before the growth began.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from pathlib import Path

from monitor.exits import Exit


def declare(parser: ArgumentParser) -> None:
    parser.add_argument(
        "log", metavar="LOG", type=Path, help="growth log, or the folder that holds it"
    )


def run(options: Namespace) -> int:
    from monitor.growthlog.read import read_log
    from monitor.growthlog.records import PinRecord
    from monitor.lastclean import kept_pins
    from monitor.logfinding import find_log
    from monitor.wording import clean

    records = read_log(find_log(options.log)).records
    pins = kept_pins([r for r in records if isinstance(r, PinRecord)])
    if not pins:
        print("no checkpoint is pinned")
    for pin in pins:
        step = "step unknown" if pin.step is None else f"step {pin.step}"
        proof = "verified" if pin.verified else f"not verified: {pin.detail or 'no reason given'}"
        print(clean(f"{step}  {pin.state}  {proof}  {pin.bytes / 1e6:.3g} MB by {pin.method}"))
        print(clean(f"  {pin.folder}"))
        for name in pin.files:
            print(clean(f"    {name}"))
    return Exit.GOOD
