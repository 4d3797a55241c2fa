"""Overflow must not become a mask when the reading process is started again."""

from __future__ import annotations

import numpy as np
from msgspec.structs import replace

from monitor.guarding.masks import MaskMemory
from probes.wire import Arrival, Sketched
from tests.monitor.actions.fakes import block


def sketched(masked: int, bad: int = 0) -> Sketched:
    b = replace(block(np.zeros((4, 4))), masked=masked, bad=bad)
    return Sketched(arrival=Arrival(key="k", files=()), blocks=(b,))


def counts(s: Sketched) -> tuple[int, int]:
    return s.blocks[0].masked, s.blocks[0].bad


def test_the_first_snapshot_sets_the_mask() -> None:
    """Whatever the reading process learnt."""
    assert counts(MaskMemory().check(sketched(5))) == (5, 0)


def test_cells_beyond_the_mask_are_bad() -> None:
    """A new reading process took eight cells for masked, five were: three have overflowed, now and
    in every later snapshot."""
    memory = MaskMemory()
    memory.check(sketched(5))
    assert counts(memory.check(sketched(8))) == (5, 3)
    assert counts(memory.check(sketched(8, bad=2))) == (5, 5)


def test_a_mask_may_shrink() -> None:
    """While it is being confirmed; it does not grow back."""
    memory = MaskMemory()
    memory.check(sketched(5))
    memory.check(sketched(4))
    assert counts(memory.check(sketched(5))) == (4, 1)


def test_it_goes_on_after_a_restart_of_guard() -> None:
    """With the counts it held."""
    before = MaskMemory()
    before.check(sketched(5))
    assert counts(MaskMemory(before.masked).check(sketched(9))) == (5, 4)
