"""Assembled matrices against matrices and steps that were written by hand."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

from demo_runs import basin, channel, pipe, plate
from probes.errors import SettingsError
from probes.limits.assemble import assemble, forward_backward
from probes.limits.grids import Box
from probes.limits.matrix import step_of
from probes.limits.matrixlimit import largest_step
from probes.limits.scheme import Part, Scheme
from probes.limits.stepping import SchemeStep, dense
from probes.limits.terms import Advection, Diffusion, Reaction, System, Waves
from tests.probes.limits.made import CLOSED, FIXED, ROUND, line, scheme

PLATE = scheme("euler", Diffusion(plate.conductivity()), spacing=(plate.SPACING,) * 2)
CHANNEL = scheme(
    "euler",
    Advection((0.0, np.repeat(channel.stream()[:, None], channel.SHAPE[1], 1))),
    Diffusion(channel.diffusivity()),
    spacing=(channel.SPACING,) * 2,
)
BASIN = scheme(
    "verlet",
    Waves(np.sqrt(basin.GRAVITY * basin.depth()), mean="arithmetic"),
    spacing=(basin.SPACING,) * 2,
)
PIPE = scheme("verlet", Waves(np.sqrt(pipe.stiffness() / pipe.DENSITY)), spacing=(pipe.SPACING,))
DEMOS = {
    "plate": (PLATE, (FIXED, FIXED), plate),
    "channel": (CHANNEL, (CLOSED, ROUND), channel),
    "basin": (BASIN, (CLOSED, CLOSED), basin),
    "pipe": (PIPE, (CLOSED,), pipe),
}


def box_of(name: str) -> Box:
    return Box(DEMOS[name][0].shape, DEMOS[name][1])


@pytest.mark.parametrize("name", ["plate", "channel"])
def test_the_demo_solvers_right_hand_sides(name: str) -> None:
    """Our matrix is that of the demo solver, which knows nothing of us, entry by entry."""
    found, _, module = DEMOS[name]
    (operator,) = assemble(found, box_of(name))
    want = sp.csr_array(module.operator())
    assert abs(operator.matrix - want).max() <= 1e-12 * abs(want).max()


@pytest.mark.parametrize("name", DEMOS)
def test_the_limit_of_every_demo_run(name: str) -> None:
    """The step at which the demo solver's own matrix turns unstable, to 1e-6 (1 % is asked)."""
    found, _, module = DEMOS[name]
    limit = largest_step(assemble(found, box_of(name)), 0.0, forward_backward(found))
    assert limit.value == pytest.approx(module.limit_step(), rel=1e-6)


def test_the_demo_pipes_step() -> None:
    """The staggered leapfrog's step has the eigenvalues of the demo solver's step matrix."""
    dt = 1.02 * pipe.limit_step()
    step, _ = step_of(PIPE, box_of("pipe"), dt)
    want = np.abs(np.linalg.eigvals(pipe.step_matrix(1.02))).max()
    assert np.abs(np.linalg.eigvals(dense(step))).max() == pytest.approx(want, rel=1e-9)


def test_unequal_cells_conserve_and_stay_symmetric() -> None:
    """Diffusion on a stretched line: nothing is lost between closed ends, and in the scaled state
    the matrix is symmetric (finite volumes; LeVeque 2002, chapter 4)."""
    h = 1.0 + 0.5 * np.sin(np.arange(9.0))
    (operator,) = assemble(scheme("euler", Diffusion(h**2), spacing=(h,)), line(9, CLOSED))
    assert np.abs(h @ operator.matrix.toarray()).max() <= 1e-14
    step = SchemeStep([operator], 1.0)
    assert step.normal is not None
    assert step.normal[1] == 1


def test_waves_conserve_energy() -> None:
    """Staggered waves on unequal cells with unequal speed: antisymmetric in the scaled state."""
    h = 1.0 + 0.5 * np.sin(np.arange(9.0))
    c = 2.0 + np.cos(np.arange(9.0))
    for mean in ("cell", "arithmetic"):
        made = scheme("rk4", Waves(c, mean=mean), spacing=(h,))  # type: ignore[arg-type]
        step = SchemeStep(assemble(made, line(9, CLOSED)), 1.0)
        assert step.normal is not None
        assert step.normal[1] == -1


def test_a_symmetric_system_is_antisymmetric() -> None:
    """u_t + A u_x = 0 with symmetric A and central differences keeps the sum of squares."""
    term = System((np.array([[1.0, 0.5], [0.5, -2.0]]),), np.zeros((2, 2)))
    step = SchemeStep(assemble(scheme("rk4", term), line(11)), 1.0)
    assert step.normal is not None
    assert step.normal[1] == -1


@pytest.mark.parametrize(
    ("make", "said"),
    [
        (lambda: assemble(scheme("euler", Diffusion(1.0)), Box((4, 4), (FIXED, FIXED))), "cells"),
        (lambda: assemble(scheme("euler", Diffusion(np.ones(5))), line(4)), "do not fit"),
        (
            lambda: assemble(scheme("rk4", Waves(1.0), Diffusion(1.0)), line(4, FIXED)),
            "periodic grids only",
        ),
        (
            lambda: assemble(scheme("rk4", Waves(1.0), Waves(1.0, "second-order")), line(4, FIXED)),
            "different fields",
        ),
        (lambda: assemble(scheme("rk4", Waves(1.0, stencil="central4")), line(8)), "assembled"),
    ],
)
def test_what_is_not_assembled(make: object, said: str) -> None:
    """The message says which key is to blame."""
    assert callable(make)
    with pytest.raises(SettingsError, match=said):
        make()


def test_a_split_scheme_has_one_state() -> None:
    """Both parts of a split scheme act on the same unknowns."""
    split = Scheme(
        (
            *scheme("rk4", Advection((1.0,))).parts,
            Part(scheme("euler", Reaction(-1.0)).parts[0].integrator, (Reaction(-1.0),)),
        ),
        (1.0,),
    )
    first, second = assemble(split, line(6))
    assert first.matrix.shape == second.matrix.shape == (6, 6)
