"""The characters that the desk draws with: one set for UTF-8 terminals, one in plain ASCII."""

from __future__ import annotations

from dataclasses import dataclass

# Ten characters from light to dense. The tile map uses them on every terminal, so that it can be
# read without colour.
RAMP = " .:-=+*#%@"


@dataclass(frozen=True, slots=True)
class Glyphs:
    """plain: ASCII only. rule, wall, floor, corner: lines of the plots; level: the line at one and
    other references; dot: separator; chosen: before the title of the chosen part."""

    plain: bool
    rule: str
    wall: str
    floor: str
    corner: str
    level: str
    dot: str
    chosen: str
    up: str
    down: str


FINE = Glyphs(
    plain=False,
    rule="─",
    wall="│",
    floor="─",
    corner="└",
    level="╌",
    dot="·",
    chosen="▐",
    up="▴",
    down="▾",
)
PLAIN = Glyphs(
    plain=True,
    rule="-",
    wall="|",
    floor="-",
    corner="+",
    level="-",
    dot="-",
    chosen=">",
    up="^",
    down="v",
)


def glyphs_for(plain: bool) -> Glyphs:
    """The set for a terminal."""
    return PLAIN if plain else FINE
