"""Plots of curves over the run's steps, painted on a sheet: frame, ticks, marks and curves."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from monitor.desk.glyphs import Glyphs
from monitor.desk.parts.part import Part, Scene
from monitor.desk.plotting import (
    Array,
    Axis,
    beyond,
    braille,
    column_spans,
    raster,
    running_axis,
    suffixed,
)
from monitor.desk.sheet import Sheet
from monitor.desk.story import Story, Stretch

# Cells left of a plot for the labels of its ticks.
GUTTER = 8
# Rows of a part that are not plot: heading, axis, labels.
_FRAME_ROWS = 3
_MOST_ZOOM = 12
# A dotted curve has dots in every so-manieth column.
_DOTTING = 4


@dataclass(frozen=True, slots=True)
class Curve:
    """Values over the steps. mark: its character where there is no braille; dotted: drawn with
    gaps, so that it can be told from a full one without colour."""

    values: Array
    style: str
    mark: str
    dotted: bool = False


@dataclass(frozen=True, slots=True)
class Mark:
    """A letter on the axis, or between two steps."""

    letter: str
    first: float
    last: float
    style: str


def marks(story: Story, stretch: Stretch) -> list[Mark]:
    """What happened where: kept pins (k), onset of the growth (o to o), alarm (A)."""
    out = [
        Mark("k", float(pin.step), float(pin.step), "good")
        for pin in story.pins.values()
        if pin.state == "kept" and pin.step is not None
    ]
    told = stretch.alarm or stretch.last
    if told is not None and told.verdict.onset is not None:
        first, last = told.verdict.onset
        out.append(Mark("o", float(first), float(last), "swelling"))
    if stretch.alarm is not None:
        alarm = stretch.alarm
        at = float(alarm.index if alarm.step is None else alarm.step)
        out.append(Mark("A", at, at, "runaway"))
    return out


class CurvePart(Part):
    """A part that plots curves over the steps of the present segment, with sticky axes.

    Up and down look closer and wider: zoom n shows the last 1/2**n of the segment.
    """

    moves = "look closer or wider"
    least = 2

    def __init__(self) -> None:
        self._zoom = 0
        self._axes: tuple[object, Axis | None, Axis | None] = (None, None, None)

    def zoom(self, by: int) -> None:
        self._zoom = min(_MOST_ZOOM, max(0, self._zoom + by))

    def move(self, by: int) -> None:
        self.zoom(-by)

    @abstractmethod
    def curves(self, scene: Scene, stretch: Stretch) -> list[Curve]:
        """What is drawn, the topmost last."""

    @abstractmethod
    def facts(self, scene: Scene, stretch: Stretch, curves: list[Curve]) -> list[tuple[str, str]]:
        """For the heading."""

    @abstractmethod
    def y_axis(self, before: Axis | None, spans: list[tuple[Array, Array]], rows: int) -> Axis:
        """An axis for what is seen of the curves (spans with a value somewhere)."""

    @abstractmethod
    def label(self, tick: float, step: float) -> str:
        """Text of a tick of the y axis."""

    @abstractmethod
    def levels(self, scene: Scene, stretch: Stretch) -> list[tuple[float, str]]:
        """Values of horizontal lines, with their style."""

    def draw(self, scene: Scene, width: int, height: int, *, chosen: bool = False) -> Sheet:
        stretch, glyphs = scene.story.now, scene.glyphs
        if stretch is None or len(stretch.series) < self.least or not scene.field:
            return self._nothing(scene, width, height, chosen, "too few snapshots to plot yet")
        curves = self.curves(scene, stretch)
        cells, rows = max(1, width - GUTTER), max(1, height - _FRAME_ROWS)
        key = (stretch.number, scene.field, self._zoom, width, height)
        x_before, y_before = self._axes[1:] if key == self._axes[0] else (None, None)
        x = stretch.series.x
        first = float(x[-1]) - (float(x[-1]) - float(x[0])) / 2.0**self._zoom
        x_axis = running_axis(x_before, first, float(x[-1]), max(1, cells // 12))
        columns = cells * (1 if glyphs.plain else 2)
        spans = [column_spans(x, curve.values, x_axis, columns) for curve in curves]
        seen = [span for span in spans if np.isfinite(span[0]).any()]
        if not seen:
            return self._nothing(scene, width, height, chosen, "the field does not change")
        y_axis = self.y_axis(y_before, seen, rows)
        self._axes = (key, x_axis, y_axis)
        facts = self.facts(scene, stretch, curves)
        if self._zoom:
            facts.append((f"last 1/{2**self._zoom}", "dim"))
        sheet = self.blank(scene, width, height, chosen, facts)
        frame = Frame(sheet, glyphs, x_axis, y_axis, cells, rows)
        frame.paint_axis(self.label)
        for value, style in self.levels(scene, stretch):
            frame.paint_level(value, style)
        for curve, (low, high) in zip(curves, spans, strict=True):
            frame.paint_curve(curve, low, high)
        frame.paint_foot(marks(scene.story, stretch))
        return sheet

    def _nothing(self, scene: Scene, width: int, height: int, chosen: bool, why: str) -> Sheet:
        sheet = self.blank(scene, width, height, chosen)
        sheet.write(2, min(2, height - 1), why, "dim")
        return sheet


@dataclass(frozen=True, slots=True)
class Frame:
    """The place of a plot on its sheet, below the heading, `cells` wide and `rows` high."""

    sheet: Sheet
    glyphs: Glyphs
    x: Axis
    y: Axis
    cells: int
    rows: int

    def _row(self, value: float) -> int:
        """Row on the sheet of a value; outside the plot where it is outside the axis."""
        position = self.y.position(value, self.rows)
        return self.rows - (position - 1 if value == self.y.hi else position)

    def paint_axis(self, label: Callable[[float, float], str]) -> None:
        for row in range(self.rows):
            self.sheet.put(GUTTER - 1, 1 + row, self.glyphs.wall, "axis")
        step = self.y.ticks[1] - self.y.ticks[0] if len(self.y.ticks) > 1 else self.y.span
        for tick in self.y.ticks:
            row = min(self.rows, max(1, self._row(tick)))
            text = label(tick, step)[: GUTTER - 1]
            self.sheet.write(GUTTER - 1 - len(text), row, text, "axis", len(text))

    def paint_level(self, value: float, style: str) -> None:
        if self.y.holds(value, value):
            row = self._row(value)
            for cell in range(self.cells):
                self.sheet.put(GUTTER + cell, row, self.glyphs.level, style)

    def paint_curve(self, curve: Curve, low: Array, high: Array) -> None:
        plain = self.glyphs.plain
        dots = raster(low, high, self.y, self.rows if plain else 4 * self.rows)
        if plain:
            text = ["".join(curve.mark if dot else " " for dot in row) for row in dots]
        else:
            if curve.dotted:
                dots = dots & (np.arange(dots.shape[1]) % _DOTTING == 0)[None, :]
            text = braille(dots)
        for row, line in enumerate(text):
            for cell, character in enumerate(line):
                if character != " ":
                    self.sheet.put(GUTTER + cell, 1 + row, character, curve.style)
        above, below = beyond(low, high, self.y, 1 if plain else 2)
        for cell in above:
            self.sheet.put(GUTTER + cell, 1, self.glyphs.up, curve.style)
        for cell in below:
            self.sheet.put(GUTTER + cell, self.rows, self.glyphs.down, curve.style)

    def paint_foot(self, marks: Sequence[Mark]) -> None:
        sheet, y = self.sheet, self.rows + 1
        sheet.put(GUTTER - 1, y, self.glyphs.corner, "axis")
        sheet.fill(y, self.glyphs.floor, "axis", GUTTER)
        ticks, free = self.x.ticks, GUTTER
        step = ticks[1] - ticks[0] if len(ticks) > 1 else 1.0
        for tick in ticks:
            text = suffixed(tick, step)
            start = GUTTER + self.x.position(tick, self.cells) - len(text) // 2
            if start >= free and start + len(text) <= sheet.width:
                free = sheet.write(start, y + 1, text, "axis") + 1
        for mark in marks:
            first, last = (self.x.position(v, self.cells) for v in (mark.first, mark.last))
            for cell in range(max(0, first), min(self.cells - 1, last) + 1):
                letter = mark.letter if cell in (first, last) else "="
                sheet.put(GUTTER + cell, y, letter, mark.style)
