"""The review as text."""

from __future__ import annotations

from monitor.growthlog.records import (
    AnyRecord,
    Channel,
    Evidence,
    Intent,
    Outcome,
    PinRecord,
    Skipped,
)
from monitor.review import summarise
from monitor.reviewtext import WIDTH
from tests.monitor.made_log import alarmed_run, contents, opened, segment, snap

PIN = PinRecord(
    seq=70,
    at=200.0,
    pin="p3",
    state="kept",
    folder="pins/p3",
    files=("T_000240.npy",),
    step=240,
    sha256="cd" * 32,
    verified=True,
)


def text_of(records: list[AnyRecord]) -> str:
    return summarise(contents(records)).text()


def test_the_first_line_is_the_answer() -> None:
    """Name, condition, kind and the alarm's step, before anything else."""
    first = text_of(alarmed_run()).splitlines()[0]
    for words in ("cooling plate", "runaway", "numerical", "alarm at step 660"):
        assert words in first


def test_everything_an_engineer_asks_is_there() -> None:
    """When, where, how fast, how bad, how long, which checkpoint, what was done."""
    stop = [
        Intent(seq=71, at=300.0, act="stop-file", id="x", target="STOP"),
        Outcome(seq=72, at=302.0, act="stop-file", id="x", outcome="accepted", detail="ended"),
    ]
    told = " ".join(text_of([*alarmed_run(), PIN, *stop]).split())
    for words in (
        "between step 280 and 420",
        "[16, 32) x [16, 30)",
        "factor per step",
        "in the worst tile",
        "steps to ruin",
        "pins/p3/T_000240.npy, pinned, sha256 cdcd",
        "before the growth can have begun",
        "stop-file STOP, accepted: ended",
        "must be inside the limit",
    ):
        assert words in told


def test_a_quiet_run_has_no_growth_to_tell() -> None:
    """No rows about growth, but the caution that silence proves nothing."""
    told = text_of([opened(1), segment(2), *(snap(n) for n in range(3, 20))])
    assert "no alarm" in told.splitlines()[0]
    assert "to ruin" not in told
    assert "no proof of stability" in told


def test_an_empty_log_says_so() -> None:
    """One clear line, no clean checkpoint claimed."""
    told = text_of([])
    assert "no snapshot was judged" in told
    assert "Clean" not in told


def test_lines_fit_a_terminal_and_paths_stay_whole() -> None:
    """No line is wider than stated, except for a path, which can be copied as it is."""
    path = "deep/" * 30 + "T_000380.npy"
    records = [opened(1), segment(2), *(snap(n) for n in range(3, 19)), snap(19, path=path)]
    lines = text_of([*records]).splitlines()
    assert any(path in line for line in lines)
    assert max(len(line) for line in lines if path not in line) <= WIDTH
    assert max(len(line) for line in text_of(alarmed_run()).splitlines()) <= WIDTH


def test_names_cannot_play_with_the_terminal() -> None:
    """Control characters from file names are shown, not sent."""
    odd = Skipped(seq=90, at=1.0, path="a\x1b[2Jb\n.npy", reason="broken", detail="\x07")
    told = text_of([*alarmed_run(), odd])
    assert all(c.isprintable() or c == "\n" for c in told)
    assert "\nb" not in told


def test_many_skipped_snapshots_are_counted() -> None:
    """Five are named, the rest is a number."""
    skips = [
        Skipped(seq=90 + n, at=1.0, path=f"a{n}.npy", reason="broken", detail="cut short")
        for n in range(9)
    ]
    told = text_of([*alarmed_run(), *skips])
    assert told.count("cut short") == 5
    assert "and 4 more" in told


def test_drifts_of_totals_are_told() -> None:
    """A conserved field's drift, with its sign, in the text and in the object; else no row."""
    of_h = Channel(f="h", lo=0.0, hi=1.0, drift=-1.23e-6)
    odd = Channel(f="u[1]", lo=0.0, hi=1.0, drift="nan")
    records = [opened(1), segment(2)]
    records += [snap(n, evidence_=Evidence(channels=(of_h, odd))) for n in range(3, 9)]
    review = summarise(contents(records))
    assert "total of h -1.2e-6, of u[1] NaN" in " ".join(review.text().split())
    assert review.json_object()["drift_of_totals"] == {"h": -1.23e-6, "u[1]": "nan"}
    assert "Totals" not in text_of([opened(1), segment(2), snap(3)])
