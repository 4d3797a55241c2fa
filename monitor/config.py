"""``stepwarden.toml``: strictly typed settings, all problems told in one report."""

from __future__ import annotations

import os
import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Literal

import msgspec

from monitor.settings_report import Problem, convert_keys, raise_all
from monitor.settings_rules import broken_rules
from probes.errors import SettingsError
from probes.limits.spec import SchemeSpec
from probes.spec import FieldSpec, HistorySpec, SketchSpec, SnapshotSpec, WatchSpec

# A settings file is written by a person; anything longer is some other file.
_LARGEST_FILE = 1 << 20


class Section(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Base of all sections: immutable, unknown keys refused."""


class RunSection(Section, frozen=True, kw_only=True):
    """``[run]``: name for people (default: the folder's name), folder of the log.

    log: path of growth.jsonl, relative to the configuration file.
    pid: process whose end is the end of the run; last_step, end_file, idle_seconds: other ends
    (0, "" mean not used). end_command: argument list whose exit status 0 means "finished".
    """

    name: str = ""
    log: str = "growth.jsonl"
    pid: int = 0
    last_step: int = 0
    end_file: str = ""
    end_command: tuple[str, ...] = ()
    idle_seconds: float = 0.0


class CheckpointSection(Section, frozen=True, kw_only=True):
    """``[checkpoints]``: what the solver restarts from; without it the watched files are pinned."""

    pattern: tuple[str, ...] = ()
    companions: tuple[str, ...] = ()
    parts: int = 0


class EstimateSection(Section, frozen=True, kw_only=True):
    """``[estimate]``: how sketches become evidence.

    krylov: differences in one Ritz window. history: snapshots of per-tile levels kept.
    crops: watched tiles whose raw values come back with every sketch (at most 8).
    """

    krylov: int = 6
    history: int = 256
    crops: int = 8


class AlarmSection(Section, frozen=True, kw_only=True):
    """``[alarm]``: how evidence becomes a condition (the only section `rehearse` varies).

    run_length: average number of quiet snapshots to a false step from quiet to swelling.
    decades: rise of a level on a straight line that an alarm needs.
    straight: largest rms of that line's residuals as a share of the rise.
    cells: longest wavelength that counts as grid-scale.
    mode_cells: the same for a single mode, whose wavelength is known better.
    held: snapshots over which a Ritz pair must persist.
    calm: quiet snapshots after which `runaway` falls back (its alarm stays).
    """

    run_length: float = 1e5
    decades: float = 2.0
    straight: float = 0.03
    cells: float = 4.1
    mode_cells: float = 3.5
    held: int = 6
    calm: int = 12


class PinSection(Section, frozen=True, kw_only=True):
    """``[pins]``: folder beside the log, number of provisional pins, budget of all pins."""

    enabled: bool = True
    folder: str = "pins"
    provisional: int = 3
    budget_gb: float = 20.0


class StopStep(Section, frozen=True, kw_only=True):
    """``[[stop]]``: one rung of the stop ladder, tried in order, the next only without reaction.

    do: "file" (path, action, text), "command" (argument list) or "signal" (signal name to the
    solver's pid). wait_seconds: how long the run may take to react (its pid ends, or no new
    snapshot comes) before the next rung.
    """

    do: Literal["file", "command", "signal"]
    path: str = ""
    action: Literal["create", "write", "remove"] = "create"
    text: str = ""
    command: tuple[str, ...] = ()
    signal: str = "TERM"
    wait_seconds: float = 60.0


class NotifySection(Section, frozen=True, kw_only=True):
    """``[notify]``: run at every change of condition, facts as JSON on standard input."""

    command: tuple[str, ...] = ()
    wait_seconds: float = 20.0


class Settings(Section, frozen=True, kw_only=True):
    """The whole file. stop is empty until configured: nothing is ever stopped by default.

    scheme: how the solver marches, for `limit`; None where the file does not say.
    """

    snapshots: SnapshotSpec
    run: RunSection = RunSection()
    fields: dict[str, FieldSpec] = {}
    histories: dict[str, HistorySpec] = {}
    checkpoints: CheckpointSection = CheckpointSection()
    sketch: SketchSpec = SketchSpec()
    estimate: EstimateSection = EstimateSection()
    alarm: AlarmSection = AlarmSection()
    pins: PinSection = PinSection()
    stop: tuple[StopStep, ...] = ()
    notify: NotifySection = NotifySection()
    scheme: SchemeSpec | None = None


def load(path: Path, overrides: Mapping[str, Any] | None = None, watching: bool = True) -> Settings:
    """The settings in the file at `path`.

    Paths in them stay as written: relative ones start from the file's folder (see `watch_spec` and
    `log_path`). overrides: tables as in the file, which win over it. watching: whether snapshots
    are going to be watched, so that the file must say which. Raises SettingsError that tells every
    problem at once.
    """
    try:
        with path.open("rb") as file:
            data = file.read(_LARGEST_FILE + 1)
    except FileNotFoundError as error:
        remedy = "`stepwarden scout FOLDER` proposes one"
        raise SettingsError("there is no such settings file", str(path), remedy) from error
    except OSError as error:
        raise SettingsError(f"cannot be read ({error.strerror})", str(path)) from error
    if len(data) > _LARGEST_FILE:
        raise SettingsError("is too long for a settings file", str(path), "is it the right one?")
    try:
        tables = tomllib.loads(data.decode("utf-8-sig"))
    except UnicodeDecodeError as error:
        raise SettingsError("is not text in UTF-8", str(path), "is it the right file?") from error
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        what = str(error) if isinstance(error, tomllib.TOMLDecodeError) else "too deeply nested"
        raise SettingsError(f"is not valid TOML: {what}", str(path)) from error
    if not watching:
        tables.setdefault("snapshots", {"pattern": "*"})
    return _settings(_merged(tables, overrides or {}), str(path))


def from_options(
    patterns: Iterable[str],
    fields: Iterable[str] = (),
    overrides: Mapping[str, Any] | None = None,
    *,
    log: str | None = None,
) -> Settings:
    """Settings without a file: `patterns` to watch, names of `fields` to judge (none: all).

    overrides: tables as in the file, which win over the rest. Raises SettingsError like `load`.
    """
    tables: dict[str, Any] = {
        "snapshots": {"pattern": list(patterns)},
        "fields": {name: {} for name in fields},
        "run": {} if log is None else {"log": log},
    }
    return _settings(_merged(tables, overrides or {}), "options")


def checked(settings: Settings, source: str = "options") -> Settings:
    """`settings` put together from parts. Raises SettingsError where a value breaks a rule."""
    sections = {name: getattr(settings, name) for name in settings.__struct_fields__}
    raise_all(broken_rules(sections), source)
    return settings


def watch_spec(settings: Settings, folder: Path) -> WatchSpec:
    """What the reading process needs of the settings; relative patterns start from `folder`."""
    return WatchSpec(
        folder=os.path.abspath(folder),
        snapshots=settings.snapshots,
        fields=settings.fields,
        sketch=settings.sketch,
        histories=settings.histories,
    )


def log_path(settings: Settings, folder: Path) -> Path:
    """The growth log; a relative one starts from `folder`, that of the settings file."""
    return Path(os.path.abspath(folder / settings.run.log))


def _settings(tables: Mapping[str, Any], source: str) -> Settings:
    problems: list[Problem] = []
    # Without its one required section the file still gets a full report.
    tables = {**tables, "snapshots": tables.get("snapshots", {})}
    sections = convert_keys(tables, Settings, problems)
    raise_all([*problems, *broken_rules(sections)], source)
    return Settings(**sections)


def _merged(tables: Mapping[str, Any], over: Mapping[str, Any]) -> dict[str, Any]:
    """`tables` with the values of `over` put into them, section by section."""
    out = dict(tables)
    for key, value in over.items():
        below = out.get(key)
        if isinstance(value, Mapping) and isinstance(below, Mapping):
            value = _merged(below, value)
        out[key] = value
    return out
