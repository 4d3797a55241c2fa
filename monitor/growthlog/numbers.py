"""How numbers stand in the growth log: spelled where they are not finite, rounded elsewhere.

* Four significant digits, unless one of the following applies.
* Natural logarithms of levels carry three decimals, so that the level itself is exact to 0.1 %
  whatever its size.
* A growth factor carries four significant digits of its distance from one (seven decimals at
  most): 1.0204 as 1.020 would be wrong by two per cent in its logarithm.
* Extremes of a field with bounds and values of histories carry eight digits, so that their distance
  to a bound is known.
* Wavelengths, shares and what only grades a mode or a line carry three digits: nothing hangs on the
  fourth, and there are many of them.
* Steps, times, counts and sequence numbers are exact; the time per step carries six digits and
  wall-clock times whole milliseconds.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Literal, TypeVar, get_args

import msgspec

from monitor.growthlog.plain import valid_text
from monitor.growthlog.records import (
    Channel,
    Estimate,
    Evidence,
    History,
    Line,
    Mode,
    Num,
    Verdict,
    Worst,
)

T = TypeVar("T", bound=msgspec.Struct)
_Round = Callable[[float], float]


def spell(value: float) -> Num:
    """The value itself if it is finite, else "nan", "inf" or "-inf"."""
    if math.isfinite(value):
        return value
    if math.isnan(value):
        return "nan"
    return "inf" if value > 0 else "-inf"


def number(value: Num) -> float:
    """The float that `spell` was given."""
    return float(value)


def significant(value: float, digits: int = 4) -> float:
    """`value`, finite, rounded to so many significant digits (the nearest double to them).

    The largest numbers are rounded towards zero where they would overflow.
    """
    near = float(f"{value:.{digits}g}")
    return near if math.isfinite(near) else math.copysign(1.797e308, value)


def factor(value: float) -> float:
    """A finite growth factor; from 0.5 to 2 its distance from one carries the four digits."""
    if not 0.5 <= value < 2.0:
        return significant(value)
    return round(1.0 + significant(value - 1.0), 7)


def _level(value: float) -> float:
    return round(value, 3)


def _coarse(value: float) -> float:
    return significant(value, 3)


def _dt(value: float) -> float:
    return significant(value, 6)


def _extreme(value: float) -> float:
    return significant(value, 8)


# Rounding by place, where it is not four significant digits.
_RULES: dict[tuple[type[msgspec.Struct], str], _Round] = {
    **{(Channel, name): _level for name in ("bulk", "ripple", "own", "floor", "vary", "top")},
    **{(Mode, name): factor for name in ("factor", "low", "high")},
    **{(History, name): _level for name in ("level", "floor")},
    **{(History, name): _extreme for name in ("value", "lo", "hi")},
    **{(History, name): float for name in ("at", "time")},
    (Mode, "amp"): _level,
    **{(Mode, name): _coarse for name in ("residual", "share", "cells", "axes")},
    **{(Mode, name): _coarse for name in ("match", "gain", "foretold", "grown")},
    **{(kind, "cells"): _coarse for kind in (Channel, Line, Verdict)},
    (Line, "rms"): _coarse,
    (Worst, "share"): _coarse,
    (Line, "over"): _level,
    (Worst, "factor"): factor,
    (Evidence, "dt"): _dt,
    (Verdict, "factor"): factor,
}

# For channels with bounds, instead.
_BOUNDED: dict[str, _Round] = {"lo": _extreme, "hi": _extreme}

# What to do with a value that is not finite, by the type of its place.
_Otherwise = Literal["spell", "leave out", "refuse"]
_Place = tuple[str, _Round, _Otherwise]
_places_of: dict[type[msgspec.Struct], tuple[_Place, ...]] = {}


class _NotFinite(Exception):
    """A number that is not finite stands where the schema has no spelling for it."""


def rounded(part: T) -> T:
    """A copy of an evidence, a verdict, a history or a part of one, with numbers as the log has
    them.

    Non-finite values are spelled where the schema allows it and left out where it allows None. Of
    a mode, line, worst tile or edge with any other non-finite number nothing is kept. Text that is
    no valid Unicode (names of files need not be) gets escapes. Rounding twice changes nothing more.
    """
    return _rounded(part, None)


def _rounded(part: T, how: _Round | None) -> T:
    kind = type(part)
    if kind not in _places_of:
        _places_of[kind] = tuple(_place(kind, info) for info in msgspec.structs.fields(kind))
    finer = _BOUNDED if isinstance(part, Channel) and part.bounded else {}
    return kind(
        **{
            name: _value(getattr(part, name), how or finer.get(name, rule), otherwise)
            for name, rule, otherwise in _places_of[kind]
        }
    )


def _place(kind: type[msgspec.Struct], info: msgspec.structs.FieldInfo) -> _Place:
    choices = get_args(info.type)
    otherwise: _Otherwise = "refuse"
    if any("nan" in get_args(choice) for choice in (info.type, *choices)):
        otherwise = "spell"
    elif type(None) in choices:
        otherwise = "leave out"
    return info.name, _RULES.get((kind, info.name), significant), otherwise


def _value(value: Any, rule: _Round, otherwise: _Otherwise) -> Any:
    if isinstance(value, float):
        if value == 0.0 and type(value) is float:
            return value  # a default is left out of the file only as the very same object
        if math.isfinite(value):
            return rule(float(value))
        if otherwise == "refuse":
            raise _NotFinite
        return spell(value) if otherwise == "spell" else None
    if isinstance(value, str):
        return valid_text(value)
    if isinstance(value, msgspec.Struct):
        try:
            # The numbers of an estimate are rounded like what they estimate.
            return _rounded(value, rule if isinstance(value, Estimate) else None)
        except _NotFinite:
            if otherwise == "leave out":
                return None
            raise
    if isinstance(value, tuple):
        return _tuple(value, rule)
    if isinstance(value, dict):
        return {valid_text(k): rule(float(v)) for k, v in value.items() if math.isfinite(v)}
    return value


def _tuple(values: tuple[Any, ...], rule: _Round) -> tuple[Any, ...]:
    kept = []
    for value in values:
        if isinstance(value, float) and not math.isfinite(value):
            value = 0.0  # one axis of several: its place must stay, and zero means "not seen"
        try:
            kept.append(_value(value, rule, "refuse"))
        except _NotFinite:
            continue
    return tuple(kept)
