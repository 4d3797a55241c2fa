"""The screen of one run: its parts, and what the keys do."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from typing import ClassVar

from textual import events
from textual.app import ComposeResult
from textual.binding import Binding
from textual.screen import Screen

from monitor.desk.advice import Health
from monitor.desk.arranging import KEYS, VERDICT, Place, arrange, folded
from monitor.desk.glyphs import glyphs_for
from monitor.desk.messages import Arrived, GuardSeen, LogTrouble
from monitor.desk.parts.growth import GrowthPart
from monitor.desk.parts.keys import KeysPart
from monitor.desk.parts.levels import LevelsPart
from monitor.desk.parts.lists import ArrivalsPart, EventsPart, KeptPart, SettingsPart
from monitor.desk.parts.part import Part, Scene
from monitor.desk.parts.verdict import VerdictPart
from monitor.desk.parts.where import WherePart
from monitor.desk.screens.meaning import MeaningScreen
from monitor.desk.source import Feed
from monitor.desk.story import Story
from monitor.desk.widgets.cells import CellView

# Ages are told in steps of five seconds.
TICK_SECONDS = 5.0
# While a long log is read, the screen is drawn so often.
READING_SECONDS = 0.25


class RunScreen(Screen[None]):
    """Shows one run from its feed. plain: ASCII only; clock: seconds since the epoch."""

    BINDINGS: ClassVar = [
        *(Binding(k, f"choose('{k}')", show=False) for k in ("g", "l", "w", "e", "a", "k", "s")),
        Binding("v", "choose('v')", show=False),
        Binding("right,tab", "next(1)", show=False, priority=True),
        Binding("left,shift+tab", "next(-1)", show=False, priority=True),
        Binding("down", "move(1)", show=False),
        Binding("up", "move(-1)", show=False),
        Binding("pagedown", "move(10)", show=False),
        Binding("pageup", "move(-10)", show=False),
        Binding("plus,equals_sign", "zoom(1)", show=False),
        Binding("minus", "zoom(-1)", show=False),
        Binding("f", "field", show=False),
        Binding("enter", "alone", show=False),
        Binding("escape", "together", show=False),
        Binding("question_mark", "meaning", show=False),
    ]

    def __init__(self, feed: Feed, *, plain: bool, clock: Callable[[], float] = time.time) -> None:
        super().__init__()
        self.story = Story()
        self.health = Health()
        self._glyphs, self._clock = glyphs_for(plain), clock
        self._feed = feed
        self._keys = KeysPart()
        parts: tuple[Part, ...] = (
            *(GrowthPart(), LevelsPart(), WherePart(), EventsPart(), ArrivalsPart(), KeptPart()),
            *(SettingsPart(), VerdictPart()),
        )
        self._views = {part.key: CellView(part) for part in parts}
        self._order = [part.key for part in parts]
        self._foot = CellView(self._keys)
        self.chosen = self._order[0]
        self.alone = False
        self._field = ""
        self._drawn = 0.0
        self._places: dict[str, Place] = {}

    def compose(self) -> ComposeResult:
        yield from self._views.values()
        yield self._foot

    def on_mount(self) -> None:
        self._feed.begin(self.post_message)
        self.set_interval(TICK_SECONDS, self._tick)

    def on_unmount(self) -> None:
        self._feed.stop()

    # --- news ---------------------------------------------------------------------------

    def on_arrived(self, message: Arrived) -> None:
        if message.restarted:
            self.story = Story()
            self._field = ""
        self.story.take(message.records)
        self.health = replace(self.health, behind=message.behind, bad_lines=message.bad_lines)
        self._feed.taken()
        if not message.behind or time.monotonic() - self._drawn > READING_SECONDS:
            self.draw()

    def on_guard_seen(self, message: GuardSeen) -> None:
        self.health = replace(self.health, guard=message.alive)
        self._tick()

    def on_log_trouble(self, message: LogTrouble) -> None:
        self.health = replace(self.health, trouble=message.text)
        self._tick()

    def _tick(self) -> None:
        """Only the verdict depends on the clock alone."""
        self._views[VERDICT].show(self.scene, chosen=self.chosen == VERDICT)

    # --- drawing ------------------------------------------------------------------------

    @property
    def scene(self) -> Scene:
        return Scene(self.story, self.health, self._clock(), self._glyphs, self.field)

    @property
    def field(self) -> str:
        """The field whose curves are drawn: chosen by key, else the one that grows, else the
        first."""
        stretch, last = self.story.now, self.story.last
        names = stretch.series.fields if stretch else []
        if self._field in names:
            return self._field
        if last is not None and last.verdict.field in names:
            return last.verdict.field
        return names[0] if names else ""

    def draw(self) -> None:
        """Draw all parts that are seen; only what changed is sent."""
        self._drawn = time.monotonic()
        scene = self.scene
        for key, view in self._views.items():
            if view.display:
                view.show(scene, chosen=key == self.chosen)
        self._keys.moves = self._views[self.chosen].part.moves
        self._foot.show(scene)

    def on_resize(self, event: events.Resize) -> None:
        self._arrange()

    def _arrange(self) -> None:
        # The verdict is always there: with it chosen, the first part keeps its place below.
        below = self._order[0] if self.chosen == VERDICT else self.chosen
        places = arrange(*self.size, below, self.alone)
        if places == self._places:
            self.draw()
            return
        self._places = places
        for key, view in (*self._views.items(), (KEYS, self._foot)):
            place = places.get(key)
            view.display = place is not None
            if place is not None:
                view.styles.offset = place[:2]
                view.styles.width, view.styles.height = place[2:]
        self.call_after_refresh(self.draw)

    # --- keys ---------------------------------------------------------------------------

    def action_choose(self, key: str) -> None:
        before = self._seen()
        self.chosen = key
        if self._seen() != before or self.alone or folded(*self.size):
            self._arrange()
        else:
            self.draw()

    def _seen(self) -> bool:
        """Whether the chosen part has a place among the others."""
        return self.chosen != "s"

    def action_next(self, by: int) -> None:
        at = self._order.index(self.chosen)
        self.action_choose(self._order[(at + by) % len(self._order)])

    def action_move(self, by: int) -> None:
        self._views[self.chosen].part.move(by)
        self.draw()

    def action_zoom(self, by: int) -> None:
        self._views[self.chosen].part.zoom(by)
        self.draw()

    def action_field(self) -> None:
        names = self.story.now.series.fields if self.story.now else []
        if names:
            at = names.index(self.field) if self.field in names else -1
            self._field = names[(at + 1) % len(names)]
            self.draw()

    def action_alone(self) -> None:
        self.alone = not self.alone
        self._arrange()

    def action_together(self) -> None:
        if not self._seen():
            self.chosen = self._order[0]
        self.alone = False
        self._arrange()

    def action_meaning(self) -> None:
        self.app.push_screen(MeaningScreen(self._views[self.chosen].part, self.scene))
