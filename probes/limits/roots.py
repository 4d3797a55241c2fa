"""Roots of many small polynomials at once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Numbers = NDArray[np.complex128]

_TURN = np.exp(2j * np.pi / 3.0)


def cubic(a: Numbers, b: Numbers, c: Numbers) -> Numbers:
    """The roots of x**3 + a x**2 + b x + c, arrays of one shape: (3, *shape).

    Cardano's formula with the sign that does not cancel (Press and others 2007, section 5.6), then
    two Newton steps. Close to a double root half the digits are lost, as with any method.
    """
    q = (a * a - 3.0 * b) / 9.0
    r = (2.0 * a * a * a - 9.0 * a * b + 27.0 * c) / 54.0
    s = np.sqrt(r * r - q * q * q)
    s = np.where((r.conj() * s).real < 0.0, -s, s)
    one = -((r + s) ** (1.0 / 3.0))
    other = np.divide(q, one, out=np.zeros_like(one), where=one != 0.0)
    turns = np.array([1.0, _TURN, _TURN.conjugate()]).reshape(3, *(1,) * np.ndim(a))
    x = turns * one + turns.conj() * other - a / 3.0
    for _ in range(2):
        value = ((x + a) * x + b) * x + c
        slope = (3.0 * x + 2.0 * a) * x + b
        x = x - np.divide(value, slope, out=np.zeros_like(x), where=slope != 0.0)
    return np.asarray(x)
