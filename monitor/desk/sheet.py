"""A rectangle of character cells: what every part of the desk draws on.

No screen library in here but its table of character widths: a sheet can be looked at, and tested,
as lines of text.
"""

from __future__ import annotations

from collections.abc import Iterator

from rich.cells import cell_len, get_character_cell_size

from monitor.wording import clean

# Two changes closer together than this are sent as one: moving the cursor costs as much.
_BRIDGE = 4

# What the project's own sentences use beyond ASCII.
_PLAIN = str.maketrans({"×": "x", "·": "-", "…": "~", "–": "-", "±": "+", "²": "2", "θ": "t"})


class Sheet:
    """Cells of width x height, blank at first. Each has a character and the name of a style.

    A character two cells wide leaves an empty string in the second one. plain: only ASCII
    characters get in; others are written in ASCII or as escapes.
    """

    def __init__(self, width: int, height: int, *, plain: bool = False) -> None:
        self.width, self.height, self.plain = max(0, width), max(0, height), plain
        self.chars = [[" "] * self.width for _ in range(self.height)]
        self.styles = [[""] * self.width for _ in range(self.height)]

    def write(self, x: int, y: int, text: str, style: str = "", room: int | None = None) -> int:
        """Put cleaned `text` at (x, y), cut at `room` cells or the sheet's edge. Returns the x
        after it. A cut is marked by "…" in its last cell."""
        end = self.width if room is None else min(self.width, x + room)
        text = self.told(text)
        if not 0 <= y < self.height or x < 0 or x >= end:
            return x
        if cell_len(text) > end - x:
            text = _cut(text, end - x - 1) + ("~" if self.plain else "…")
        row, styles = self.chars[y], self.styles[y]
        for character in text:
            size = get_character_cell_size(character)
            if size == 0:
                continue  # A combining mark: without its own cell it would shift all that follows.
            row[x], styles[x] = character, style
            if size == 2:
                row[x + 1], styles[x + 1] = "", style
            x += size
        return x

    def told(self, text: str) -> str:
        """`text` as it will stand in the cells."""
        text = clean(text)
        if self.plain and not text.isascii():
            text = text.translate(_PLAIN).encode("ascii", "backslashreplace").decode()
        return text

    def put(self, x: int, y: int, character: str, style: str = "") -> None:
        """Set one cell to one of the project's own single-width characters."""
        if 0 <= x < self.width and 0 <= y < self.height:
            self.chars[y][x], self.styles[y][x] = character, style

    def fill(self, y: int, character: str, style: str = "", start: int = 0) -> None:
        """Fill row y from cell `start` on."""
        for x in range(start, self.width):
            self.put(x, y, character, style)

    def paste(self, other: Sheet, x: int, y: int) -> None:
        """Copy another sheet's cells to (x, y), cut at the edges."""
        for row in range(min(other.height, self.height - y)):
            n = min(other.width, self.width - x)
            self.chars[y + row][x : x + n] = other.chars[row][:n]
            self.styles[y + row][x : x + n] = other.styles[row][:n]

    def lines(self) -> list[str]:
        """The text, a string per row, without blanks at the ends."""
        return ["".join(row).rstrip() for row in self.chars]

    def runs(self, y: int) -> Iterator[tuple[str, str]]:
        """(text, style) of the stretches of one style in row y."""
        row, styles = self.chars[y], self.styles[y]
        start = 0
        for x in range(1, self.width + 1):
            if x == self.width or styles[x] != styles[start]:
                yield "".join(row[start:x]), styles[start]
                start = x

    def changes(self, before: Sheet) -> Iterator[tuple[int, int, int]]:
        """(x, y, width) of the stretches that differ from `before`, a sheet of the same size."""
        for y in range(self.height):
            new, old = self.chars[y], before.chars[y]
            new_styles, old_styles = self.styles[y], before.styles[y]
            if new == old and new_styles == old_styles:
                continue
            start = end = -1
            for x in range(self.width):
                if new[x] == old[x] and new_styles[x] == old_styles[x]:
                    continue
                if start >= 0 and x - end > _BRIDGE:
                    yield _whole(start, y, end, new, old)
                    start = x
                elif start < 0:
                    start = x
                end = x + 1
            yield _whole(start, y, end, new, old)


def _whole(start: int, y: int, end: int, new: list[str], old: list[str]) -> tuple[int, int, int]:
    """A stretch widened so that it cuts no character of two cells."""
    if "" in (new[start], old[start]):
        start -= 1
    if end < len(new) and "" in (new[end], old[end]):
        end += 1
    return start, y, end - start


def _cut(text: str, cells: int) -> str:
    """The longest beginning of `text` that fits into so many cells."""
    used = 0
    for n, character in enumerate(text):
        used += get_character_cell_size(character)
        if used > cells:
            return text[:n]
    return text
