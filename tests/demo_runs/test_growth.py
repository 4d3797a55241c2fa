"""What the solvers do when they are marched: round-off grows as foretold, where foretold."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.demo_runs.running import FAULTS, SOLVERS, UNUSED, measured, twins

# Round-off, 1e-16, to 1e-4 of the field.
DECADES = np.log(1e12)
# The channel's fault grows alike along its whole length: its modes part slowly.
MARCHED = {"channel": 12_000}
DEEPEST = {
    "plate": ((8, 26), (10, 30)),
    "basin": ((38, 56), (52, 72)),
    "channel": ((3, 14), (53, 64)),
    "pipe": ((250, 276),),
}


@pytest.mark.parametrize("name", SOLVERS)
def test_round_off_grows_by_the_factor(name: str) -> None:
    """ln G is that of the matrix: between 1e-12 and 1e-4 of the field, where the next modes still
    die out, within 2 %; between 1e-9 and 1e-4 within 1 %."""
    steps, levels, _ = twins(name)
    for least, within in ((1e-12, 0.02), (1e-9, 0.01)):
        shown = levels > least
        slope = np.polyfit(steps[shown], np.log(levels[shown]), 1)[0]
        assert slope == pytest.approx(np.log(SOLVERS[name].growth(1.02).factor), rel=within)


@pytest.mark.parametrize("name", SOLVERS)
def test_there_is_time_to_be_warned(name: str) -> None:
    """At 1.02 at least 16 snapshots lie between round-off and 1e-4, as computed and as marched;
    they come at odd strides, so that a factor's sign is seen."""
    solver = SOLVERS[name]
    assert DECADES / np.log(solver.growth(1.02).factor) / solver.EVERY >= 16
    assert len(twins(name)[0]) >= 16
    assert solver.EVERY % 2 == 1


@pytest.mark.parametrize("name", SOLVERS)
def test_it_grows_in_the_fastest_corner(name: str) -> None:
    """The difference's energy lies in the box that is told, which lies in the fastest cells, and
    alternates from cell to cell."""
    truth = SOLVERS[name].growth(1.02)
    _, _, off = twins(name)
    inside = off[tuple(slice(a, b) for a, b in truth.box)]
    assert (inside**2).sum() >= 0.85 * (off**2).sum()
    for (low, high), (least, most) in zip(truth.box, DEEPEST[name], strict=True):
        assert least <= low < high <= most
    assert 2.0 / np.sqrt(off.ndim) <= truth.cells <= 2.5


@pytest.mark.parametrize("name", SOLVERS)
def test_below_the_limit_nothing_grows(name: str) -> None:
    """At 0.9 of the limit the factor is at most one, and the field keeps its size over ten times
    the steps that ruin it at 1.02."""
    solver = SOLVERS[name]
    truth = solver.growth(0.9)
    assert truth.factor <= 1.0 + 1e-12
    cast = solver.build(0.9, None, UNUSED)
    state = cast.state
    largest = np.abs(state[truth.field]).max()
    for _ in range(int(10 * DECADES / np.log(solver.growth(1.02).factor))):
        state = cast.step(state)
    assert np.abs(state[truth.field]).max() <= 1.1 * largest


@pytest.mark.parametrize(("name", "fault"), FAULTS)
def test_a_fault_grows_as_told(name: str, fault: str) -> None:
    """Marched with rescaling, a disturbance grows by the matrix's factor: ln G within 2 % (many
    neighbouring modes die out slowly), and hardly faster (a complex pair swings)."""
    truth = SOLVERS[name].growth(0.9, fault)
    got = np.log(measured(name, 0.9, fault, UNUSED, MARCHED.get(name, 4_000)))
    assert 0.98 <= got / np.log(truth.factor) <= 1.003


@pytest.mark.parametrize("name", SOLVERS)
def test_an_unknown_fault_is_refused(name: str, tmp_path: Path) -> None:
    """Neither growth nor a run is made up for a fault that does not exist."""
    with pytest.raises(KeyError, match="moonlight"):
        SOLVERS[name].growth(0.9, "moonlight")
    with pytest.raises(KeyError, match="moonlight"):
        SOLVERS[name].build(0.9, "moonlight", tmp_path)
