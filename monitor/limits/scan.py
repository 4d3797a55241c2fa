"""The factor against the step: numbers, a drawing of characters, and an SVG picture."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from monitor.wording import number
from probes.limits.cells import CellAnalysis, CellLimit
from probes.limits.scheme import Scheme
from probes.limits.vonneumann import Analysis

POINTS = 61
_ROWS = 14
_WIDE, _HIGH, _LEFT, _BELOW = 640, 360, 70, 50


@dataclass(frozen=True)
class Sweep:
    """steps, factors: of equal length. limit: the largest stable step, None if unknown."""

    steps: tuple[float, ...]
    factors: tuple[float, ...]
    limit: float | None


def sweep(scheme: Scheme, limit: CellLimit, step: float | None) -> Sweep:
    """Factors from a tenth to one and a half of the largest of limit and step, in the cell that
    sets the limit."""
    cell = int(np.ravel_multi_index(limit.cell, scheme.shape)) if scheme.shape else 0
    analysis = Analysis(scheme, cell)
    end = 1.5 * max(limit.limit.dt.value or 0.0, step or 0.0) or 1.0
    steps = np.linspace(end / POINTS, end, POINTS)
    factors = [analysis.growth(float(dt)).factor for dt in steps]
    return Sweep(tuple(float(s) for s in steps), tuple(factors), limit.limit.dt.value)


def limit_of(scheme: Scheme) -> CellLimit:
    return CellAnalysis(scheme).limit()


def drawing(found: Sweep, ascii_only: bool = False) -> str:
    """Lines of characters: ln of the factor upwards, the step to the right, a bar at the limit."""
    levels = [math.log(f) for f in found.factors]
    low, high = min(0.0, *levels), max(0.0, *levels)
    span = (high - low) or 1.0
    dot, bar = ("*", "|") if ascii_only else ("●", "│")
    rows = [[" "] * POINTS for _ in range(_ROWS)]
    zero = round((high - 0.0) / span * (_ROWS - 1))
    rows[zero] = ["-"] * POINTS
    if found.limit:
        at = round(found.limit / found.steps[-1] * POINTS) - 1
        if 0 <= at < POINTS:
            for row in rows:
                row[at] = bar
    for column, level in enumerate(levels):
        rows[round((high - level) / span * (_ROWS - 1))][column] = dot
    out = []
    for n, row in enumerate(rows):
        label = {0: number(math.exp(high), 4), zero: "1", _ROWS - 1: number(math.exp(low), 4)}
        out.append(f"{label.get(n, ''):>10} {''.join(row).rstrip()}")
    first, last = number(found.steps[0], 3), number(found.steps[-1], 3)
    out.append(f"{'':11}{first}{last:>{POINTS - len(first)}}")
    out.append(f"{'factor':>10} per step against the step; {bar} the largest stable step")
    return "\n".join(out)


def svg(found: Sweep, title: str) -> str:
    """A picture of the same, without any library."""
    levels = [math.log(f) for f in found.factors]
    low, high = min(0.0, *levels), max(0.0, *levels)
    span = (high - low) or 1.0

    def x(step: float) -> float:
        return _LEFT + step / found.steps[-1] * (_WIDE - _LEFT - 20)

    def y(level: float) -> float:
        return 40 + (high - level) / span * (_HIGH - 40 - _BELOW)

    points = " ".join(f"{x(s):.1f},{y(v):.1f}" for s, v in zip(found.steps, levels, strict=True))
    safe = title.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {_WIDE} {_HIGH}" '
        'font-family="sans-serif" font-size="13">',
        f'<rect width="{_WIDE}" height="{_HIGH}" fill="white"/>',
        f'<text x="{_LEFT}" y="22">{safe}</text>',
        f'<line x1="{_LEFT}" x2="{_WIDE - 20}" y1="{y(0.0):.1f}" y2="{y(0.0):.1f}" stroke="#888"/>',
    ]
    if found.limit:
        at = x(found.limit)
        parts.append(
            f'<line x1="{at:.1f}" x2="{at:.1f}" y1="40" y2="{_HIGH - _BELOW}" '
            'stroke="#b00" stroke-dasharray="4 3"/>'
            f'<text x="{at + 4:.1f}" y="52" fill="#b00">{number(found.limit, 5)}</text>'
        )
    parts.append(f'<polyline points="{points}" fill="none" stroke="#05a" stroke-width="2"/>')
    parts += [
        f'<text x="{_LEFT - 8}" y="{y(level) + 4:.1f}" text-anchor="end">'
        f"{number(math.exp(level), 4)}</text>"
        for level in sorted({low, 0.0, high})
    ]
    parts += [
        f'<text x="{x(step):.1f}" y="{_HIGH - _BELOW + 18}" text-anchor="middle">'
        f"{number(step, 3)}</text>"
        for step in (0.0, found.steps[-1])
    ]
    parts.append(
        f'<text x="{(_LEFT + _WIDE) / 2:.0f}" y="{_HIGH - 12}" text-anchor="middle">'
        "time step (factor per step upwards, logarithmic)</text></svg>"
    )
    return "\n".join(parts) + "\n"
