"""A picture of the desk as an SVG file: `python -m monitor.desk.picture LOG OUT.svg --size 120x40`.

Every cell stands on an exact grid, and dots, lines and blocks are drawn as shapes, so that the
picture looks the same whatever fonts there are. It refers to nothing outside itself.
"""

from __future__ import annotations

import argparse
import asyncio
import sys
from collections.abc import Iterable, Sequence
from pathlib import Path
from xml.sax.saxutils import escape, quoteattr

from rich.cells import cell_len
from rich.color import Color
from rich.style import Style
from rich.terminal_theme import TerminalTheme
from textual.strip import Strip

from monitor.desk.app import DeskApp
from monitor.desk.messages import Arrived, GuardSeen
from monitor.desk.source import Post
from monitor.growthlog.read import read_log
from monitor.growthlog.records import AnyRecord, Opened, Snapshot
from monitor.wording import clean

# Size of a cell and of the letters in it, in pixels.
CELL_WIDTH, CELL_HEIGHT, FONT_SIZE, MARGIN = 8.4, 18.0, 14.0, 14.0
DIM_OPACITY = 0.62

_THEME = TerminalTheme(
    (20, 22, 30),
    (214, 217, 226),
    [
        (40, 44, 56),
        (226, 86, 86),
        (112, 190, 120),
        (226, 184, 88),
        (98, 148, 230),
        (198, 112, 210),
        (88, 196, 208),
        (200, 204, 214),
    ],
    [
        (104, 110, 128),
        (240, 120, 120),
        (146, 214, 152),
        (240, 208, 124),
        (140, 180, 244),
        (220, 150, 230),
        (130, 220, 230),
        (255, 255, 255),
    ],
)

# Lines as (x1, y1, x2, y2) in shares of a cell, and blocks as the share of its height.
_LINES = {
    "─": ((0.0, 0.5, 1.0, 0.5),),
    "╌": ((0.05, 0.5, 0.4, 0.5), (0.6, 0.5, 0.95, 0.5)),
    "│": ((0.5, 0.0, 0.5, 1.0),),
    "└": ((0.5, 0.0, 0.5, 0.5), (0.5, 0.5, 1.0, 0.5)),
}
_BLOCKS = {"▁": 0.125, "▂": 0.25, "▄": 0.5, "▅": 0.625, "█": 1.0}
# Column and row of each bit of a braille character.
_DOTS = ((0, 0), (0, 1), (0, 2), (1, 0), (1, 1), (1, 2), (0, 3), (1, 3))


class Replay:
    """A feed of given records, as if guard were writing them now."""

    def __init__(self, records: Sequence[AnyRecord], bad_lines: int = 0) -> None:
        self._records, self._bad_lines = list(records), bad_lines

    def begin(self, post: Post) -> None:
        post(GuardSeen(True))
        post(Arrived(self._records, restarted=False, behind=0, bad_lines=self._bad_lines))

    def taken(self) -> None:
        """Nothing waits."""

    def stop(self) -> None:
        """Nothing runs."""


def until_step(records: Iterable[AnyRecord], step: int | None) -> list[AnyRecord]:
    """The records before the first snapshot beyond `step`; all of them with None."""
    out: list[AnyRecord] = []
    for record in records:
        if step is not None and isinstance(record, Snapshot) and (record.step or 0) > step:
            break
        out.append(record)
    return out


async def strips_of(
    records: Sequence[AnyRecord], width: int, height: int, keys: Sequence[str], plain: bool
) -> list[Strip]:
    """Rows of the screen that shows `records` five seconds after the last of them."""
    now = max((r.at for r in records), default=0.0) + 5.0
    app = DeskApp(Replay(records), plain=plain, clock=lambda: now)
    async with app.run_test(size=(width, height)) as pilot:
        await pilot.pause()
        await pilot.press(*keys)
        await pilot.pause()
        return app.screen._compositor.render_strips()


def svg(strips: Sequence[Strip], title: str) -> str:
    """The rows as one SVG document; `title` is read out by screen readers."""
    columns = max(strip.cell_length for strip in strips)
    width = columns * CELL_WIDTH + 2 * MARGIN
    height = len(strips) * CELL_HEIGHT + 2 * MARGIN
    body = [
        part for y, strip in enumerate(strips) for part in _row(strip, MARGIN + y * CELL_HEIGHT)
    ]
    paper = _THEME.background_color.hex
    return "\n".join(
        [
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:.1f} {height:.1f}" '
            f'width="{width:.0f}" height="{height:.0f}" role="img" aria-label={quoteattr(title)}>',
            f"<title>{escape(title)}</title>",
            f'<rect width="100%" height="100%" rx="8" fill="{paper}"/>',
            f"<g font-family=\"ui-monospace, Menlo, Consolas, 'DejaVu Sans Mono', monospace\" "
            f'font-size="{FONT_SIZE:g}" xml:space="preserve">',
            *body,
            "</g>",
            "</svg>",
            "",
        ]
    )


def _row(strip: Strip, top: float) -> Iterable[str]:
    x = MARGIN
    for segment in strip:
        width = cell_len(segment.text) * CELL_WIDTH
        style = segment.style or Style.null()
        ink, paper = _rgb(style.color, True), _rgb(style.bgcolor, False)
        if style.reverse:
            ink, paper = paper or _THEME.background_color.hex, ink or _THEME.foreground_color.hex
        if paper is not None:
            yield (
                f'<rect x="{x:.1f}" y="{top:.1f}" width="{width + 0.3:.1f}" '
                f'height="{CELL_HEIGHT + 0.3:.1f}" fill="{paper}"/>'
            )
        if segment.text.strip():
            look = f'fill="{ink or _THEME.foreground_color.hex}"'
            look += ' font-weight="bold"' if style.bold else ""
            look += f' opacity="{DIM_OPACITY}"' if style.dim else ""
            yield f"<g {look}>{''.join(_ink(segment.text, x, top))}</g>"
        x += width


def _rgb(color: Color | None, foreground: bool) -> str | None:
    if color is None or color.is_default:
        return None
    return color.get_truecolor(_THEME, foreground=foreground).hex


def _ink(text: str, x: float, top: float) -> Iterable[str]:
    """Words as text on the grid, everything else as shapes."""
    word, start = "", x
    for character in f"{text} ":
        if character != " " and not _shape(character, 0.0, 0.0):
            start = start if word else x
            word += character
        elif word:
            yield _word(word, start, top)
            word = ""
        if character != " ":
            yield _shape(character, x, top)
        x += cell_len(character) * CELL_WIDTH


def _word(word: str, x: float, top: float) -> str:
    length = cell_len(word) * CELL_WIDTH
    return (
        f'<text x="{x:.1f}" y="{top + 0.74 * CELL_HEIGHT:.1f}" textLength="{length:.1f}" '
        f'lengthAdjust="spacingAndGlyphs">{escape(word)}</text>'
    )


def _shape(character: str, x: float, top: float) -> str:
    """A character that is drawn, as SVG; "" for one that is written."""
    if character in _LINES:
        parts = "".join(
            f"M{x + a * CELL_WIDTH:.1f} {top + b * CELL_HEIGHT:.1f}"
            f"L{x + c * CELL_WIDTH:.1f} {top + d * CELL_HEIGHT:.1f}"
            for a, b, c, d in _LINES[character]
        )
        return f'<path d="{parts}" stroke="#6d7386" stroke-width="1" fill="none"/>'
    if character in _BLOCKS:
        high = _BLOCKS[character] * CELL_HEIGHT
        return (
            f'<rect x="{x:.1f}" y="{top + CELL_HEIGHT - high:.1f}" width="{CELL_WIDTH + 0.2:.1f}" '
            f'height="{high:.1f}"/>'
        )
    if character == "▐":
        half = CELL_WIDTH / 2
        return f'<rect x="{x + half:.1f}" y="{top:.1f}" width="{half:.1f}" height="{CELL_HEIGHT}"/>'
    code = ord(character) - 0x2800
    if not 0 < code < 256:
        return ""
    return "".join(
        f'<circle cx="{x + (0.25 + 0.5 * column) * CELL_WIDTH:.1f}" '
        f'cy="{top + (0.125 + 0.25 * row) * CELL_HEIGHT:.1f}" r="1.35"/>'
        for bit, (column, row) in enumerate(_DOTS)
        if code >> bit & 1
    )


def main(words: Sequence[str] | None = None) -> int:
    """Write one picture; returns an exit status."""
    parser = argparse.ArgumentParser(prog="python -m monitor.desk.picture", description=__doc__)
    parser.add_argument("log", type=Path)
    parser.add_argument("out", type=Path)
    parser.add_argument("--size", default="120x40", help="columns x rows of the terminal")
    parser.add_argument("--until-step", type=int, help="as it was after this step")
    parser.add_argument("--keys", default="", help="keys to press first, separated by spaces")
    parser.add_argument("--plain", action="store_true", help="ASCII characters only")
    options = parser.parse_args(words)
    columns, _, rows = options.size.partition("x")
    records = until_step(read_log(options.log).records, options.until_step)
    keys = options.keys.split()
    strips = asyncio.run(strips_of(records, int(columns), int(rows), keys, options.plain))
    name = next((r.run for r in records if isinstance(r, Opened)), "run")
    options.out.write_text(svg(strips, f"The desk of stepwarden on the run {clean(name)}"), "utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
