"""Which part stands where on a screen of a given size. Pure."""

from __future__ import annotations

from collections.abc import Sequence

# The verdict's banner and sentences: eight lines, nine where there is room.
VERDICT_HEIGHT = 9

# Below this size one part is shown at a time.
FOLD_WIDTH, FOLD_HEIGHT = 104, 34
# Parts side by side, with their shares of the height; the first column is the wider one.
LEFT = (("g", 0.56), ("l", 0.44))
RIGHT = (("w", 0.42), ("e", 0.27), ("a", 0.16), ("k", 0.15))
_LEFT_SHARE = 0.62
KEYS = "?"
VERDICT = "v"

Place = tuple[int, int, int, int]


def folded(width: int, height: int) -> bool:
    """Too small to show all parts at once."""
    return width < FOLD_WIDTH or height < FOLD_HEIGHT


def arrange(width: int, height: int, chosen: str, alone: bool) -> dict[str, Place]:
    """(x, y, width, height) of each part that is seen, by its letter.

    The verdict stays on top and the line of keys at the bottom. chosen: the part that is shown
    where only one is; alone: show only that one although there is room.
    """
    small = folded(width, height)
    if height < 2:
        return {VERDICT: (0, 0, width, height)}
    top = min(VERDICT_HEIGHT + (not small), max(1, height - 2))
    room = height - top - 1
    places = {VERDICT: (0, 0, width, top), KEYS: (0, height - 1, width, 1)}
    if room < 1:
        return places
    if alone or small or not any(chosen == key for key, _ in LEFT + RIGHT):
        places[chosen] = (0, top, width, room)
        return places
    left = round(width * _LEFT_SHARE)
    places.update(_column(LEFT, 0, top, left, room))
    places.update(_column(RIGHT, left + 1, top, width - left - 1, room))
    return places


def _column(
    parts: Sequence[tuple[str, float]], x: int, y: int, width: int, height: int
) -> dict[str, Place]:
    """Parts below each other, filling the height."""
    out, share_above, above = {}, 0.0, 0
    for key, share in parts:
        share_above += share
        below = round(share_above * height)
        out[key] = (x, y + above, width, below - above)
        above = below
    return out
