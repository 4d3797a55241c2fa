"""Symbol, assembled matrix and actual stepping of the same scheme say the same."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

from probes.limits.grids import Box
from probes.limits.integrators import (
    CATALOGUE,
    Integrator,
    filtered_leapfrog,
    runge_kutta_chebyshev,
)
from probes.limits.matrix import step_of
from probes.limits.scheme import Part, Scheme
from probes.limits.stencils import FIRST, SECOND
from probes.limits.stepping import dense
from probes.limits.terms import Advection, Bending, Diffusion, Reaction, Stencil, Term, Waves
from probes.limits.vonneumann import Analysis
from tests.probes.limits.made import ROUND

METHODS: list[Integrator] = [
    *(m for m in CATALOGUE.values() if m.time_order == 1),
    filtered_leapfrog(0.1),
    runge_kutta_chebyshev(4, 2, 0.15),
]
VERLET = CATALOGUE["verlet"]


def grid_waves(shape: tuple[int, ...]) -> np.ndarray:
    """The waves a periodic grid holds: (axes, waves)."""
    lines = [2.0 * np.pi * np.fft.fftfreq(n) for n in shape]
    return np.array([t.ravel() for t in np.meshgrid(*lines, indexing="ij")])


@st.composite
def schemes(draw: st.DrawFn) -> tuple[Scheme, tuple[int, ...], float]:
    """One to three terms in one or two dimensions, with an odd number of cells per axis (on even
    ones a spectral derivative has a wave of its own)."""
    axes = draw(st.integers(1, 2))
    number = st.floats(-2.0, 2.0).filter(lambda x: abs(x) > 0.05)
    positive = st.floats(0.05, 2.0)
    size = st.integers(3, 6).map(lambda n: 2 * n + 1)
    spacing = draw(st.tuples(*[st.floats(0.2, 2.0)] * axes))
    shape = draw(st.tuples(*[size] * axes))
    choices: list[st.SearchStrategy[Term]] = [
        st.builds(
            Advection,
            st.tuples(*[number] * axes),
            st.sampled_from([s for s in FIRST if max(shape) > 7 or s != "weno5"]),
        ),
        st.builds(Diffusion, st.tuples(*[positive] * axes), st.sampled_from(list(SECOND))),
        st.builds(Reaction, number),
        st.builds(Bending, positive),
        st.builds(
            Stencil,
            st.just(tuple((k,) * axes for k in (-1, 0, 2))),
            st.tuples(number, number, number),
        ),
    ]
    wave = draw(st.booleans())
    if wave:
        forms = st.sampled_from(["staggered", "second-order", "collocated"])
        terms = [draw(st.builds(Waves, positive, forms))]
        terms += [t for t in (draw(choices[1]),) if draw(st.booleans())]
        method = draw(st.sampled_from(METHODS if len(terms) > 1 else [*METHODS, VERLET]))
    else:
        terms = [draw(c) for c in draw(st.lists(st.sampled_from(choices), min_size=1, max_size=3))]
        method = draw(st.sampled_from(METHODS))
    scheme = Scheme((Part(method, tuple(terms)),), spacing)
    fastest = _rate(scheme, shape)
    dt = draw(st.floats(0.2, 2.5)) / fastest
    return scheme, shape, dt


def _rate(scheme: Scheme, shape: tuple[int, ...]) -> float:
    """About the largest |lambda|: forward Euler at a huge step multiplies by |lambda| dt."""
    plain = Scheme((Part(CATALOGUE["euler"], scheme.terms),), scheme.spacing)
    value = math.exp(float(Analysis(plain).at(grid_waves(shape), 1e6).max())) / 1e6
    assume(value > 1e-3)
    return value


SLOW = settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])


@SLOW
@given(schemes())
def test_symbol_and_matrix_have_the_same_factor(
    case: tuple[Scheme, tuple[int, ...], float],
) -> None:
    """At the periodic grid's own waves the largest factor is the largest eigenvalue modulus of the
    assembled matrix (NumPy's dense eigenvalues), to 1e-10, or 1e-6 where roots nearly meet."""
    scheme, shape, dt = case
    symbol = math.exp(float(Analysis(scheme).at(grid_waves(shape), dt).max()))
    step, _ = step_of(scheme, Box(shape, (ROUND,) * len(shape)), dt)
    values = np.sort(np.abs(np.linalg.eigvals(dense(step))))
    doubt = 1e-10 if scheme.parts[0].integrator.levels == 1 and not _waves(scheme) else 1e-6
    assert symbol == pytest.approx(float(values[-1]), rel=doubt)


def _waves(scheme: Scheme) -> bool:
    return any(isinstance(t, Waves) for t in scheme.terms)


@SLOW
@given(schemes())
def test_stepping_grows_by_the_factor(case: tuple[Scheme, tuple[int, ...], float]) -> None:
    """Actually stepped from the worst wave, an error grows as the symbol says: ln G to 1e-3, or to
    2e-3 where several roots beat against each other at first."""
    scheme, shape, dt = case
    waves = grid_waves(shape)
    logarithms = Analysis(scheme).at(waves, dt)
    worst = int(np.argmax(logarithms))
    step, _ = step_of(scheme, Box(shape, (ROUND,) * len(shape)), dt)
    cells = np.indices(shape).reshape(len(shape), -1)
    wave = np.exp(1j * waves[:, worst] @ cells)
    # Fields and time levels start with different amplitudes, so that every root takes part.
    amplitudes = 1.0 + 0.37 * np.arange(step.size // wave.size) ** 1.5
    state = np.concatenate([a * wave for a in amplitudes])
    steps, total, half = 2000, 0.0, 0.0
    for k in range(steps):
        state = step.forward(state)
        size = float(np.linalg.norm(state))
        if size < 1e-200:  # a factor of zero: the wave is gone at once
            assert logarithms[worst] < -20.0
            return
        total += math.log(size)
        half = total if k == steps // 2 - 1 else half
        state /= size
    several = step.size > wave.size
    got = (total - half) / (steps // 2)
    assert got == pytest.approx(logarithms[worst], rel=1e-3, abs=2e-3 if several else 1e-9)


def test_splitting_agrees_with_its_matrix() -> None:
    """RK3 advection, then Euler diffusion, then exact halves of it: eigenvalues of the product."""
    scheme = Scheme(
        (
            Part(CATALOGUE["rk3"], (Advection((1.0, -0.4), "upwind3"),)),
            Part(CATALOGUE["euler"], (Diffusion((0.2, 0.1)),)),
        ),
        (0.5, 0.7),
    )
    shape = (9, 11)
    step, _ = step_of(scheme, Box(shape, (ROUND, ROUND)), 0.6)
    want = np.abs(np.linalg.eigvals(dense(step))).max()
    got = math.exp(float(Analysis(scheme).at(grid_waves(shape), 0.6).max()))
    assert got == pytest.approx(float(want), rel=1e-10)


def test_lax_wendroff_agrees_with_its_matrix() -> None:
    """The step in two dimensions, cross terms included."""
    scheme = Scheme(
        (Part(CATALOGUE["euler"], (Advection((1.0, -0.4), "lax-wendroff"),)),), (0.5, 0.7)
    )
    shape = (9, 11)
    for dt in (0.2, 0.45):
        step, _ = step_of(scheme, Box(shape, (ROUND, ROUND)), dt)
        want = np.abs(np.linalg.eigvals(dense(step))).max()
        got = math.exp(float(Analysis(scheme).at(grid_waves(shape), dt).max()))
        assert got == pytest.approx(float(want), rel=1e-10)
