"""The text behind `?`, over the screen."""

from __future__ import annotations

from textual import events
from textual.app import ComposeResult
from textual.screen import ModalScreen

from monitor.desk.parts.meaning import WIDTH, MeaningPart
from monitor.desk.parts.part import Part, Scene
from monitor.desk.widgets.cells import CellView


class MeaningScreen(ModalScreen[None]):
    """Closed by any key."""

    def __init__(self, of: Part, scene: Scene) -> None:
        super().__init__()
        self._part = MeaningPart(of)
        self._scene = scene

    def compose(self) -> ComposeResult:
        yield CellView(self._part)

    def on_resize(self, event: events.Resize) -> None:
        view = self.query_one(CellView)
        view.styles.width = min(WIDTH, event.size.width)
        view.styles.height = min(self._part.height, event.size.height)
        self.call_after_refresh(view.show, self._scene)

    def on_key(self, event: events.Key) -> None:
        event.stop()
        event.prevent_default()
        self.dismiss()
