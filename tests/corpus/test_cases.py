"""What holds for every case of the corpus."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest

from tests.corpus.case import Case
from tests.corpus.cases import CASES, FAMILIES
from tests.corpus.marching import MOST_SNAPSHOTS

# Cheap ones from several families.
SAMPLE = [
    c
    for c in CASES
    if c.name
    in (
        "heat_1d_uneven",
        "heat_1d_boundary",
        "heat_2d_masked_corner",
        "advection_1d_hastening",
        "advection_1d_square_ringing",
        "acoustics_1d_half_percent",
        "elastic_bar_hit",
        "shallow_1d_draining",
        "burgers_1d_accelerated",
        "reaction_1d_pulses",
        "bending_beam_spring",
        "febar_one_percent",
    )
]


def test_names_are_unique_and_counts_are_fixed() -> None:
    """At least sixty of either kind, and exactly these: a case that goes stays listed."""
    assert len({c.name for c in CASES}) == len(CASES)
    counts = {f.name: Counter(c.label for c in f.cases) for f in FAMILIES}
    assert {name: (n["sick"], n["healthy"]) for name, n in counts.items()} == {
        "heat": (19, 16),
        "advection": (17, 16),
        "acoustics": (17, 13),
        "elastic": (7, 6),
        "shallow": (10, 9),
        "burgers": (6, 7),
        "kuramoto": (3, 5),
        "reaction": (8, 11),
        "vorticity": (4, 6),
        "bending": (8, 5),
        "febar": (4, 5),
    }
    assert min(Counter(c.label for c in CASES if not c.removed).values()) >= 60


def test_about_half_of_either_kind_may_be_looked_at() -> None:
    """The rule is one of names alone, and leaves at least forty per cent on either side."""
    halves = Counter((c.label, c.half) for c in CASES)
    for label in ("healthy", "sick"):
        share = halves[label, "tuned"] / (halves[label, "tuned"] + halves[label, "scored"])
        assert 0.4 <= share <= 0.62
    assert CASES[0].half == Case(CASES[0].name, "other", "healthy", "", CASES[0].make).half


def test_two_draws_differ_and_one_repeats() -> None:
    """The same draw gives the same snapshots bit by bit, another one gives others, of the same
    label and fields."""
    assert len(SAMPLE) == 12
    for case in SAMPLE:
        one, again, other = case.run(5), case.run(5), case.run(6)
        assert [s.step for s in one.snapshots] == [s.step for s in again.snapshots]
        for a, b in zip(one.snapshots, again.snapshots, strict=True):
            for name in a.fields:
                np.testing.assert_array_equal(a.fields[name], b.fields[name])
        assert one.truth.label == other.truth.label == case.label
        first, second = one.snapshots[1].fields, other.snapshots[1].fields
        assert first.keys() == second.keys()
        name = next(iter(first))
        assert first[name].shape != second[name].shape or not np.array_equal(
            first[name], second[name], equal_nan=True
        )


@pytest.mark.parametrize("case", SAMPLE, ids=[c.name for c in SAMPLE])
def test_runs_are_bounded_and_their_truth_is_whole(case: Case) -> None:
    """At most so many snapshots of a bounded size, and one truth for each of them."""
    run = case.run(7)
    truth, count = run.truth, len(run.snapshots)
    assert 10 <= count <= MOST_SNAPSHOTS
    assert max(a.size for a in run.snapshots[0].fields.values()) <= 48**3
    assert truth.steps == tuple(s.step for s in run.snapshots)
    if case.label == "healthy":
        assert truth.cause is None
        assert truth.overflow is None
        return
    assert truth.cause is not None
    if truth.contamination:
        assert len(truth.contamination) == len(truth.local) == len(truth.spots) == count
        assert truth.factor is None or truth.factor > 1.0005
        assert truth.factor is not None or truth.why
        # It reaches the size of the field, or it would not be sick.
        assert max(truth.local) >= 1.0
