"""What the pattern of a matrix says before any arithmetic.

Unknowns that feed each other form groups; between groups influence goes one way, so that the
eigenvalues are those of the groups alone. For advection with an inflow each cell is a group of its
own: its eigenvalues are then known exactly, where a numerical eigenvalue method fails.
"""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray
from scipy.sparse.csgraph import connected_components

Indices = NDArray[np.intp]


def groups(pattern: sp.csr_array) -> list[Indices]:
    """Strongly connected groups of unknowns, largest first."""
    count, label = connected_components(pattern, directed=True, connection="strong")
    order = np.argsort(label, kind="stable")
    sizes = np.bincount(label, minlength=count)
    parts = np.split(order, np.cumsum(sizes)[:-1])
    return sorted(parts, key=lambda part: -part.size)
