"""The desk: the screen (or the plain lines) on which a run is followed, from its log alone."""

from __future__ import annotations

import os
from pathlib import Path


def run(
    path: str | Path, *, ascii: bool = False, plain: bool = False, stock_driver: bool = False
) -> int:
    """Show the log at `path`, or that of the run in the folder `path`, until left.

    ascii: draw with ASCII characters only (also chosen where the locale is not UTF-8). plain: print
    lines instead of a screen (also chosen without a terminal that can show one). stock_driver:
    leave what is sent to the terminal to the screen library alone, to tell its faults from ours.
    Returns the exit status: 0, or 128 + n when signal n ended it. Raises ReadError where there is
    no log.
    """
    from monitor.desk import terminal
    from monitor.logfinding import find_log

    log = find_log(Path(path))
    if plain or not terminal.can_show_a_screen(os.environ):
        from monitor.desk.plain import follow

        return follow(log)
    plain_characters = ascii or not terminal.speaks_utf8(terminal.given_environment())
    terminal.prepare_environment()
    from monitor.desk.app import DeskApp
    from monitor.desk.source import Source

    with terminal.kept_as_it_was():
        app = DeskApp(Source(log), plain=plain_characters, cropped=not stock_driver)
        app.run(mouse=False)
        app.left_in_time()
    return app.return_code or 0
