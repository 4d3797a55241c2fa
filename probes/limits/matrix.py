"""What one assembled step does to any state: norm, radius, powers, and a verdict in words."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from probes.limits.assemble import Operator, assemble, forward_backward
from probes.limits.grids import Box
from probes.limits.normal import blocks, powers, spectrum
from probes.limits.norms import kreiss, numerical_radius, two_norm
from probes.limits.powers import Transient, transient
from probes.limits.radius import Radius, spectral_radius
from probes.limits.records import Found
from probes.limits.scheme import Scheme
from probes.limits.stepping import ForwardBackward, SchemeStep, Step, dense

Word = Literal["contractive", "transient", "marginal", "unstable in practice", "unstable"]

TRANSIENT_MAX = 1e3
# Within this of one a norm or a radius is one: double roots are known to half the digits only.
_ONE = 1e-7
_SMALL = 300


@dataclass(frozen=True)
class MatrixAnswer:
    """size: unknowns of the state. weight: what the norm measures. allowed: factor of the
    equation's own growth. drift: modes that stay or drift by themselves, "" if there are none.
    """

    size: int
    weight: str
    norm: Found
    radius: Radius
    numerical_radius: Found
    transient: Transient
    kreiss: Found
    allowed: float
    drift: str
    word: Word
    why: str

    @property
    def stable(self) -> bool:
        return self.word in ("contractive", "transient")


def step_of(scheme: Scheme, box: Box, dt: float) -> tuple[Step, str]:
    """The assembled step and what its scaled state measures."""
    operators = assemble(scheme, box)
    return operator_step(operators, dt, box.size if forward_backward(scheme) else 0)


def operator_step(operators: Sequence[Operator], dt: float, pressure: int = 0) -> tuple[Step, str]:
    """pressure: number of pressure unknowns of a staggered leapfrog, else 0."""
    told = operators[0].told
    if pressure:
        return ForwardBackward(operators[0], pressure, dt), told
    step = SchemeStep(operators, dt)
    return step, told + (f", over {step.levels} time levels" if step.levels > 1 else "")


def analyse(
    step: Step,
    weight: str,
    steps: int,
    transient_max: float = TRANSIENT_MAX,
    allowed: float = 1.0,
) -> MatrixAnswer:
    """Norms, radius and powers of a step.

    steps: how far powers are followed. transient_max: growth beyond which a step is unstable in
    practice. allowed: factor per step that the equation itself justifies.
    """
    if isinstance(step, SchemeStep) and step.normal is not None:
        norm, radius, growth, drift = _normal(step, steps)
    else:
        norm, radius, drift = two_norm(step), spectral_radius(step), ""
        growth = _growth(step, norm, steps)
    if step.size <= _SMALL:
        matrix = dense(step)
        reach, constant = numerical_radius(matrix), kreiss(matrix)
    else:
        reach, constant = (
            _bounded(norm, radius),
            Found.none(f"computed up to {_SMALL} unknowns only"),
        )
    word, why = _verdict(norm, radius, growth, transient_max, allowed, bool(drift))
    return MatrixAnswer(
        step.size, weight, norm, radius, reach, growth, constant, allowed, drift, word, why
    )


def _normal(step: SchemeStep, steps: int) -> tuple[Found, Radius, Transient, str]:
    assert step.normal is not None  # the caller looked
    matrix, sign = step.normal
    integrator = step.integrator
    found = spectrum(matrix, sign)
    z, edge, drift = found.z, found.edge, ""
    if integrator.time_order == 2:
        still = np.abs(z) <= 1e-12 * np.abs(z).max(initial=0.0)
        if still.any():
            drift = "the uniform state drifts at a constant rate, as the equation has it"
            z = z[~still]
            edge = edge[np.abs(edge) > 0.0]
    inner, outer = blocks(integrator, z), blocks(integrator, np.append(z, edge))
    size = np.linalg.norm(inner, 2, axis=(1, 2))
    top = float(np.linalg.norm(outer, 2, axis=(1, 2)).max())
    norm = Found(float(size.max()), float(size.max()), max(top, float(size.max())))
    growth = integrator.growth(z)
    highest = float(np.exp(integrator.growth(np.append(z, edge)).max()))
    value = float(np.exp(growth.max()))
    how = "all eigenvalues" if found.all else "outermost eigenvalues"
    kind = "symmetric" if sign > 0 else "antisymmetric"
    radius = Radius(Found(value, value, max(value, highest)), 1.0, None, f"{how}, {kind} matrix")
    if integrator.levels == 1:
        largest, at = powers(inner, steps)
    else:
        # The worst powers are where roots meet; a few hundred values show them.
        some = np.unique(np.linspace(0, z.size - 1, 400).astype(int))
        largest, at = powers(inner[some], steps)
    rising = at >= steps - 1 and at > 0
    return (
        norm,
        radius,
        Transient(Found(largest, largest, None), at, steps, rising, math.log(largest)),
        drift,
    )


def _growth(step: Step, norm: Found, steps: int) -> Transient:
    if norm.value is not None and (norm.high or norm.value) <= 1.0 + 1e-12:
        one = Found.exactly(1.0)
        return Transient(one, 0, steps, False, 0.0)
    return transient(step, steps)


def _bounded(norm: Found, radius: Radius) -> Found:
    """The numerical radius lies between the larger of radius and half the norm, and the norm."""
    if norm.value is None:
        return Found.none(f"computed up to {_SMALL} unknowns only")
    low = max(0.5 * norm.value, radius.value.value or 0.0)
    return Found(None, low, norm.high, f"computed up to {_SMALL} unknowns only")


def _verdict(
    norm: Found,
    radius: Radius,
    growth: Transient,
    transient_max: float,
    allowed: float,
    drift: bool,
) -> tuple[Word, str]:
    factor = radius.value.value
    doubt = _ONE if factor is None else max(_ONE, (radius.value.high or factor) - factor)
    if factor is not None and factor > allowed * (1.0 + doubt):
        return "unstable", f"errors grow by a factor of {factor:.6g} per step"
    if norm.high is not None and norm.high <= 1.0 + 1e-9:
        return "contractive", "no state ever grows"
    told = _size(growth.logarithm)
    justified = growth.logarithm - growth.at * math.log(allowed)
    marginal = factor is not None and factor > allowed * (1.0 - doubt)
    if growth.rising and marginal and not drift and justified > math.log(2.0):
        return "marginal", f"errors still grow after {growth.at} steps, to {told} times their size"
    if justified > math.log(transient_max):
        return (
            "unstable in practice",
            f"errors grow to {told} times their size within {growth.at} steps before they decay, "
            f"if they do: more than {transient_max:g}",
        )
    if growth.rising and factor is None:
        return "marginal", f"errors still grow after {growth.at} steps, to {told} times their size"
    if growth.logarithm <= 1e-9:
        return "transient", f"no growth was found within {growth.steps} steps"
    return "transient", f"errors grow to at most {told} times their size, after {growth.at} step(s)"


def _size(logarithm: float) -> str:
    if logarithm < 690.0:
        return f"{math.exp(logarithm):.3g}"
    return f"1e{logarithm / math.log(10.0):.0f}"
