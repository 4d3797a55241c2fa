"""Tables and causes, from scores that are written by hand."""

from __future__ import annotations

import pytest

from tests.corpus import causes, tables
from tests.corpus.playing import Played
from tests.corpus.scoring import Score


def played(case: str = "x", label: str = "sick", half: str = "tuned", **rest: object) -> Played:
    return Played(case, "family", label, half, 1, factor=1.1, **rest)  # type: ignore[arg-type]


IN_TIME = Score(
    alarm=10,
    swelling=9,
    early=20,
    rows=15,
    share=1e-6,
    error=0.01,
    covered=True,
    hit=True,
    ratio=2.0,
    onset=1,
)
TOO_LATE = Score(
    alarm=25,
    swelling=19,
    early=20,
    rows=15,
    share=0.1,
    error=0.2,
    covered=False,
    hit=False,
    ratio=9.0,
    onset=9,
)
CALM = Score(swollen=3)
NERVOUS = Score(alarm=7, swelling=3, swollen=4, why="u: a mode persists over 9 snapshots")


def row(columns, runs: list[Played]) -> dict[str, str]:
    return {name: tell(runs) for name, tell in columns}


def test_healthy_runs_are_counted() -> None:
    """One alarm and one long suspicion among two; three snapshots of suspicion are borne."""
    runs = [played(label="healthy", score=s) for s in (CALM, NERVOUS)]
    found = row(tables.HEALTHY, runs)
    assert (found["runs"], found["runaway"], found["swelling>3"]) == ("2", "1", "1")


def test_sick_runs_are_counted_by_what_the_cadence_allowed() -> None:
    """Of two with enough snapshots one was alarmed in time; sparse ones count if alarmed at all; a
    value out of bounds apart."""
    runs = [
        played(score=IN_TIME, maximum=19, rising=30),
        played(score=TOO_LATE, rising=12),
        played(score=Score(early=20, rows=2, alarm=22)),
        played(score=Score(early=20, rows=2)),
        played(score=Score(alarm=5, at_once=True)),
    ]
    found = row(tables.WARNING, runs)
    assert found[">=12: in time"] == "1/2"
    assert found["sparse: alarm"] == "1/2"
    assert found["at bound"] == "1/1"
    assert found["missed"] == "1"
    assert (found["max rule"], found["rising rule"]) == ("1/2", "1/2")


def test_measures_are_medians_and_shares() -> None:
    """Errors, intervals, places and onsets of the two runs that have them; where a factor is near
    one a larger error is close enough."""
    found = row(tables.MEASURES, [played(score=IN_TIME), played(score=TOO_LATE)])
    assert (found["ln G error"], found["close"], found["covered"]) == ("10.50%", "1/2", "1/2")
    assert (found["region"], found["<=4"], found["onset"]) == ("1/2", "1/2", "1/2")
    assert found["share f8"] == "5.0e-02"
    assert tables.close(Played("x", "f", "sick", "tuned", 1, factor=1.001, score=Score(error=0.08)))
    assert not tables.close(played(score=Score(error=0.08)))


def test_ranges_of_ruin_count_snapshot_by_snapshot() -> None:
    """Three of four ranges hold the truth, the median width is 1.5."""
    one = Score(alarm=1, ruins=((True, 1.2), (True, 1.4)))
    two = Score(alarm=1, ruins=((True, 1.6), (False, 3.0)))
    found = row(tables.MEASURES, [played(score=one), played(score=two)])
    assert (found["ruin"], found["width"]) == ("75%", "1.5")


def test_rows_for_families_halves_and_all() -> None:
    """A line for each, with the right runs in it; failed runs are in none of the counts."""
    runs = [
        played(score=IN_TIME),
        played(half="scored", score=TOO_LATE),
        played(failed="ValueError: x"),
    ]
    groups = dict(tables.rows(runs))
    assert list(groups) == ["family", "tuned half", "scored half", "all"]
    assert len(groups["scored half"]) == 1
    assert row(tables.WARNING, groups["all"])["runs"] == "2"
    text = tables.tables(runs)
    assert "family" in text
    assert "sick: measures" in text


@pytest.mark.parametrize(
    ("run", "trouble"),
    [
        (played(label="healthy", score=NERVOUS), "false alarm by a mode that persists"),
        (played(score=TOO_LATE), "alarm only above a thousandth of the field"),
        (played(score=Score(early=9, rows=20)), "never alarmed before the overflow"),
        (
            played(score=Score(alarm=1, premature=True, why="h falls to -1, below its bound 0")),
            "alarm before the cause, by values out of bounds",
        ),
        (
            played(score=Score(early=9, rows=7, alarm=12, swelling=11)),
            "6 to 11 snapshots, not suspected in time",
        ),
        (
            played(score=Score(alarm=9, at_once=False)),
            "a value out of bounds was not alarmed at once",
        ),
        (played(failed="ValueError: x"), "could not be played: ValueError: x"),
    ],
)
def test_troubles_have_names(run: Played, trouble: str) -> None:
    """Each way to fall short of the bars is found."""
    assert trouble in causes.troubles(run)


def test_only_the_tuned_half_is_named() -> None:
    """Counts are of all runs, names only of those that may be looked at."""
    runs = [played("open", score=TOO_LATE), played("closed", half="scored", score=TOO_LATE)]
    text = causes.told(runs)
    assert "   2  alarm only above a thousandth of the field (tuned half: open)" in text
    assert "closed" not in text


def test_cases_apart_are_told_apart() -> None:
    """They are in no count and named with their reason."""
    run = played("smooth", apart="nothing shows it", score=TOO_LATE)
    assert causes.told([run]) == "of 0 runs"
    assert causes.apart([run]) == "smooth, draw 1: alarm at snapshot 25; nothing shows it"
    assert row(tables.WARNING, [run])["runs"] == "0"
