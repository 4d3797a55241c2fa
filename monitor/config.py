"""``stepwarden.toml``: strictly typed settings, all problems told in one report."""

from __future__ import annotations

from typing import Literal

import msgspec

from probes.spec import FieldSpec, SketchSpec, SnapshotSpec


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
    held: snapshots over which a Ritz pair must persist.
    calm: quiet snapshots after which `swelling` falls back.
    """

    run_length: float = 1e5
    decades: float = 2.0
    straight: float = 0.04
    cells: float = 4.5
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
    """The whole file. stop is empty until configured: nothing is ever stopped by default."""

    snapshots: SnapshotSpec
    run: RunSection = RunSection()
    fields: dict[str, FieldSpec] = {}
    checkpoints: CheckpointSection = CheckpointSection()
    sketch: SketchSpec = SketchSpec()
    estimate: EstimateSection = EstimateSection()
    alarm: AlarmSection = AlarmSection()
    pins: PinSection = PinSection()
    stop: tuple[StopStep, ...] = ()
    notify: NotifySection = NotifySection()
