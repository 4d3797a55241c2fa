"""Sends of a changed row only what changed.

The screen library sends each row of a widget from the widget's left edge up to the change. Cutting
the left side as well takes about two thirds of the bytes away. This leans on a private part of it
(textual 8.2: `_compositor.ChopsUpdate`, a row's strips by offset and the spans that changed), so
it can be switched off.
"""

from __future__ import annotations

from rich.console import Console
from rich.control import Control
from textual._compositor import ChopsUpdate, CompositorUpdate


class Cropped(CompositorUpdate):
    """The same update with its strips cut on both sides."""

    def __init__(self, update: ChopsUpdate) -> None:
        self._update = update

    def render_segments(self, console: Console) -> str:
        """Control sequences and text to write."""
        update, out = self._update, []
        for y, first, last in update.spans:
            for end, (x, strip) in zip(update.chop_ends[y], update.chops[y].items(), strict=False):
                start, stop = max(x, first), min(end, last)
                if strip is not None and start < stop:
                    out.append(Control.move_to(start, y).segment.text)
                    out.append(strip.crop(start - x, stop - x).render(console))
        return "".join(out)
