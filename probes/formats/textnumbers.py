"""Numbers as programs print them, Fortran's ways included. Pure."""

from __future__ import annotations

import math
import re
from typing import NamedTuple

# Mantissa with its decimals, then an exponent with or without its letter: Fortran drops the letter
# of an exponent of three digits, "1.0-103" (Fortran 2018, 13.7.2.3.2 and 13.7.2.3.3; numbers of the
# sections from memory).
_NUMBER = re.compile(
    r"([+-]?)(\d*)(?:\.(\d*))?(?:[EeDdQq]\s?([+-]?\d{1,4})|([+-]\d{3}))?", re.ASCII
)
_NAN = re.compile(r"[+-]?(nan[qs]?(\(.*\))?|\d\.#(qnan|snan|ind|nan)\d*)", re.IGNORECASE)
_INFINITE = re.compile(r"([+-]?)(inf(inity)?|\d\.#inf\d*)", re.IGNORECASE)
# What does not fit its width is printed as stars (Fortran 2018, 13.7.2.1).
_STARS = re.compile(r"[+-]?\*+\.?\**")
_EPS = 2.0**-52


class Printed(NamedTuple):
    """value: as printed, NaN for stars. unit: distance of neighbouring numbers in print, at least
    that of double precision; 0 where the value is not finite."""

    value: float
    unit: float


def printed(token: str) -> Printed | None:
    """The number that `token` shows, None where it is none.

    Understands 1.0D-03, 1.0Q+00, 1.0-103, .5, 5., NaN, -nan(ind), 1.#QNAN, Infinity and stars.
    """
    found = _NUMBER.fullmatch(token)
    if found is not None:
        return _finite(found)
    infinite = _INFINITE.fullmatch(token)
    if infinite is not None:
        return Printed(-math.inf if infinite[1] == "-" else math.inf, 0.0)
    if _NAN.fullmatch(token) or _STARS.fullmatch(token):
        return Printed(math.nan, 0.0)
    return None


def _finite(found: re.Match[str]) -> Printed | None:
    sign, whole, decimals, lettered, bare = found.groups()
    if not whole and not decimals:
        return None
    if bare is not None and decimals is None:
        return None  # "12-5" is no number of any format
    exponent = int(lettered or bare or 0)
    value = float(f"{sign}{whole or 0}.{decimals or 0}e{exponent}")
    if math.isinf(value):
        return Printed(value, 0.0)  # beyond double precision
    place = exponent - len(decimals or "")
    unit = 10.0**place if place > -300 else 0.0
    return Printed(value, max(unit, _EPS * abs(value), 5e-324))
