"""One step of a scheme as a linear map of its whole state, never formed unless small."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Protocol

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from probes.limits.assemble import Operator
from probes.limits.integrators import Integrator

Array = NDArray[Any]


class Step(Protocol):
    """A linear map with its transpose: (size,) or (size, columns) to the same."""

    @property
    def size(self) -> int: ...

    def forward(self, state: Array) -> Array: ...

    def back(self, state: Array) -> Array: ...


class SchemeStep:
    """The step of an assembled scheme at dt, in its scaled state (see `assemble`).

    size: levels times unknowns; the newest level first.
    """

    def __init__(self, operators: Sequence[Operator], dt: float) -> None:
        self.levels = max(o.integrator.levels for o in operators)
        self.unknowns = operators[0].matrix.shape[0]
        self._parts: list[tuple[Integrator, sp.csr_array, sp.csr_array]] = []
        for o in operators:
            matrix = dt**o.integrator.time_order * o.matrix
            if o.late is not None:
                matrix = matrix + dt**2 * o.late
            scaled = sp.csr_array(sp.diags_array(o.scale) @ matrix @ sp.diags_array(1.0 / o.scale))
            self._parts.append((o.integrator, scaled, sp.csr_array(scaled.T)))

    @property
    def size(self) -> int:
        return self.levels * self.unknowns

    def forward(self, state: Array) -> Array:
        levels = state.reshape(self.levels, self.unknowns, *state.shape[1:])
        for integrator, matrix, _ in self._parts:
            levels = integrator.advance(matrix.__matmul__, levels)
        return levels.reshape(state.shape)

    def back(self, state: Array) -> Array:
        levels = state.reshape(self.levels, self.unknowns, *state.shape[1:])
        for integrator, _, transposed in reversed(self._parts):
            levels = integrator.advance_transposed(transposed.__matmul__, levels)
        return levels.reshape(state.shape)

    def pattern(self) -> sp.csr_array:
        """Which unknowns feed which, for one level."""
        total = sum((abs(matrix) for _, matrix, _ in self._parts), sp.eye_array(self.unknowns))
        return sp.csr_array(total)

    def diagonal_growth(self) -> NDArray[np.float64]:
        """ln of the factor of each unknown as if it were alone (unknowns,)."""
        total = np.zeros(self.unknowns)
        for integrator, matrix, _ in self._parts:
            total += integrator.growth(matrix.diagonal().astype(np.complex128))
        return total

    def dense(self) -> NDArray[np.float64]:
        """dt L of the only part, (unknowns, unknowns); for small ones."""
        return np.asarray(self._parts[0][1].toarray())

    @property
    def normal(self) -> tuple[sp.csr_array, int] | None:
        """dt L and +1 or -1 where the step is one method applied to a symmetric or antisymmetric
        matrix (in the scaled state), else None."""
        if len(self._parts) != 1:
            return None
        _, matrix, transposed = self._parts[0]
        largest = float(abs(matrix).max()) if matrix.nnz else 0.0
        for sign in (1, -1):
            difference = abs(matrix - sign * transposed)
            if not difference.nnz or float(difference.max()) <= 1e-12 * largest:
                return matrix, sign
        return None

    @property
    def integrator(self) -> Integrator:
        """Of the only part."""
        return self._parts[0][0]


class ForwardBackward:
    """Staggered leapfrog: first the velocities, then the pressure with the new ones.

    operator: a first-order wave system whose first `cells` unknowns are the pressure.
    """

    levels = 1

    def __init__(self, operator: Operator, cells: int, dt: float) -> None:
        scale = operator.scale
        scaled = sp.csr_array(
            dt * sp.diags_array(scale) @ operator.matrix @ sp.diags_array(1.0 / scale)
        )
        self.unknowns, self._cells = scaled.shape[0], cells
        self.integrator = operator.integrator
        self._down, self._up = scaled[:cells, cells:], scaled[cells:, :cells]
        self._down_back, self._up_back = sp.csr_array(self._down.T), sp.csr_array(self._up.T)

    @property
    def size(self) -> int:
        return int(self.unknowns)

    def forward(self, state: Array) -> Array:
        p, v = state[: self._cells], state[self._cells :]
        v = v + self._up @ p
        return np.concatenate([p + self._down @ v, v])

    def back(self, state: Array) -> Array:
        p, v = state[: self._cells], state[self._cells :]
        v = v + self._down_back @ p
        return np.concatenate([p + self._up_back @ v, v])

    def squares(self) -> sp.csr_array | None:
        """-(omega dt)**2 as a symmetric matrix over the pressure; None where it is not symmetric in
        the scaled state."""
        product = sp.csr_array(self._down @ self._up)
        difference = abs(product - product.T)
        largest = float(abs(product).max()) if product.nnz else 0.0
        if difference.nnz and float(difference.max()) > 1e-12 * largest:
            return None
        return product

    def pattern(self) -> sp.csr_array:
        down = sp.hstack([abs(self._down @ self._up), abs(self._down)])
        up = sp.hstack([abs(self._up), sp.eye_array(self._up.shape[0])])
        return sp.csr_array(sp.vstack([down, up]))


class MatrixStep:
    """A step given as its own matrix, scaled by a weight (size,) or not."""

    levels = 1

    def __init__(self, matrix: sp.csr_array, scale: Array | None = None) -> None:
        if scale is not None:
            matrix = sp.csr_array(sp.diags_array(scale) @ matrix @ sp.diags_array(1.0 / scale))
        self.matrix, self._transposed = matrix, sp.csr_array(matrix.T)

    @property
    def size(self) -> int:
        return int(self.matrix.shape[0])

    def forward(self, state: Array) -> Array:
        return np.asarray(self.matrix @ state)

    def back(self, state: Array) -> Array:
        return np.asarray(self._transposed @ state)

    def pattern(self) -> sp.csr_array:
        return sp.csr_array(abs(self.matrix))


class FunctionStep:
    """A step known by what it does only: forward, and no transpose."""

    levels = 1

    def __init__(self, size: int, forward: Callable[[Array], Array]) -> None:
        self._size, self._forward = size, forward

    @property
    def size(self) -> int:
        return self._size

    def forward(self, state: Array) -> Array:
        return self._forward(state)

    def back(self, state: Array) -> Array:
        raise NotImplementedError("a step function has no transpose")


def dense(step: Step) -> NDArray[np.float64]:
    """The step's matrix (size, size); for small ones."""
    return np.asarray(step.forward(np.eye(step.size)), dtype=np.float64)
