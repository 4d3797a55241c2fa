"""Copies of checkpoints, their removal, and stop files, on real files."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

import pytest

from probes import securing
from probes.errors import NotYet, ReadError, Refused
from probes.securing import MARKER, drop, secure, stop_file
from probes.wire import FileId, StopFile


def named(path: Path) -> FileId:
    found = path.stat()
    return FileId(
        path=str(path), size=found.st_size, mtime_ns=found.st_mtime_ns, inode=found.st_ino
    )


@pytest.fixture
def checkpoint(tmp_path: Path) -> Path:
    path = tmp_path / "run" / "c_10.h5"
    path.parent.mkdir()
    path.write_bytes(bytes(range(256)) * 100)
    return path


def test_copy(checkpoint: Path, tmp_path: Path) -> None:
    """The copy has the content, its sum is that of hashlib, and it is a file of its own."""
    pin = tmp_path / "pins" / "p1"
    done = secure([named(checkpoint)], str(pin), allow_link=False)
    copy = pin / done.files[0]
    assert done.method in ("copy", "reflink")
    assert copy.read_bytes() == checkpoint.read_bytes()
    assert done.sha256 == hashlib.sha256(checkpoint.read_bytes()).hexdigest()
    assert done.bytes == 25600
    assert copy.stat().st_ino != checkpoint.stat().st_ino
    assert sorted(p.name for p in pin.parent.iterdir()) == ["p1"]


def test_link_only_where_allowed(checkpoint: Path, tmp_path: Path) -> None:
    """A hard link shares the inode; a symbolic link is followed to the file itself."""
    latest = checkpoint.with_name("latest")
    latest.symlink_to(checkpoint.name)
    done = secure([named(latest)], str(tmp_path / "p"), allow_link=True)
    assert done.method == "link"
    copy = tmp_path / "p" / done.files[0]
    assert not copy.is_symlink()
    assert copy.stat().st_ino == checkpoint.stat().st_ino


def test_where_links_cannot_be_had(
    checkpoint: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Across file systems a link fails and the file is copied."""

    def refuse(*paths: object) -> None:
        raise OSError(18, "Invalid cross-device link")

    monkeypatch.setattr(os, "link", refuse)
    assert secure([named(checkpoint)], str(tmp_path / "p"), allow_link=True).method != "link"


def test_same_names_from_several_folders(tmp_path: Path) -> None:
    """Parts of equal names get names that tell them apart."""
    files = []
    for part in ("rank0", "rank1"):
        (tmp_path / part).mkdir()
        (tmp_path / part / "state.bin").write_text(part)
        files.append(named(tmp_path / part / "state.bin"))
    done = secure(files, str(tmp_path / "p"), allow_link=False)
    assert [(tmp_path / "p" / name).read_text() for name in done.files] == ["rank0", "rank1"]


@pytest.mark.parametrize("link", [False, True])
@pytest.mark.parametrize("change", ["gone", "rewritten", "replaced"])
def test_only_what_was_meant(checkpoint: Path, tmp_path: Path, change: str, link: bool) -> None:
    """A file that is not the one named any more is not kept, and nothing is left behind."""
    meant = named(checkpoint)
    if change == "gone":
        checkpoint.unlink()
    elif change == "rewritten":
        checkpoint.write_bytes(b"new")
    else:
        other = checkpoint.with_name("other")
        other.write_bytes(checkpoint.read_bytes())
        os.utime(other, ns=(meant.mtime_ns, meant.mtime_ns))
        other.rename(checkpoint)
    with pytest.raises(NotYet):
        secure([meant], str(tmp_path / "pins" / "p"), allow_link=link)
    assert list((tmp_path / "pins").iterdir()) == []


def test_changed_while_it_is_copied(
    checkpoint: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A file written to during the copy is not kept."""
    keep = securing._keep

    def disturbed(file: FileId, target: Path, allow_link: bool) -> object:
        method = keep(file, target, allow_link)
        checkpoint.write_bytes(b"overwritten")
        return method

    monkeypatch.setattr(securing, "_keep", disturbed)
    with pytest.raises(NotYet):
        secure([named(checkpoint)], str(tmp_path / "pins" / "p"), allow_link=False)
    assert list((tmp_path / "pins").iterdir()) == []


def test_never_over_something(checkpoint: Path, tmp_path: Path) -> None:
    """An existing folder is never written into."""
    (tmp_path / "p").mkdir()
    with pytest.raises(Refused):
        secure([named(checkpoint)], str(tmp_path / "p"), allow_link=False)


def test_no_room(checkpoint: Path, tmp_path: Path) -> None:
    """Where the folder cannot be made the system's reason is told."""
    (tmp_path / "file").write_text("")
    with pytest.raises(ReadError, match="cannot be secured"):
        secure([named(checkpoint)], str(tmp_path / "file" / "p"), allow_link=False)


def test_drop_and_what_is_not_ours(checkpoint: Path, tmp_path: Path) -> None:
    """A pin is removed; a folder without our mark, a link to a pin and a file are refused."""
    pin = tmp_path / "pins" / "p"
    secure([named(checkpoint)], str(pin), allow_link=True)
    link = tmp_path / "link"
    link.symlink_to(pin)
    for other in (checkpoint.parent, link, checkpoint):
        with pytest.raises(Refused):
            drop(str(other))
    assert drop(str(pin)).detail == "removed"
    assert not pin.exists()
    assert checkpoint.exists()
    assert drop(str(pin)).detail == "was not there"


def test_what_a_kill_leaves_is_swept_up(checkpoint: Path, tmp_path: Path) -> None:
    """Half-made folders go with the next pin or removal; half-removed ones can be removed; hidden
    folders of others stay."""
    pins = tmp_path / "pins"
    half = pins / ".p1.making"
    half.mkdir(parents=True)
    (half / MARKER).touch()
    (half / "c.h5").write_bytes(b"half")
    (pins / ".empty.making").mkdir()
    theirs = pins / ".theirs.making"
    theirs.mkdir()
    (theirs / "important").touch()
    removed = pins / "p0"
    removed.mkdir()
    drop(str(removed))
    assert sorted(p.name for p in pins.iterdir()) == [".theirs.making"]
    secure([named(checkpoint)], str(pins / "p1"), allow_link=False)
    assert sorted(p.name for p in pins.iterdir()) == [".theirs.making", "p1"]


def test_stop_files(tmp_path: Path) -> None:
    """Create keeps what is there, write replaces it, remove is content without it."""
    path = tmp_path / "STOP"

    def do(action: str, text: str = "") -> bool:
        return stop_file(StopFile(path=str(path), action=action, text=text)).exists  # type: ignore[arg-type]

    assert not do("exists")
    assert do("create")
    assert path.read_text() == ""
    assert do("write", "stop now")
    assert path.read_text() == "stop now\n"
    assert do("create")
    assert path.read_text() == "stop now\n"
    assert not do("remove")
    assert not do("remove")
    with pytest.raises(ReadError, match="write failed"):
        stop_file(StopFile(path=str(tmp_path / "no" / "STOP"), action="write"))
