"""What `stepwarden guard` makes of its options: settings, folder and log."""

from __future__ import annotations

from argparse import ArgumentParser
from pathlib import Path

import pytest

from monitor.commands.guard import declare, settings_of
from monitor.config import Settings
from probes.errors import SettingsError
from probes.spec import FieldSpec

TOML = """
[run]
name = "basin"
log = "logs/growth.jsonl"
last_step = 500

[snapshots]
pattern = "out/h_{step}.npy"

[fields.h]
min = 0.0

[fields.u]
"""


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    return tmp_path


def understood(*words: str) -> tuple[Settings, Path, Path]:
    parser = ArgumentParser()
    declare(parser)
    return settings_of(parser.parse_args(words))


def test_patterns_alone_are_enough(here: Path) -> None:
    """Everything else has a default; the log goes to the current folder."""
    settings, folder, log = understood("--snapshots", "a_{step}.npy", "--snapshots", "b.h5")
    assert settings.snapshots.pattern == ("a_{step}.npy", "b.h5")
    assert settings.stop == ()
    assert (folder, log) == (here, here / "growth.jsonl")


def test_the_file_in_the_current_folder_is_taken(here: Path) -> None:
    """Without options stepwarden.toml decides, its log relative to it."""
    (here / "stepwarden.toml").write_text(TOML)
    settings, folder, log = understood()
    assert settings.run.name == "basin"
    assert (folder, log) == (here, here / "logs" / "growth.jsonl")


def test_a_file_elsewhere_brings_its_folder(here: Path) -> None:
    """Relative patterns start from the settings file, a typed log from the current folder."""
    (here / "run").mkdir()
    (here / "run" / "my.toml").write_text(TOML)
    _, folder, log = understood("run/my.toml", "--log", "g.jsonl")
    assert (folder, log) == (here / "run", here / "g.jsonl")


def test_what_is_typed_wins_and_what_is_not_changes_nothing(here: Path) -> None:
    """--last-step replaces the file's; the name stays; --fields keeps only those named, with what
    the file says of them."""
    (here / "stepwarden.toml").write_text(TOML)
    settings, _, _ = understood("--last-step", "900", "--fields", "h, w")
    assert (settings.run.last_step, settings.run.name) == (900, "basin")
    assert settings.fields == {"h": FieldSpec(min=0.0), "w": FieldSpec()}


def test_a_stop_can_be_given_without_a_file(here: Path) -> None:
    """First the stop file, then the signal."""
    settings, _, _ = understood(
        "--snapshots", "a.npy", "--pid", "1234", "--stop-file", "STOP", "--stop-signal", "USR1"
    )
    assert [(s.do, s.path or s.signal) for s in settings.stop] == [
        ("file", "STOP"),
        ("signal", "USR1"),
    ]


def test_a_signal_without_a_process_is_refused(here: Path) -> None:
    """Nobody to send it to."""
    with pytest.raises(SettingsError, match="--pid"):
        understood("--snapshots", "a.npy", "--stop-signal", "TERM")


def test_nothing_to_watch_is_said_with_a_way_out(here: Path) -> None:
    """Neither a file nor a pattern: the error proposes scout."""
    with pytest.raises(SettingsError, match="scout"):
        understood()


def test_what_is_typed_obeys_the_rules_of_the_file(here: Path) -> None:
    """A negative idle time is refused like one in the file, naming the key."""
    with pytest.raises(SettingsError, match="idle_seconds"):
        understood("--snapshots", "a.npy", "--idle", "-5")
