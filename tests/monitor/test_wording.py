"""Numbers, ranges, durations and conditions in words."""

from __future__ import annotations

import math
import subprocess
import sys
from typing import get_args

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.growthlog.records import (
    Channel,
    Condition,
    Estimate,
    Evidence,
    History,
    Snapshot,
    Verdict,
)
from monitor.wording import (
    age_text,
    box_text,
    clean,
    condition_sign,
    count,
    drift_text,
    duration_text,
    estimate_text,
    exact,
    factor_text,
    headroom_text,
    history_text,
    number,
    snapshot_line,
    steps_text,
    verdict_text,
)

CONDITIONS: tuple[Condition, ...] = get_args(Condition)


def snapshot(name: str = "T", step: int | None = 1240, **verdict: object) -> Snapshot:
    return Snapshot(
        seq=9,
        at=1000.0,
        key="k",
        path=f"out/{name}.npy",
        index=62,
        step=step,
        evidence=Evidence(channels=()),
        verdict=Verdict(**{"condition": "quiet", **verdict}),  # type: ignore[arg-type]
    )


@pytest.mark.parametrize(
    ("raw", "shown"),
    [
        ("out/T_000240.npy", "out/T_000240.npy"),
        ("größe_θ", "größe_θ"),
        ("a\x1b[2Jb", "a\\x1b[2Jb"),
        ("line\nbreak\r\t", "line\\nbreak\\r\\t"),
        ("\x9b31m", "\\x9b31m"),
        ("evil\u202egpj", "evil\\u202egpj"),
        ("zero\u200bwidth", "zero\\u200bwidth"),
        ("lone\udcff", "lone\\udcff"),
        ("[bold]T[/bold] x [16, 32)", "[bold]T[/bold] x [16, 32)"),
    ],
)
def test_clean_shows_what_it_must_not_send(raw: str, shown: str) -> None:
    """Controls of both ranges, direction overrides, invisible characters and lone surrogates become
    escapes; letters of any script and brackets stay."""
    assert clean(raw) == shown


@given(st.text())
def test_cleaned_text_is_printable_and_stays_so(text: str) -> None:
    """Whatever comes in, only printable characters come out, and cleaning again changes nothing."""
    assert clean(text).isprintable()
    assert clean(clean(text)) == clean(text)


@pytest.mark.parametrize(
    ("value", "shown"),
    [
        (0.0125, "0.0125"),
        (3.2e-9, "3.2e-9"),
        (107500.0, "1.075e5"),
        (0.0, "0"),
        ("nan", "NaN"),
        ("-inf", "-infinity"),
        (math.inf, "infinity"),
        (None, "unknown"),
    ],
)
def test_numbers(value: object, shown: str) -> None:
    """Four digits at most, short exponents, non-finite values in words."""
    assert number(value) == shown  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("value", "shown"),
    [(0, "0"), (917, "917"), (999.6, "1 k"), (1234, "1.2 k"), (36000, "36 k"), (4.1e6, "4.1 M")],
)
def test_counts_carry_a_suffix(value: float, shown: str) -> None:
    """Two digits and a decimal suffix; what rounds to a thousand is one of the next suffix."""
    assert count(value) == shown


@given(st.floats(1.0, 1e15))
def test_a_count_is_right_to_its_two_digits(value: float) -> None:
    """Read back, the text is within half a unit of its last shown digit, 6 % at most."""
    digits, _, suffix = count(value).partition(" ")
    size = {"": 1.0, "k": 1e3, "M": 1e6, "G": 1e9, "T": 1e12}[suffix]
    assert float(digits) * size == pytest.approx(value, rel=0.06, abs=0.5)


@pytest.mark.parametrize(
    ("factor", "shown"),
    [
        (1.0204, "1.0204"),
        (1.02, "1.02"),
        (0.999761, "0.999761"),
        (1.0, "1"),
        (1.0000005, "1.0000005"),
        (3.14159, "3.142"),
        (math.inf, "infinity"),
        (Estimate(1.0204, 1.0197, 1.0211, 0.9), "1.0204 (1.0197 to 1.0211)"),
        (Estimate(reason="too few snapshots"), "none: too few snapshots"),
        (None, "unknown"),
    ],
)
def test_factors_near_one_keep_their_digits(factor: object, shown: str) -> None:
    """1.0204 shown as 1.02 would hide two per cent of its logarithm."""
    assert factor_text(factor) == shown  # type: ignore[arg-type]


@given(st.floats(-0.3, 0.3).filter(lambda away: abs(away) > 1e-6))
def test_a_factor_read_back_has_its_logarithm(away: float) -> None:
    """The shown text gives ln G within 6 % at worst (seven decimals at most)."""
    shown = float(factor_text(1.0 + away))
    assert math.log(shown) == pytest.approx(math.log1p(away), rel=0.06)


@pytest.mark.parametrize(
    ("estimate", "shown"),
    [
        (Estimate(1.0204, 1.0197, 1.0211, 0.9), "1.0204 (1.0197 to 1.0211)"),
        (Estimate(3.2e-10, 2.9e-10, 3.6e-10, 0.8), "3.2e-10 (2.9e-10 to 3.6e-10)"),
        (Estimate(5210.0, 5080.0, "inf", 0.8), "5210 (at least 5080)"),
        (Estimate(0.5, None, 0.7, 0.8), "0.5 (at most 0.7)"),
        (Estimate(0.25), "0.25"),
        (Estimate(reason="no growing mode stands out"), "none: no growing mode stands out"),
        (Estimate("nan"), "NaN"),
        (None, "not estimated"),
    ],
)
def test_estimates_come_with_their_doubt(estimate: Estimate | None, shown: str) -> None:
    """A value with its interval, open ends in words, or the reason why there is none."""
    assert estimate_text(estimate) == shown


@pytest.mark.parametrize(
    ("estimate", "shown"),
    [
        (Estimate(917.0, 890.0, 948.0, 0.8), "890 to 948 steps"),
        (Estimate(1250.0, 1200.0, 1400.0, 0.8), "1.2 to 1.4 k steps"),
        (Estimate(1000.0, 900.0, 1400.0, 0.8), "0.9 to 1.4 k steps"),
        (Estimate(2000.0, 30.0, 9000.0, 0.8), "30 to 9 k steps"),
        (Estimate(5210.0, 5080.0, "inf", 0.8), "at least 5.1 k steps"),
        (Estimate(900.0), "about 900 steps"),
        (Estimate(0.0, 0.0, 0.0, 0.8), "now"),
        (Estimate(-5.0, -9.0, -2.0, 0.8), "now"),
        (Estimate("inf"), "never at this rate"),
        (Estimate(reason="the growth may stop\x07"), "the growth may stop\\x07"),
        (None, "not estimated"),
    ],
)
def test_steps_are_a_range_or_a_reason(estimate: Estimate | None, shown: str) -> None:
    """Never one number that looks sure."""
    assert steps_text(estimate) == shown


@pytest.mark.parametrize(
    ("seconds", "shown"),
    [
        (0.0, "0 s"),
        (1.26, "1.3 s"),
        (12.4, "12 s"),
        (2400.0, "40 min"),
        (7500.0, "2 h 5 min"),
        (7200.0, "2 h"),
        (86400.0, "24 h"),
        (273600.0, "3 d 4 h"),
        (86400.0 * 40, "40 d"),
        (4e10, "1.3 k years"),
        (math.inf, "infinity"),
        (-3.0, "0 s"),
    ],
)
def test_durations_in_units_that_matter(seconds: float, shown: str) -> None:
    """At most two units, nothing finer than what one would act upon."""
    assert duration_text(seconds) == shown


def test_headroom_tells_steps_and_time() -> None:
    """917 steps of 2.6 s take about 40 minutes; the range stays a range."""
    steps = Estimate(917.0, 890.0, 948.0, 0.8)
    assert headroom_text(steps, 2.6) == "890 to 948 steps (about 39 to 41 min)"
    assert headroom_text(steps, 0.01) == "890 to 948 steps (about 8.9 to 9.5 s)"
    assert headroom_text(steps, 10.0) == "890 to 948 steps (about 2 h 28 min to 2 h 38 min)"
    assert headroom_text(steps, 0.001) == "890 to 948 steps (about 0.9 s)"
    assert headroom_text(steps) == "890 to 948 steps"
    open_end = Estimate(5210.0, 5080.0, "inf", 0.8)
    assert headroom_text(open_end, 60.0) == "at least 5.1 k steps (3 d 13 h or more)"
    assert headroom_text(Estimate(0.0, 0.0, 0.0), 60.0) == "now"
    assert headroom_text(Estimate(reason="no rate"), 60.0) == "no rate"


def test_an_age_changes_seldom() -> None:
    """Within a minute in steps of five seconds, then whole minutes."""
    assert [age_text(s) for s in (-1, 4.9, 5, 9.9, 59, 61, 119, 3700)] == [
        "just now",
        "just now",
        "5 s ago",
        "5 s ago",
        "55 s ago",
        "1 min ago",
        "1 min ago",
        "61 min ago",
    ]


def test_signs_tell_conditions_apart_without_colour() -> None:
    """Five different pictures in each alphabet, three columns wide, the plain ones pure ASCII."""
    for plain in (False, True):
        signs = {condition_sign(c, ascii=plain) for c in CONDITIONS}
        assert len(signs) == len(CONDITIONS)
        assert {len(s) for s in signs} == {3}
    assert all(condition_sign(c, ascii=True).isascii() for c in CONDITIONS)


def test_boxes_and_whole_numbers() -> None:
    """Half-open boxes as in the review; steps in groups of three."""
    assert box_text(((88, 96), (40, 56))) == "[88, 96) x [40, 56)"
    assert exact(1234567) == "1,234,567"


def test_a_snapshot_line_names_run_step_and_condition() -> None:
    """A quiet one is short; an alarm tells its evidence and what is left."""
    assert snapshot_line(snapshot(), "cooling plate") == "cooling plate  step 1,240  --- quiet"
    alarm = snapshot(
        condition="runaway",
        kind="numerical",
        why="T: a mode grows 1.0204 per step",
        ruin=Estimate(917.0, 890.0, 948.0, 0.8),
    )
    line = snapshot_line(alarm, "plate")
    assert line.startswith("plate  step 1,240  -/! runaway; T: a mode grows")
    assert line.endswith("ruin in 890 to 948 steps")


def test_a_snapshot_line_is_one_line_of_printable_text() -> None:
    """Names and reasons come from files: no newline and no escape sequence gets through."""
    odd = snapshot(step=None, condition="swelling", why="u\x1b]0;x\x07\nv grows")
    line = snapshot_line(odd, "run\r\n\x1b[31m")
    assert line.isprintable()
    assert "snapshot 62" in line


def test_every_verdict_has_a_sentence() -> None:
    """Conditions without evidence still say what that means."""
    for condition in CONDITIONS:
        assert verdict_text(Verdict(condition=condition))
    carried = Verdict(condition="quiet", kind="resolved", field="u", factor=Estimate(1.01))
    assert verdict_text(carried) == "u grows 1.01 per step, at a wavelength that the grid carries"


def test_wording_needs_no_array_or_screen_library() -> None:
    """It is imported by every command, so it must be light."""
    code = "import sys, monitor.wording; print(*sys.modules)"
    done = subprocess.run(
        [sys.executable, "-P", "-c", code], capture_output=True, text=True, timeout=60, check=True
    )
    assert not {"numpy", "textual", "rich"} & set(done.stdout.split())


def test_a_history_in_one_sentence() -> None:
    """Value, place, condition, why and how long; as it stands in the file where it is no number."""
    verdict = Verdict(
        condition="swelling",
        why="energy: its changes grew",
        ruin=Estimate(140.0, 131.0, 152.0, 0.8),
    )
    grows = History(
        seq=1, at=0.0, name="energy", file="", sample=7, step=1203, value=317.4, verdict=verdict
    )
    told = "energy 317.4 at step 1,203, swelling: its changes grew; ruin in 131 to 152 steps"
    assert history_text(grows) == told
    stars = History(
        seq=1,
        at=0.0,
        name="e\x1b",
        file="",
        sample=7,
        value="nan",
        print="***",
        verdict=Verdict(condition="quiet"),
    )
    assert history_text(stars) == "e\\x1b *** at line 8, quiet"


def test_drifts_of_totals() -> None:
    """With their sign, nothing for fields that are not conserved."""
    channels = (Channel("h", 0.0, 1.0, drift=1.234e-9), Channel("u", 0.0, 1.0))
    assert drift_text(Evidence(channels=channels)) == "total of h +1.2e-9"
    assert drift_text(Evidence(channels=channels[1:])) == ""
