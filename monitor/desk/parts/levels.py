"""Levels of ripple, bulk and field in decades over the run."""

from __future__ import annotations

import math

import numpy as np

from monitor.desk.parts.curves import Curve, CurvePart
from monitor.desk.parts.part import Scene
from monitor.desk.plotting import Array, Axis, decade_axis
from monitor.desk.story import Stretch

_DECADE = math.log(10.0)
_DOUBLE_TOP = 709.78


class LevelsPart(CurvePart):
    key = "l"
    name = "levels"

    def curves(self, scene: Scene, stretch: Stretch) -> list[Curve]:
        series, name = stretch.series, scene.field
        return [
            Curve(series.floor(name) / _DECADE, "dim", ".", dotted=True),
            Curve(series.vary(name) / _DECADE, "size", "="),
            Curve(series.bulk(name) / _DECADE, "bulk", "o", dotted=True),
            Curve(series.ripple(name) / _DECADE, "ripple", "*"),
        ]

    def facts(self, scene: Scene, stretch: Stretch, curves: list[Curve]) -> list[tuple[str, str]]:
        return [
            (f"of {scene.which_field}", ""),
            ("ripple", "ripple"),
            ("bulk", "bulk"),
            ("field", "size"),
            ("rounding", "dim"),
            (f"overflow at 1e{_top(scene, stretch):.0f}", "dim"),
        ]

    def levels(self, scene: Scene, stretch: Stretch) -> list[tuple[float, str]]:
        return [(_top(scene, stretch), "runaway")]

    def label(self, tick: float, step: float) -> str:
        return f"1e{tick:.0f}"

    def y_axis(self, before: Axis | None, spans: list[tuple[Array, Array]], rows: int) -> Axis:
        lo = min(float(np.nanmin(low)) for low, _ in spans)
        hi = max(float(np.nanmax(high)) for _, high in spans)
        return decade_axis(before, lo, hi, max(2, rows // 2))


def _top(scene: Scene, stretch: Stretch) -> float:
    """Decimal exponent of the largest number that the storage holds."""
    return stretch.series.top.get(scene.field, _DOUBLE_TOP) / _DECADE
