"""Drift of totals: exact however few digits the log has, and in a size that means something."""

from __future__ import annotations

import math

import numpy as np
import pytest
from msgspec.structs import replace

from monitor.growthlog.records import Channel, Evidence
from monitor.guarding.totals import Totals
from probes.spec import FieldSpec
from probes.wire import BlockReply
from tests.monitor.actions.fakes import block

CONSERVED = {"h": FieldSpec(conserved=True)}


def of(values: np.ndarray, part: str = "", name: str = "h") -> BlockReply:
    return replace(block(values), field=name, part=part)


def told(totals: Totals, *blocks: BlockReply, vary: float = 1.0) -> Channel:
    channel = Channel(f=blocks[0].field, lo=0.0, hi=1.0, vary=math.log(vary))
    return totals.told(Evidence(channels=(channel,)), blocks).channels[0]


def test_the_first_snapshot_is_the_reference() -> None:
    """No drift at first; then the change of the sum over what it was, by NumPy's own sums."""
    rng = np.random.default_rng(3_901)
    first = 5.0 + rng.standard_normal((20, 30))
    later = first + 1e-9 * rng.random((20, 30))
    totals = Totals(CONSERVED)
    assert told(totals, of(first)).drift == 0.0
    expected = (math.fsum(later.ravel()) - math.fsum(first.ravel())) / math.fsum(first.ravel())
    assert told(totals, of(later)).drift == pytest.approx(expected, rel=1e-4)


def test_parts_are_added_up() -> None:
    """What leaves one part and enters another has not drifted."""
    totals = Totals(CONSERVED)
    a, b = np.full((4, 4), 2.0), np.full((4, 4), 3.0)
    told(totals, of(a, "a"), of(b, "b"))
    assert told(totals, of(a + 0.5, "a"), of(b - 0.5, "b")).drift == pytest.approx(0.0, abs=1e-15)


def test_a_total_that_cancels_is_measured_by_the_fields_size() -> None:
    """Momentum that sums to nothing: the drift is a share of cells times rms."""
    u = np.array([[1.0, -1.0], [-1.0, 1.0]])
    totals = Totals(CONSERVED)
    told(totals, of(u))
    assert told(totals, of(u + 0.01)).drift == pytest.approx(0.01)


def test_only_conserved_fields_are_told() -> None:
    """And only fields with bounds are marked to stay in a long record."""
    first = np.ones((4, 4))
    plain = told(Totals({"h": FieldSpec()}), of(first))
    assert (plain.drift, plain.bounded) == (None, False)
    assert told(Totals({}), of(first)).drift is None
    assert told(Totals({"h": FieldSpec(min=0.0)}), of(first)).bounded


def test_components_and_resumption() -> None:
    """u[1] is conserved where u is; another guard goes on from the same first totals."""
    fields = {"u": FieldSpec(conserved=True)}
    before = Totals(fields)
    told(before, of(np.ones((4, 4)), name="u[1]"))
    after = Totals(fields, before.firsts)
    assert told(after, of(np.full((4, 4), 1.5), name="u[1]")).drift == pytest.approx(0.5)


def test_sums_beyond_the_number_type() -> None:
    """A total that overflowed is told as what it is; it is no reference for later ones."""
    huge = replace(of(np.ones((4, 4))), total=math.nan)
    totals = Totals(CONSERVED)
    assert told(totals, huge).drift is None
    told(totals, of(np.ones((4, 4))))
    assert told(totals, huge).drift == "nan"
