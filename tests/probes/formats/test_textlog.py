"""Text logs in the shapes that solvers write them, read while they grow."""

from __future__ import annotations

import math
import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from probes.errors import ReadError
from probes.formats.textlog import Batch, TextLog
from probes.spec import HistorySpec

WHOLE = 1 << 20

TABLE = """\
 # heat in a plate, 64 x 96 cells
 #  step      time        energy     residual
      10   1.00D-02   3.1400D+02   1.0-103
      20   2.00D-02   3.1300D+02   2.0D-05
 checkpoint written
      30   3.00D-02   3.1200D+02   ********
"""
CSV = """\
"step","time [s]","energy"
10,0.01,314.0
20,0.02,313.0
30,0.03,312.0
"""
KEYS = """\
started on 16 ranks
step=10 time=0.01, energy = 3.14e2
step=20 time=0.02, energy = 3.13e2
step=30 time=0.03, energy: 3.12e2
"""
PROSE = """\
Time step 10
   total energy is 3.14D+02 J (dt 1.0D-03)
   pressure solver: 12 iterations
Time step 20
   total energy is 3.13D+02 J (dt 1.0D-03)
Time step 30
   total energy is 3.12D+02 J (dt 1.0D-03)
"""
SHAPES = [
    (TABLE, {"column": "energy", "step": "step", "time": "time"}),
    (TABLE, {"column": 3, "step": 1, "time": 2}),
    (CSV, {"column": "energy", "step": "step", "time": "time [s]"}),
    (CSV.replace(",", "\t"), {"column": "ENERGY", "step": "Step"}),
    (CSV.replace(",", ";"), {"column": 3, "step": 1}),
    (KEYS, {"column": "energy", "step": "step", "time": "time"}),
    (
        PROSE,
        {"pattern": (r"^Time step (?P<step>\d+)", r"total energy is (?P<value>\S+)")},
    ),
]


def log(path: Path, text: str | bytes, **about: object) -> TextLog:
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return TextLog(path, HistorySpec(path=path.name, **about))


def add(path: Path, text: str) -> None:
    with path.open("a") as file:
        file.write(text)


@pytest.mark.parametrize(("text", "about"), SHAPES)
def test_every_shape_gives_the_same_numbers(
    text: str, about: dict[str, object], tmp_path: Path
) -> None:
    """Tables by heading and by number, CSV with three separators, keys, prose by pattern."""
    batch = log(tmp_path / "run.log", text, **about).read(WHOLE)
    assert batch.steps == [10.0, 20.0, 30.0]
    assert batch.values == [314.0, 313.0, 312.0]
    if "time" in about:
        assert batch.times == [0.01, 0.02, 0.03]
    assert (batch.more, batch.odd) == (False, {})


@pytest.mark.parametrize(("text", "about"), SHAPES)
def test_bytes_may_come_in_any_pieces(text: str, about: dict[str, object], tmp_path: Path) -> None:
    """A log that grows byte by byte gives the same as the whole; a torn last line waits."""
    path = tmp_path / "run.log"
    follower = log(path, "", **about)
    values: list[float] = []
    for letter in text:
        add(path, letter)
        values += follower.read(WHOLE).values
    assert values == [314.0, 313.0, 312.0]
    assert follower.begun == 0


def test_a_torn_number_is_not_taken(tmp_path: Path) -> None:
    """ "1.2" may yet become 1.2E+05: only a complete line counts."""
    path = tmp_path / "run.log"
    follower = log(path, "10 3.0\n20 1.2", column=2, step=1)
    assert follower.read(WHOLE).values == [3.0]
    assert follower.read(WHOLE).values == []
    add(path, "E+05\n")
    assert follower.read(WHOLE).values == [1.2e5]


def test_unusual_values_keep_their_print(tmp_path: Path) -> None:
    """Stars, NaN and infinity are samples, and how they stood there is told."""
    batch = log(tmp_path / "a", TABLE, column="residual", step="step").read(WHOLE)
    assert batch.values[:2] == [1e-103, 2e-5]
    assert math.isnan(batch.values[2])
    assert batch.odd == {2: "********"}
    batch = log(tmp_path / "b", "1 NaN\n2 -Infinity\n*** 5\n", column=1).read(WHOLE)
    assert batch.values[:2] == [1.0, 2.0]
    assert batch.odd == {2: "***"}


def test_a_file_begun_again_is_read_from_its_beginning(tmp_path: Path) -> None:
    """Cut short, written over with as much, or replaced by a file of the same name."""
    path = tmp_path / "run.log"
    follower = log(path, "1 1.0\n2 2.0\n3 3.0\n", column=2, step=1)
    assert len(follower.read(WHOLE).values) == 3
    path.write_text("1 9.0\n")
    assert follower.read(WHOLE).values == [9.0]
    path.write_text("1 8.0\n2 8.5\n")
    assert follower.read(WHOLE).values == [8.0, 8.5]
    other = tmp_path / "other"
    other.write_text("1 8.0\n2 8.5\n3 8.7\n")
    os.replace(other, path)
    assert follower.read(WHOLE).values == [8.0, 8.5, 8.7]
    assert follower.begun == 3


def test_steps_stand_in_for_output_numbers(tmp_path: Path) -> None:
    """A factor turns numbers of outputs into steps."""
    follower = log(tmp_path / "run.log", "1 5\n2 6\n", column=2, step=1, step_factor=50)
    assert follower.read(WHOLE).steps == [50.0, 100.0]


def test_a_restart_may_print_its_headings_again(tmp_path: Path) -> None:
    """With the columns in another order: the headings that stand last count."""
    text = "step energy\n1 5.0\n2 6.0\nenergy step\n7.0 3\n"
    batch = log(tmp_path / "run.log", text, column="energy", step="step").read(WHOLE)
    assert (batch.steps, batch.values) == ([1.0, 2.0, 3.0], [5.0, 6.0, 7.0])


def test_headings_of_several_words(tmp_path: Path) -> None:
    """ "kinetic energy" is one column where wider gaps separate the columns."""
    text = "  step    kinetic energy    dt\n  1    5.0    0.1\n  2    6.0    0.1\n"
    batch = log(tmp_path / "run.log", text, column="kinetic energy", step="step").read(WHOLE)
    assert batch.values == [5.0, 6.0]


def test_lines_that_do_not_fit_are_told_once(tmp_path: Path) -> None:
    """Columns that have run together give no number; after ten of them there is a remark."""
    text = "".join(f"{n} 1.0E+00-2.0E+00\n" for n in range(40))
    follower = log(tmp_path / "run.log", text, pattern=(r"^\d+ (?P<value>\S+)",))
    assert follower.read(WHOLE).values == []
    assert len(follower.notes) == 1
    assert "ten lines" in follower.notes[0]


def test_a_step_that_is_asked_for_must_be_there(tmp_path: Path) -> None:
    """Numbers before the first step are left out."""
    text = "energy = 1\nstep = 5\nenergy = 2\nstep = 6\nenergy = 3\n"
    batch = log(tmp_path / "run.log", text, column="energy", step="step").read(WHOLE)
    assert (batch.steps, batch.values) == ([5.0, 6.0], [2.0, 3.0])


def test_a_budget_bounds_what_is_read(tmp_path: Path) -> None:
    """A long log comes in pieces, none of it twice or never."""
    lines = [f"{n} {n * 0.5}\n" for n in range(60_000)]
    follower = log(tmp_path / "run.log", "".join(lines), column=2, step=1)
    values: list[float] = []
    reads = 0
    while True:
        batch = follower.read(1)
        values += batch.values
        reads += 1
        if not batch.more:
            break
    assert reads > 3
    assert values == [n * 0.5 for n in range(60_000)]


def test_an_endless_line_is_passed_over(tmp_path: Path) -> None:
    """A binary file, or a megabyte without an end of line, fills no memory and stops nothing."""
    text = b"1 5.0\n" + b"x" * 400_000 + b"\n2 6.0\n"
    follower = log(tmp_path / "run.log", text, column=2, step=1)
    batch = Batch(more=True)
    values: list[float] = []
    while batch.more:
        batch = follower.read(1)
        values += batch.values
    assert values == [5.0, 6.0]


def test_holes_and_progress_bars(tmp_path: Path) -> None:
    """Zeros that a network mount shows for what is not there yet are no numbers; of a line that was
    drawn over with carriage returns the last drawing counts."""
    text = b"1 5.0\r\n\0\0\0\0 7.0\n" + b"10 %\r50 %\r3 6.0\n"
    batch = log(tmp_path / "run.log", text, column=2, step=1).read(WHOLE)
    assert batch.values == [5.0, 6.0]


def test_files_that_are_not_there_or_no_files(tmp_path: Path) -> None:
    """A log that has not begun is empty; a folder or a pipe is an error, at once."""
    spec = HistorySpec(path="x", column=1)
    assert TextLog(tmp_path / "nowhere", spec).read(WHOLE).values == []
    with pytest.raises(ReadError):
        TextLog(tmp_path, spec).read(WHOLE)
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(ReadError):
        TextLog(tmp_path / "pipe", spec).read(WHOLE)
    with pytest.raises(ReadError, match="regular expression"):
        TextLog(tmp_path / "x", HistorySpec(path="x", pattern=("(",)))


@settings(deadline=None, max_examples=200)
@given(st.binary(max_size=400), st.integers(0, 5))
def test_no_bytes_end_in_an_error(text: bytes, which: int) -> None:
    """Whatever stands in the file, reading it gives finite or odd samples."""
    from tempfile import TemporaryDirectory

    with TemporaryDirectory() as folder:
        batch = log(Path(folder) / "x", text, **SHAPES[which][1]).read(WHOLE)
    finite = np.isfinite(batch.values)
    assert set(np.flatnonzero(~finite)) == set(batch.odd)
    assert all(unit > 0.0 for unit in np.array(batch.units)[finite])
