"""The answer as one JSON object."""

from __future__ import annotations

import math
from typing import Any

from monitor.limits.answer import LimitAnswer, SymbolPart
from probes.limits.matrix import MatrixAnswer
from probes.limits.records import Found, Wave


def json_object(answer: LimitAnswer) -> dict[str, Any]:
    """Plain values only; what is infinite or unknown is null."""
    wave = answer.wave
    return {
        "dt_max": answer.dt_max.value,
        "dt_max_interval": [_plain(answer.dt_max.low), _plain(answer.dt_max.high)],
        "dt_max_reason": answer.dt_max.reason,
        "step": answer.step,
        "judged_at": answer.judged_at,
        "factor": _plain(answer.factor),
        "cells_per_wavelength": None if wave is None else _plain(wave.cells),
        "cells_per_wavelength_per_axis": None if wave is None else _cells(wave),
        "numbers": [
            {"term": n.term, "name": n.name, "value": _plain(n.value), "alone": _plain(n.alone)}
            for n in answer.numbers
        ],
        "verdict": answer.verdict,
        "why": answer.why,
        "stable": answer.stable,
        "scheme": answer.title,
        "evaluations_per_step": answer.evaluations,
        "symbol": None if answer.symbol is None else _symbol(answer.symbol),
        "matrix": _matrix(answer),
        "budget": None
        if answer.budget is None
        else {
            "steps": answer.budget.steps,
            "allowed_growth": answer.budget.growth,
            "dt_max": answer.budget.dt.value,
        },
        "notes": list(answer.notes),
    }


def _symbol(symbol: SymbolPart) -> dict[str, Any]:
    spot = symbol.exceeding
    return {
        "dt_max": _found(symbol.dt),
        "first_to_grow": None if symbol.wave is None else _cells(symbol.wave),
        "cell": list(symbol.cell),
        "factor": _plain(symbol.factor),
        "allowed": _plain(symbol.allowed),
        "exceeding": None
        if spot is None
        else {
            "cells": spot.cells,
            "widths": list(spot.widths),
            "confined_factor": _plain(spot.confined),
        },
    }


def _matrix(answer: LimitAnswer) -> dict[str, Any] | None:
    m: MatrixAnswer | None = answer.matrix
    if m is None:
        return None
    return {
        "unknowns": m.size,
        "dt_max": None if answer.matrix_dt is None else _found(answer.matrix_dt),
        "verdict": m.word,
        "why": m.why,
        "weight": m.weight,
        "two_norm": _found(m.norm),
        "spectral_radius": _found(m.radius.value),
        "radius_condition": _plain(m.radius.condition),
        "radius_by": m.radius.how,
        "numerical_radius": _found(m.numerical_radius),
        "largest_power": _found(m.transient.largest),
        "largest_power_ln": _plain(m.transient.logarithm),
        "largest_power_at": m.transient.at,
        "powers_followed": m.transient.steps,
        "kreiss": _found(m.kreiss),
        "drift": m.drift,
    }


def _found(found: Found) -> dict[str, Any]:
    return {
        "value": _plain(found.value),
        "low": _plain(found.low),
        "high": _plain(found.high),
        "reason": found.reason,
    }


def _cells(wave: Wave) -> list[float | None]:
    return [_plain(c) for c in wave.cells_per_axis]


def _plain(value: float | None) -> float | None:
    return None if value is None or not math.isfinite(value) else float(value)
