"""The application: one screen, and how it is left."""

from __future__ import annotations

import asyncio
import os
import signal
import threading
import time
from collections.abc import Callable
from typing import ClassVar, cast

from rich.console import RenderableType
from rich.text import Text
from textual._compositor import ChopsUpdate
from textual.app import App
from textual.binding import Binding
from textual.screen import Screen

from monitor.desk import terminal
from monitor.desk.cropping import Cropped
from monitor.desk.screens.run import RunScreen
from monitor.desk.source import Feed

HANG_UP_SECONDS = 1.0


class DeskApp(App[None]):
    """Shows one run from its feed. plain: ASCII only; cropped: send less than the library would.

    Colours are the terminal's own sixteen, so that they suit light and dark backgrounds.
    """

    CSS_PATH = "desk.tcss"
    ENABLE_COMMAND_PALETTE = False
    BINDINGS: ClassVar = [
        Binding("q", "quit", show=False),
        Binding("ctrl+c", "interrupt", show=False, priority=True),
        Binding("ctrl+z", "suspend_process", show=False, priority=True),
    ]

    def __init__(
        self,
        feed: Feed,
        *,
        plain: bool = False,
        cropped: bool = True,
        clock: Callable[[], float] = time.time,
    ) -> None:
        super().__init__(ansi_color=True)
        self.theme = "ansi-dark"
        self.title = "stepwarden"
        self._feed, self._plain, self._cropped, self._clock = feed, plain, cropped, clock
        self._patience: threading.Timer | None = None

    def get_default_screen(self) -> Screen[None]:
        return RunScreen(self._feed, plain=self._plain, clock=self._clock)

    def on_mount(self) -> None:
        self.app_resume_signal.subscribe(self, self._resumed)
        if self.is_headless:
            return
        loop = asyncio.get_running_loop()
        for number in terminal.LEAVE_ON:
            loop.add_signal_handler(number, self._leave, 128 + number)
        self.set_interval(HANG_UP_SECONDS, self._look_for_hang_up)

    def action_interrupt(self) -> None:
        self._leave(128 + signal.SIGINT)

    def _look_for_hang_up(self) -> None:
        if terminal.hung_up():
            self._leave(128 + signal.SIGHUP)

    def _leave(self, status: int) -> None:
        if self._patience is None:
            self._patience = terminal.leave_in_time(status)
        self.exit(return_code=status)

    def left_in_time(self) -> None:
        """The screen is gone: nobody needs to force anything any more."""
        if self._patience is not None:
            self._patience.cancel()

    def _resumed(self, _: App[None]) -> None:
        # After a stop the terminal shows whatever was printed meanwhile.
        self.refresh()
        self.screen.refresh()

    def _display(self, screen: Screen[object], renderable: RenderableType | None) -> None:
        if self._cropped and isinstance(renderable, ChopsUpdate):
            # `_display` takes every update of a screen, whatever its annotation says.
            super()._display(screen, cast(RenderableType, Cropped(renderable)))
        else:
            super()._display(screen, renderable)

    def _fatal_error(self) -> None:
        # The library would print all local variables of all frames.
        if os.environ.get("STEPWARDEN_TRACE"):
            super()._fatal_error()
            return
        error = self._exception
        told = (
            f"stepwarden: internal error in the desk: {type(error).__name__}: {error}; guard is "
            "not affected, set STEPWARDEN_TRACE=1 to see where it happened"
        )
        self._exit_renderables.append(Text(told))
        self._close_messages_no_wait()
