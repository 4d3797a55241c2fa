"""Growth factor per step of ripple, bulk and the longest-lived mode over the run."""

from __future__ import annotations

import numpy as np

from monitor.desk.parts.curves import Curve, CurvePart
from monitor.desk.parts.part import Scene
from monitor.desk.plotting import Array, Axis, decimals, stepped_axis
from monitor.desk.story import Stretch
from monitor.wording import factor_text

# A plot never shows less than this, or rounding noise would look like an event.
_LEAST_SPAN = 0.002
_LARGEST = 1e6


class GrowthPart(CurvePart):
    key = "g"
    name = "growth"
    least = 4

    def curves(self, scene: Scene, stretch: Stretch) -> list[Curve]:
        bulk = stretch.series.factors(scene.field, ripple=False)
        ripple = stretch.series.factors(scene.field, ripple=True)
        mode = stretch.series.mode(scene.field)
        return [
            Curve(bulk, "bulk", "o", dotted=True),
            Curve(ripple, "ripple", "*"),
            Curve(mode, "mode", "x"),
        ]

    def facts(self, scene: Scene, stretch: Stretch, curves: list[Curve]) -> list[tuple[str, str]]:
        bulk, ripple, mode = curves
        out = [
            (f"of {scene.which_field} per {scene.story.per}", ""),
            (f"ripple {_latest(ripple.values)}", "ripple"),
            (f"bulk {_latest(bulk.values)}", "bulk"),
        ]
        if np.isfinite(mode.values[-1]):
            out.append((f"mode {_latest(mode.values)}", "mode"))
        return out

    def levels(self, scene: Scene, stretch: Stretch) -> list[tuple[float, str]]:
        return [(1.0, "level")]

    def label(self, tick: float, step: float) -> str:
        return f"{tick:.{decimals(step)}f}"

    def y_axis(self, before: Axis | None, spans: list[tuple[Array, Array]], rows: int) -> Axis:
        """Holds one, the latest values and nearly all others: a single wild start must not flatten
        the rest. Columns beyond it are marked at the edge."""
        lows, highs = [1.0], [1.0]
        for low, high in spans:
            seen = np.flatnonzero(np.isfinite(low))
            if not seen.size:
                continue
            lows += [float(np.percentile(low[seen], 4)), float(low[seen[-1]])]
            highs += [float(np.percentile(high[seen], 96)), float(high[seen[-1]])]
        lo, hi = max(0.0, min(lows)), min(max(highs), _LARGEST)
        short = max(0.0, _LEAST_SPAN - (hi - lo))
        return stepped_axis(before, lo - short / 2.0, hi + short / 2.0, max(2, rows // 3))


def _latest(factors: Array) -> str:
    return factor_text(round(float(factors[-1]), 5)) if np.isfinite(factors[-1]) else "not seen"
