"""Scores of answers about real runs, on truths that are written by hand."""

from __future__ import annotations

import math

import pytest

from tests.corpus.fieldscore import (
    Answer,
    after_cause,
    factor_error,
    hit,
    share_at,
    summary,
    table,
    useful,
)


def sick(**changes: object) -> dict[str, object]:
    """Garbage on the line 1e-12 exp(0.1 step), measured only above the twin's own 1e-6."""
    steps = range(0, 400, 10)
    line = [1e-12 * math.exp(0.1 * s) for s in steps]
    return {
        "label": "unstable",
        "onset_step": 0,
        "dtype": "float64",
        "dtype_compute": "float64",
        "first_nonfinite_or_1e30_step": 380,
        "contamination": [[s, max(1e-6, v)] for s, v in zip(steps, line, strict=True)],
        "growth_fit_to_contamination": {
            "G": math.exp(0.1),
            "ln_at_step0": math.log(1e-12),
            "rms_ln": 0.01,
        },
        "growth_per_step_true": math.exp(0.1),
        "growth_reliable": True,
        "unstable_region": [[10, 20], [30, 40]],
        **changes,
    }


def test_garbage_below_the_twins_error_is_traced_back() -> None:
    """At step 100 the line is at 1e-12 e**10, though only 1e-6 was measured; without a straight
    line
    the measurement stands."""
    assert share_at(sick(), 100) == pytest.approx(1e-12 * math.exp(10.0))
    assert share_at(sick(), 250) == pytest.approx(1e-12 * math.exp(25.0), rel=1e-6)
    crooked = {"G": 1.1, "ln_at_step0": -20.0, "rms_ln": 0.9}
    assert share_at(sick(growth_fit_to_contamination=crooked), 100) == 1e-6


@pytest.mark.parametrize(
    ("answer", "twin", "limit", "good"),
    [
        (Answer(200), None, 0.01, True),
        (Answer(240), None, 0.01, False),
        (Answer(240), None, 0.1, True),
        (Answer(280), None, 1.0, False),
        (Answer(None), None, 1.0, False),
        (Answer(200), Answer(None), 0.01, True),
        (Answer(200), Answer(200), 0.01, False),
        (Answer(200), Answer(230), 0.01, True),
    ],
    ids=["early", "late", "early enough", "ruined", "none", "quiet twin", "twin too", "twin later"],
)
def test_useful_alarms(answer: Answer, twin: Answer | None, limit: float, good: bool) -> None:
    """Below the limit (0.01 is passed at step 230, 0.1 at 253, one at 276), and not raised as early
    by the clean twin."""
    assert useful(sick(), answer, twin, limit) is good


def test_alarms_before_the_onset_by_luck_or_after_the_overflow_are_not_useful() -> None:
    """Before the onset; below the rounding of a computation in double or single precision; at the
    overflow."""
    assert not useful(sick(onset_step=150), Answer(140), None, 1.0)
    assert not after_cause(sick(), Answer(380))
    low = {"G": math.exp(0.1), "ln_at_step0": math.log(1e-22), "rms_ln": 0.01}
    assert not useful(sick(growth_fit_to_contamination=low), Answer(100), None, 1.0)
    assert useful(sick(), Answer(60), None, 1.0)
    assert not useful(sick(dtype="float32"), Answer(60), None, 1.0)


def test_regions() -> None:
    """Hit with the middle within a cell, or with half of the box inside; unknown where either
    is."""
    assert hit(sick(), ((12, 18), (30, 38))) is True
    assert hit(sick(), ((15, 25), (30, 40))) is True
    assert hit(sick(), ((40, 60), (30, 40))) is False
    assert hit(sick(), None) is None
    assert hit(sick(unstable_region=None), ((0, 1), (0, 1))) is None
    assert hit(sick(unstable_region_alt=[[[40, 60], [30, 40]]]), ((40, 60), (30, 40))) is True


def test_factors() -> None:
    """The error is that of the logarithm, against the nearest of several true factors, and none
    where the truth has no single rate."""
    assert factor_error(sick(), Answer(9, factor=math.exp(0.11))) == pytest.approx(0.1)
    other = sick(growth_alt=[math.exp(0.2)])
    assert factor_error(other, Answer(9, factor=math.exp(0.21))) == pytest.approx(0.05)
    assert factor_error(sick(growth_reliable=False), Answer(9, factor=1.1)) is None


def test_the_table_counts() -> None:
    """One false alarm on a healthy run, none on the twin; one of two sick runs useful; a run that
    grows by its physics is told apart."""
    well = {"label": "stable"}
    twin = {"label": "stable", "control_of": "a"}
    truths = {"a": sick(), "a__clean": twin, "b": sick(), "h": well, "pp_exp_growth": well}
    answers = {
        "a": Answer(200, math.exp(0.1), ((12, 18), (30, 38))),
        "a__clean": Answer(),
        "b": Answer(),
        "h": Answer(30, why="something"),
        "pp_exp_growth": Answer(30, why="growth"),
    }
    found = dict(summary(truths, answers))
    assert found["false alarms on 1 healthy runs"] == "1"
    assert found["false alarms on 1 clean twins"] == "0"
    assert found["useful of 2, garbage below 0.01"] == "1"
    assert found["regions hit of 2"] == "1"
    assert found["median error of ln G"] == "0.00%"
    text = table(truths, {"guard": answers})
    assert "h: false alarm at step 30: something" in text
    assert (
        "pp_exp_growth: false alarm at step 30 (apart: grows exponentially by its physics)" in text
    )
    assert "b: no alarm, onset 0, overflow 380" in text
