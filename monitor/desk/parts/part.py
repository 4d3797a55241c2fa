"""What all parts of the desk have in common: a letter, a heading, a meaning, a drawing."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass

from rich.cells import cell_len

from monitor.desk.advice import Health
from monitor.desk.glyphs import Glyphs
from monitor.desk.sheet import Sheet
from monitor.desk.story import Story


@dataclass(frozen=True, slots=True)
class Scene:
    """Everything a drawing depends on. now: seconds since the epoch; field: the one whose curves
    are drawn ("" while there is none)."""

    story: Story
    health: Health
    now: float
    glyphs: Glyphs
    field: str = ""

    @property
    def which_field(self) -> str:
        """The field's name, and which of how many it is."""
        names = self.story.now.series.fields if self.story.now else []
        if len(names) < 2 or self.field not in names:
            return self.field
        return f"{self.field} ({names.index(self.field) + 1} of {len(names)})"


class Part(ABC):
    """One part. It remembers what must not change from drawing to drawing (axes, scrolling), and
    is otherwise a function of the scene and the size.

    key: the letter that chooses it. name: also of its text in `monitor.desk.meanings`. moves: what
    the up and down arrows do in it ("" for nothing).
    """

    key: str
    name: str
    moves = ""

    @abstractmethod
    def draw(self, scene: Scene, width: int, height: int, *, chosen: bool = False) -> Sheet:
        """A sheet of the given size."""

    def move(self, by: int) -> None:  # noqa: B027
        """Up (-1), down (+1), or farther. Parts that cannot move stay as they are."""

    def zoom(self, by: int) -> None:  # noqa: B027
        """Closer (+1) or wider (-1). Parts without a scale stay as they are."""

    def blank(
        self,
        scene: Scene,
        width: int,
        height: int,
        chosen: bool,
        facts: Sequence[tuple[str, str]] = (),
    ) -> Sheet:
        """An empty sheet with the heading: letter, name and (text, style) facts as far as they
        fit."""
        glyphs = scene.glyphs
        sheet = Sheet(width, height, plain=glyphs.plain)
        sheet.fill(0, glyphs.rule, "rule")
        style = "chosen" if chosen else "heading"
        x = sheet.write(0, 0, f"{glyphs.chosen if chosen else glyphs.rule}{self.key} ", style)
        x = sheet.write(x, 0, f"{self.name} ", style)
        for text, fact_style in facts:
            text = sheet.told(text)
            if x + 1 + cell_len(text) + 2 > width:
                break
            x = sheet.write(x + 1, 0, f" {text} ", fact_style)
        return sheet
