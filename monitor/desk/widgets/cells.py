"""The one widget of the desk: shows a sheet, and sends only what changed of it."""

from __future__ import annotations

from typing import ClassVar

from rich.segment import Segment
from rich.style import Style
from textual.geometry import Region
from textual.strip import Strip
from textual.widget import Widget

from monitor.desk.parts.part import Part, Scene
from monitor.desk.sheet import Sheet

_STYLES = (
    *(
        "rule",
        "heading",
        "chosen",
        "label",
        "dim",
        "axis",
        "level",
        "ripple",
        "bulk",
        "mode",
        "size",
    ),
    *("good", "gathering", "quiet", "swelling", "runaway", "overflowed"),
    *(f"banner-{c}" for c in ("gathering", "quiet", "swelling", "runaway", "overflowed")),
    *(f"act-{c}" for c in ("gathering", "quiet", "swelling", "runaway", "overflowed")),
    *(f"heat{n}" for n in range(10)),
)


class CellView(Widget):
    """Shows one part. What each style looks like stands in the style sheet."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {f"cells--{name}" for name in _STYLES}

    def __init__(self, part: Part) -> None:
        super().__init__(id=f"part-{part.name}")
        self.part = part
        self._sheet = Sheet(0, 0)
        self._strips: dict[int, Strip] = {}
        self._looks: dict[str, Style] = {}

    def show(self, scene: Scene, *, chosen: bool = False) -> None:
        """Draw the part at the present size."""
        width, height = self.size
        if not width or not height:
            return
        sheet = self.part.draw(scene, width, height, chosen=chosen)
        before, self._sheet = self._sheet, sheet
        if (before.width, before.height) != (width, height):
            self._strips.clear()
            self.refresh()
            return
        regions = []
        for x, y, run in sheet.changes(before):
            self._strips.pop(y, None)
            regions.append(Region(x, y, run, 1))
        if regions:
            self.refresh(*regions)

    def text(self) -> str:
        """What is shown, as lines of text."""
        return "\n".join(self._sheet.lines())

    def notify_style_update(self) -> None:
        super().notify_style_update()
        self._strips.clear()
        self._looks.clear()

    def render_line(self, y: int) -> Strip:
        if y >= self._sheet.height:
            return Strip.blank(self.size.width)
        strip = self._strips.get(y)
        if strip is None:
            segments = [Segment(text, self._look(name)) for text, name in self._sheet.runs(y)]
            strip = self._strips[y] = Strip(segments, self._sheet.width)
        return strip

    def _look(self, name: str) -> Style:
        look = self._looks.get(name)
        if look is None:
            look = self._looks[name] = self.get_component_rich_style(
                f"cells--{name}", partial=True, default=Style.null()
            )
        return look
