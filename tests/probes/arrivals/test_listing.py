"""Listing real folders: what is found, what is looked at again, what is passed over."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from probes.arrivals import listing
from probes.arrivals.listing import EVERYTHING_AFTER, FEW, Listing
from probes.arrivals.patterns import Pattern


class Clock:
    """Monotonic seconds, moved by hand."""

    now = 0.0

    def __call__(self) -> float:
        return self.now


def look_at(folder: Path, *patterns: str, clock: Clock | None = None) -> Listing:
    return Listing(tuple(Pattern.of(p, str(folder)) for p in patterns), clock or Clock())


def names(found: Listing) -> list[str]:
    return sorted(os.path.basename(seen.path) for seen in found.look())


def test_finds_files_alone(tmp_path: Path) -> None:
    """Folders, links to nowhere, pipes and other names are no snapshots."""
    (tmp_path / "h_1.npy").write_bytes(b"x")
    (tmp_path / "h_2.npy").mkdir()
    (tmp_path / "h_3.npy").symlink_to("nowhere")
    os.mkfifo(tmp_path / "h_4.npy")
    (tmp_path / "other.txt").write_bytes(b"x")
    assert names(look_at(tmp_path, "h_{step}.npy")) == ["h_1.npy"]


def test_folder_that_comes_later(tmp_path: Path) -> None:
    """A missing folder holds nothing; when it comes its files are found."""
    found = look_at(tmp_path, "out/{step}/u.npy")
    assert found.look() == []
    (tmp_path / "out" / "5").mkdir(parents=True)
    (tmp_path / "out" / "5" / "u.npy").write_bytes(b"x")
    assert [seen.match.step for seen in found.look()] == [5]


def test_only_matching_folders_are_walked(tmp_path: Path) -> None:
    """A folder that does not fit is not listed: its names are not counted."""
    for folder, files in (("10", 1), ("logs", 50)):
        (tmp_path / folder).mkdir()
        for n in range(files):
            (tmp_path / folder / f"u{n}.npy").write_bytes(b"x")
    found = look_at(tmp_path, "{step}/u{part}.npy")
    assert len(found.look()) == 1
    assert found.listed == 2 + 1


def test_link_shows_its_target(tmp_path: Path) -> None:
    """A symbolic link has the identity of what it points to, and a new one when it is turned."""
    for n in (1, 2):
        (tmp_path / f"s{n}").write_bytes(b"x" * n)
    link = tmp_path / "latest"
    link.symlink_to("s1")
    found = look_at(tmp_path, "latest")
    assert found.look()[0].inode == (tmp_path / "s1").stat().st_ino
    link.unlink()
    link.symlink_to("s2")
    assert found.look()[0].inode == (tmp_path / "s2").stat().st_ino


def test_long_runs_are_not_looked_at_over_and_over(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Of many files only new ones, the newest and those named are looked at; all of them after a
    while. Where nothing has changed the very same list comes back."""
    monkeypatch.setattr(listing, "NEWEST", 3)
    for n in range(FEW + 10):
        (tmp_path / f"h_{n}.npy").touch()
    looked: list[str] = []
    status = listing._status

    def counted(path: str, *rest: object) -> object:
        looked.append(os.path.basename(path))
        return status(path, *rest)  # type: ignore[arg-type]

    monkeypatch.setattr(listing, "_status", counted)
    clock = Clock()
    found = look_at(tmp_path, "h_{step}.npy", clock=clock)
    assert len(found.look()) == FEW + 10
    assert len(looked) == FEW + 10
    looked.clear()
    (tmp_path / "h_5.npy").unlink()
    (tmp_path / "h_5000.npy").touch()
    assert len(found.look()) == FEW + 10
    assert "h_5000.npy" in looked
    assert len(looked) <= 4
    looked.clear()
    assert found.look() is found.look()
    looked.clear()
    found.look(also=[str(tmp_path / "h_9.npy"), str(tmp_path / "other")])
    assert "h_9.npy" in looked
    looked.clear()
    clock.now = EVERYTHING_AFTER
    found.look()
    assert len(looked) == FEW + 10
