"""A small part of the corpus, played in every test run, with bars of its own."""

from __future__ import annotations

import statistics

import pytest

from tests.corpus.cases import BY_NAME
from tests.corpus.playing import Played, play

DRAW = 20881
HEALTHY = (
    "heat_1d_near_limit",
    "heat_1d_noise",
    "heat_1d_half_precision",
    "advection_1d_square_ringing",
    "advection_1d_arriving",
    "advection_1d_window_10000",
    "acoustics_1d_near_limit",
    "acoustics_2d_spreading",
    "elastic_bar_hit",
    "shallow_1d_dam_break_f4",
    "shallow_1d_lake_at_rest",
    "burgers_1d_shock",
    "kuramoto_awakening_f4",
    "reaction_1d_front",
    "reaction_1d_waking",
    "bending_beam_packet",
    "febar_creaking",
)
SICK = (
    "heat_1d_one_percent_f4",
    "heat_1d_uneven",
    "heat_2d_insert_300",
    "heat_2d_one_rank",
    "advection_1d_central",
    "advection_1d_wrong_side",
    "advection_1d_leapfrog_lagging",
    "acoustics_1d_half_percent",
    "acoustics_2d_smooth_inclusion",
    "elastic_bar_stiff_piece",
    "burgers_1d_viscous",
    "reaction_2d_relaxing",
    "bending_film_two_percent_f4",
)


@pytest.fixture(scope="module")
def well() -> list[Played]:
    return [play(BY_NAME[name], DRAW) for name in HEALTHY]


@pytest.fixture(scope="module")
def ill() -> list[Played]:
    return [play(BY_NAME[name], DRAW) for name in SICK]


def test_all_could_be_played(well: list[Played], ill: list[Played]) -> None:
    """No solver and no part of the detector failed."""
    assert [(p.case, p.failed) for p in [*well, *ill] if p.failed] == []


def test_no_healthy_run_is_alarmed(well: list[Played]) -> None:
    """None reaches `runaway`, and at most one is suspected for more than three snapshots."""
    assert [(p.case, p.score.why) for p in well if p.score.alarm is not None] == []
    assert sum(p.score.swollen > 3 for p in well) <= 1


def test_sick_runs_are_alarmed_in_time(ill: list[Played]) -> None:
    """All with twelve snapshots to see it in, but one at most, are alarmed before the error is a
    thousandth of the field, in the median below 1e-4; none before its cause."""
    seen = [p for p in ill if p.score.sight == "enough"]
    assert len(seen) >= len(SICK) - 2
    assert [p.case for p in ill if p.score.premature] == []
    assert len([p.case for p in seen if not p.score.in_time]) <= 1
    assert statistics.median(p.score.share or 1.0 for p in seen) < 1e-4


def test_factors_and_places_are_right(ill: list[Played]) -> None:
    """In the median the factor is right to two per cent in its logarithm, and every place that was
    told holds the true one."""
    errors = [p.score.error for p in ill if p.linear and p.score.error is not None]
    assert len(errors) >= 8
    assert statistics.median(errors) < 0.02
    places = [p for p in ill if p.score.hit is not None]
    assert len(places) >= 3
    assert [p.case for p in places if not p.score.hit] == []


def test_the_rules_do_worse(well: list[Played], ill: list[Played]) -> None:
    """The two rules of ten lines alarm on healthy runs, or in time on fewer of the sick ones."""
    early = {p.case: p.score.early or 10**9 for p in ill}
    for rule in ("maximum", "rising"):
        wrong = sum(getattr(p, rule) is not None for p in well)
        right = sum((n := getattr(p, rule)) is not None and n < early[p.case] for p in ill)
        assert wrong > 0 or right < sum(p.score.in_time for p in ill)
