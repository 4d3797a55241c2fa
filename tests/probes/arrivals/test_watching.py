"""Real files in real folders: being woken, settling, and what a changed folder does."""

from __future__ import annotations

import os
import shutil
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from watchdog.observers import Observer

from probes.arrivals.wakeups import MOST_FOLDERS, Wakeups
from probes.arrivals.watching import Watching
from probes.snapshot import Contents
from probes.spec import SnapshotSpec
from probes.wire import Looked


@pytest.fixture
def watch(tmp_path: Path) -> Iterator[Callable[..., Watching]]:
    made: list[Watching] = []

    def make(*pattern: str, settle: float = -1.0, events: bool = True) -> Watching:
        spec = SnapshotSpec(pattern=pattern, settle_seconds=settle)
        made.append(Watching(str(tmp_path), spec, lambda path: Contents(()), events=events))
        return made[-1]

    yield make
    for one in made:
        one.close()


def steps(looked: Looked) -> list[int | None]:
    return [a.step for a in looked.arrivals]


def until_live(watching: Watching) -> None:
    """Looks until events are on."""
    deadline = time.monotonic() + 10.0
    while watching.look(0.0).wakeup != "events":
        assert time.monotonic() < deadline


def later(act: Callable[[], object]) -> threading.Timer:
    timer = threading.Timer(0.1, act)
    timer.start()
    return timer


def test_catching_up_needs_no_waiting(tmp_path: Path, watch: Callable[..., Watching]) -> None:
    """Old files arrive at the first look, in order, in no time."""
    for step in (30, 4, 200):
        path = tmp_path / f"h_{step}.npy"
        path.write_bytes(b"x")
        os.utime(path, (1e9, 1e9))
    assert steps(watch("h_{step}.npy").look(0.0)) == [4, 30, 200]


def test_rename_is_seen_long_before_the_quiet_time(
    tmp_path: Path, watch: Callable[..., Watching]
) -> None:
    """A file renamed into place is complete at once, whatever the quiet time is."""
    watching = watch("h_{step}.npy", settle=3600.0)
    until_live(watching)

    def write() -> None:
        (tmp_path / "h_1.npy.tmp").write_bytes(b"x")
        (tmp_path / "h_1.npy.tmp").rename(tmp_path / "h_1.npy")

    timer = later(write)
    began = time.monotonic()
    assert steps(watching.look(30.0)) == [1]
    assert time.monotonic() - began < 10.0
    timer.join()


def test_a_file_held_open_is_not_complete(tmp_path: Path, watch: Callable[..., Watching]) -> None:
    """Written but not closed it is pending; closed it arrives."""
    watching = watch("h_{step}.npy", settle=3600.0)
    until_live(watching)
    with (tmp_path / "h_1.npy").open("wb") as file:
        file.write(b"half")
        file.flush()
        looked = watching.look(0.3)
        assert (looked.arrivals, [p.reason for p in looked.pending]) == ((), ["writing"])
    assert steps(watching.look(30.0)) == [1]


def test_polling_alone(tmp_path: Path, watch: Callable[..., Watching]) -> None:
    """Without events a file arrives after its quiet time."""
    watching = watch("h_{step}.npy", settle=0.3, events=False)
    timer = later(lambda: (tmp_path / "h_1.npy").write_bytes(b"x"))
    looked = watching.look(30.0)
    assert (steps(looked), looked.wakeup) == ([1], "polling")
    timer.join()


def test_our_own_reading_wakes_nobody(tmp_path: Path, watch: Callable[..., Watching]) -> None:
    """Opening and closing a file for reading makes no events that end a wait."""
    path = tmp_path / "h_1.npy"
    path.write_bytes(b"x")
    wakeups = Wakeups()
    wakeups.watch([str(tmp_path)])
    try:
        assert wakeups.reason == ""
        timer = later(path.read_bytes)
        began = time.monotonic()
        wakeups.wait(0.6)
        assert time.monotonic() - began >= 0.59
        timer.join()
    finally:
        wakeups.stop()


def test_folder_removed_and_made_again(tmp_path: Path, watch: Callable[..., Watching]) -> None:
    """The new folder of the old name is watched anew, and its events wake."""
    out = tmp_path / "out"
    out.mkdir()
    watching = watch("out/h_{step}.npy", settle=3600.0)
    until_live(watching)
    keep = tmp_path / "old"
    out.rename(keep)
    out.mkdir()
    watching.look(0.0)
    until_live(watching)

    def write() -> None:
        (out / "part").write_bytes(b"x")
        (out / "part").rename(out / "h_2.npy")

    timer = later(write)
    assert steps(watching.look(30.0)) == [2]
    timer.join()
    shutil.rmtree(keep)


def test_without_watches_it_says_so(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the system gives no more watches, or there are too many folders, polling goes on and
    the reason is told."""

    def refuse(self: object) -> None:
        raise OSError(28, "inotify watch limit reached")

    monkeypatch.setattr(Observer, "start", refuse)
    wakeups = Wakeups()
    wakeups.watch([str(tmp_path)])
    assert not wakeups.live
    assert "inotify watch limit reached" in wakeups.reason
    folders = [tmp_path / str(n) for n in range(MOST_FOLDERS + 1)]
    for folder in folders:
        folder.mkdir()
    wakeups.watch(map(str, folders))
    assert str(len(folders)) in wakeups.reason


def test_a_calm_folder_is_still_watched(tmp_path: Path, watch: Callable[..., Watching]) -> None:
    """Looks at an unchanged folder offer the same; a rewritten file is new, a removed one gone."""
    for step in (1, 2):
        (tmp_path / f"h_{step}.npy").write_bytes(b"x")
        os.utime(tmp_path / f"h_{step}.npy", (1e9, 1e9))
    watching = watch("h_{step}.npy", events=False)
    first = watching.look(0.0)
    assert watching.look(0.0).arrivals == first.arrivals
    watching.settle([first.arrivals[0].key])
    assert steps(watching.look(0.0)) == [2]
    os.utime(tmp_path / "h_1.npy", (1e9 + 5, 1e9 + 5))
    assert steps(watching.look(0.0)) == [1, 2]
    (tmp_path / "h_2.npy").unlink()
    assert steps(watching.look(0.0)) == [1]
