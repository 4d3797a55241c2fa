"""Growth of a method whose roots are costly, from a table over the complex plane.

Good enough to choose the worst of many waves; its growth is then computed from the roots.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from probes.limits.integrators import Integrator

Array = NDArray[np.float64]

_HALF = 257


class GrowthTable:
    """Bilinear interpolation of `integrator.growth` for |z| <= reach.

    The coefficients of a method are real, so the upper half plane is enough.
    """

    def __init__(self, integrator: Integrator, reach: float) -> None:
        self._scale = (_HALF - 1) / reach
        real = np.linspace(-reach, reach, 2 * _HALF - 1)
        imaginary = np.linspace(0.0, reach, _HALF)
        self._values = integrator.growth(real[:, None] + 1j * imaginary[None, :]).ravel()

    def __call__(self, z: NDArray[np.complex128]) -> Array:
        """Same shape as z. Values outside the table are those of its edge."""
        x = np.clip(z.real * self._scale + (_HALF - 1), 0.0, 2 * _HALF - 2.001)
        y = np.minimum(np.abs(z.imag) * self._scale, _HALF - 1.001)
        i, j = x.astype(np.intp), y.astype(np.intp)
        x -= i
        y -= j
        at = i * _HALF + j
        low = (1.0 - y) * self._values[at] + y * self._values[at + 1]
        high = (1.0 - y) * self._values[at + _HALF] + y * self._values[at + _HALF + 1]
        return np.asarray((1.0 - x) * low + x * high)
