"""The answer to `?`: what the chosen part means."""

from __future__ import annotations

from textwrap import wrap

from monitor.desk.meanings import paragraphs
from monitor.desk.parts.part import Part, Scene
from monitor.desk.sheet import Sheet

WIDTH = 74


class MeaningPart(Part):
    key = "?"
    name = "meaning"

    def __init__(self, of: Part) -> None:
        self._of = of
        names = ["verdict", of.name] if of.name != "verdict" else ["verdict"]
        self._lines: list[tuple[str, str]] = []
        for name in reversed(names):
            self._lines.append((name, "chosen"))
            for paragraph in paragraphs(name):
                self._lines += [(line, "") for line in wrap(paragraph, WIDTH - 4)]
                self._lines.append(("", ""))
        if of.moves:
            self._lines.insert(1, (f"up and down: {of.moves}", "dim"))

    @property
    def height(self) -> int:
        """Rows that the whole text needs, with its frame."""
        return len(self._lines) + 2

    def draw(self, scene: Scene, width: int, height: int, *, chosen: bool = False) -> Sheet:
        sheet = Sheet(width, height, plain=scene.glyphs.plain)
        for y in (0, height - 1):
            sheet.fill(y, scene.glyphs.rule, "heading")
        for y, (line, style) in enumerate(self._lines[: height - 2], 1):
            sheet.write(2, y, line, style)
        sheet.write(2, height - 1, " any key closes this ", "heading")
        return sheet
