"""Following a run in memory is what the whole program does with its files."""

from __future__ import annotations

import numpy as np
import pytest

from probes.spec import FieldSpec
from tests.corpus.case import Run, Stored, Truth
from tests.corpus.cases import BY_NAME
from tests.corpus.filing import differing, fit_for_files
from tests.corpus.running import files, follow


def cut(run: Run, count: int) -> Run:
    """Its first snapshots."""
    return Run(run.snapshots[:count], run.truth, run.specs, run.parts)


@pytest.mark.parametrize(
    ("name", "count"),
    [("acoustics_1d_half_percent", 50), ("heat_2d_one_rank", 45), ("febar_creaking", 12)],
    ids=["one field", "four parts", "unstructured"],
)
def test_files_and_memory_give_the_same_records(name: str, count: int) -> None:
    """`stepwarden guard --catch-up` on .npy files logs the same evidence and the same verdict, for
    every snapshot, as the run in memory."""
    run = cut(BY_NAME[name].run(draw=2), count)
    assert fit_for_files(run)
    assert differing(run) == (count, [])


def test_the_comparison_can_fail() -> None:
    """Other numbers in memory than in the files are noticed."""
    run = cut(BY_NAME["febar_creaking"].run(draw=2), 8)
    other = Run(
        [Stored(s.step, s.time, {"u": 1.5 * s.fields["u"]}) for s in run.snapshots],
        run.truth,
        run.specs,
    )
    said = list(follow(run, timed=False))
    assert [s.evidence for s in said] != [s.evidence for s in follow(other, timed=False)]


def test_a_step_that_goes_back_begins_a_new_segment() -> None:
    """After it everything is gathered anew."""
    rng = np.random.default_rng(8)
    steps = [0, 10, 20, 30, 40, 50, 30, 40]
    stored = [Stored(k, float(k), {"u": rng.standard_normal(40)}) for k in steps]
    conditions = [s.verdict.condition for s in follow(Run(stored, Truth("healthy")))]
    assert conditions[5] == "quiet"
    assert conditions[6] == "gathering"
    assert not fit_for_files(Run(stored, Truth("healthy")))


def test_parts_are_pieces_of_the_first_axis() -> None:
    """Files come field by field and part by part, each with its own cells."""
    field = np.arange(12.0).reshape(6, 2)
    run = Run(
        [Stored(0, 0.0, {"b": field, "a": field})],
        Truth("healthy"),
        parts={"0": slice(0, 2), "1": slice(2, 6)},
    )
    found = [
        (name, part, values.shape) for name, part, values in files(run.snapshots[0].fields, run)
    ]
    assert found == [("a", "0", (2, 2)), ("a", "1", (4, 2)), ("b", "0", (2, 2)), ("b", "1", (4, 2))]


def test_settings_of_fields_reach_the_detector() -> None:
    """A value below the bound that a case declares is an alarm at once."""
    stored = [Stored(k, float(k), {"h": np.full(40, 2.5 - k)}) for k in range(4)]
    run = Run(stored, Truth("healthy"), specs={"h": FieldSpec(min=0.0)})
    assert [s.verdict.condition for s in follow(run)][3] == "runaway"
