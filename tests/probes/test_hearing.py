"""Text logs as the reading process hands them on."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from probes.child import Child
from probes.hearing import Hearing
from probes.spec import HistorySpec, SnapshotSpec, WatchSpec
from probes.wire import Configure, Heard, HistoriesRead, ReadHistories, decode_reply, encode

SPEC = HistorySpec(path="run.log", column=2, step=1)


def values(heard: Heard) -> list[float]:
    return [float(v) for v in heard.table.array()[:, 2]]


def test_samples_are_numbered(tmp_path: Path) -> None:
    """Each reply says where in the file its samples stand."""
    path = tmp_path / "run.log"
    path.write_text("1 5.0\n2 6.0\n")
    hearing = Hearing("e", path, SPEC)
    first = hearing.read(1 << 20)
    with path.open("a") as file:
        file.write("3 NaN\n")
    second = hearing.read(1 << 20)
    assert (first.first, second.first) == (0, 2)
    assert values(first) == [5.0, 6.0]
    assert second.odd == {0: "NaN"}
    assert first.file == second.file != ""


def test_another_process_finds_the_same_file(tmp_path: Path) -> None:
    """The key is that of the file, not of whoever reads it; a file begun again has another."""
    path = tmp_path / "run.log"
    path.write_text("1 5.0\n2 6.0\n")
    one, other = Hearing("e", path, SPEC), Hearing("e", path, SPEC)
    key = one.read(1 << 20).file
    assert other.read(1 << 20).file == key
    path.write_text("1 5.0\n")
    again = one.read(1 << 20)
    assert (again.first, values(again)) == (0, [5.0])
    assert again.file != key


def test_what_cannot_be_read_is_told(tmp_path: Path) -> None:
    """A folder in place of the log is a trouble in the reply, a log that is not there is none."""
    assert "cannot be read" in Hearing("e", tmp_path, SPEC).read(1 << 20).trouble
    nothing = Hearing("e", tmp_path / "none", SPEC).read(1 << 20)
    assert (nothing.trouble, len(nothing.table.array())) == ("", 0)


def test_the_reading_process_answers(tmp_path: Path) -> None:
    """By name, from the start again where that is asked for, over the wire unchanged."""
    (tmp_path / "run.log").write_text("1 5.0\n2 Inf\n")
    child = Child()
    histories = {"e": SPEC, "none": HistorySpec(path="none", column=1)}
    watch = WatchSpec(
        folder=str(tmp_path), snapshots=SnapshotSpec(pattern=("a",)), histories=histories
    )
    child.answer(Configure(watch=watch))
    for request in (ReadHistories(names=("e",)), ReadHistories(names=("e", "x"), again=("e",))):
        reply = child.answer(request)
        assert isinstance(reply, HistoriesRead)
        (heard,) = reply.heard
        np.testing.assert_array_equal(values(heard), [5.0, np.inf])
        assert decode_reply(encode(reply)[4:]) == reply
    reply = child.answer(ReadHistories(names=("e", "none")))
    assert isinstance(reply, HistoriesRead)
    assert [len(h.table.array()) for h in reply.heard] == [0, 0]
