"""Subcommands, a module each: ``declare(parser)`` names its options, ``run(options)`` does it.

A module here imports nothing heavy at its top, and ``run`` returns an exit status.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from typing import Protocol

# name: one line of help. The order is that of a run's life.
COMMANDS = {
    "demo": "watch a small solver go unstable, from first sign to stop",
    "limit": "say how large a time step the scheme tolerates, and why",
    "scout": "look at a run's folder, say what was understood, propose settings",
    "guard": "follow a run: read, log, alarm, pin, stop (no screen)",
    "desk": "follow a run or its growth log on a screen",
    "review": "say what happened, from a growth log",
    "rehearse": "replay a history against other alarm settings",
    "pins": "list the checkpoints that guard keeps safe",
    "verify": "say whether a checkpoint is fit to restart from",
}


class Command(Protocol):
    """What a module of this package offers."""

    def declare(self, parser: ArgumentParser) -> None:
        """Add options and arguments; the module's docstring is the description."""

    def run(self, options: Namespace) -> int:
        """Do it. Returns an exit status; raises StepwardenError for what a user can mend."""
