"""The bottom line: which keys do what, and how far a long log has been read."""

from __future__ import annotations

from monitor.desk.parts.part import Part, Scene
from monitor.desk.sheet import Sheet

# From the left as far as they fit, so the first ones must be those that are needed most.
_KEYS = (
    ("q", "leave"),
    ("?", "what is this"),
    ("g l w e a k s", "parts"),
    ("enter", "alone"),
    ("up down", ""),
    ("left right", "next"),
    ("f", "field"),
)


class KeysPart(Part):
    key = "?"
    name = "keys"

    def __init__(self) -> None:
        self.moves = ""

    def draw(self, scene: Scene, width: int, height: int, *, chosen: bool = False) -> Sheet:
        sheet = Sheet(width, height, plain=scene.glyphs.plain)
        x = 1
        if scene.health.behind:
            told = f"reading the log, {scene.health.behind / 1e6:.0f} MB to go"
            x = sheet.write(x, 0, told, "swelling") + 3
        for key, does in _KEYS:
            does = does or self.moves
            if not does or x + len(key) + len(does) + 1 > width:
                continue
            x = sheet.write(x, 0, key, "chosen")
            x = sheet.write(x + 1, 0, does, "dim") + 2
        return sheet
