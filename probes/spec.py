"""Settings of the reading side: which files, which fields, how to sketch them.

These are sections of ``stepwarden.toml`` and travel to the reading process as they are. All are
plain immutable records; unknown keys are refused when they are decoded.
"""

from __future__ import annotations

from typing import Literal

import msgspec


class RawSpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[snapshots.raw]``: layout of a headerless binary file.

    fields: names in file order; each fills one array of `shape`.
    shape: cells per axis, logical order.
    dtype: NumPy type string with byte order.
    order: "C" (last axis fastest) or "F" (first axis fastest).
    header_bytes: bytes to skip at the start; gap_bytes: bytes between two fields
        (record markers of Fortran sequential files: header 4, gap 8).
    """

    fields: tuple[str, ...] = ("field",)
    shape: tuple[int, ...]
    dtype: str = "<f8"
    order: Literal["C", "F"] = "C"
    header_bytes: int = 0
    gap_bytes: int = 0


class SnapshotSpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[snapshots]``: which files are watched and how a file is understood.

    pattern: one or several path patterns with the place-holders {step} (digits), {part} (letters,
        digits, "-"), {field} (a name), and * ? as usual; relative to the configuration file.
    format: a reader's name, or "auto" (content first, suffix second).
    record_axis: "auto" (unlimited leading axis), "yes" (the first axis of every field) or "no".
    step, time: where the step and time stand: "auto", "name" (file name, step only),
        "attribute:NAME", "dataset:PATH", or "none".
    step_factor: solver steps per number found (output index times this is the step).
    parts: expected number of files per snapshot with {part}; 0 means learnt.
    settle_seconds: quiet time before a file counts as complete; -1 means by file system.
    poll_seconds: longest time between two looks; 0 means adapted to the cadence.
    stale_seconds: after this long without a new snapshot the pulse is `stalled`; 0 means five
        times the usual spacing.
    """

    pattern: tuple[str, ...]
    format: str = "auto"
    record_axis: Literal["auto", "yes", "no"] = "auto"
    step: str = "auto"
    time: str = "auto"
    step_factor: int = 1
    parts: int = 0
    settle_seconds: float = -1.0
    poll_seconds: float = 0.0
    stale_seconds: float = 0.0
    raw: RawSpec | None = None


class FieldSpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[fields.NAME]``: how one field is judged.

    path: dataset or member name in the file; "" means NAME itself or any path ending in it.
    components: position of a component axis ("first", "last") or "none".
    ghost: ghost cells to cut, one number for all axes or one per axis.
    scale: size of a typical value, used to compare fields; 0 means learnt from the first snapshot.
    fill: a number that marks masked cells, besides NaN.
    mask: "learn", "none" (any non-finite value is overflow) or "declared" (a large mask is meant).
    spacing: cell size per axis in the run's units; () unknown.
    origin: coordinate of cell 0 per axis; () means zero.
    periodic: per axis; () means not known.
    grid: False for values without a grid (unstructured numbering): taken as one row of numbers
        and judged by its bulk only.
    min, max: bounds that the field must keep: a value outside is an alarm, the way there a warning.
    conserved: the sum over all cells should stay what it is; how far it drifts is told.
    growth_per_time: a physical growth rate per unit time that is expected and never alarmed.
    """

    path: str = ""
    components: Literal["none", "first", "last"] = "none"
    ghost: int | tuple[int, ...] = 0
    scale: float = 0.0
    fill: float | None = None
    mask: Literal["learn", "none", "declared"] = "learn"
    spacing: tuple[float, ...] = ()
    origin: tuple[float, ...] = ()
    periodic: tuple[bool, ...] = ()
    grid: bool = True
    min: float | None = None
    max: float | None = None
    conserved: bool = False
    growth_per_time: float = 0.0


class SketchSpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[sketch]``: the random projection.

    tile: cells per tile edge; 0 means chosen from the grid (8 to 32, at most `max_tiles` tiles).
    columns: random signs per axis of a tile; 0 means by dimension (16, 4 x 4, 3 x 3 x 3).
    seed: seed of the signs, written to the log so that a review can repeat it.
    budget_mb: largest block that may be held while reading, in MiB.
    """

    tile: int = 0
    columns: int = 0
    max_tiles: int = 4096
    seed: int = 20881
    budget_mb: int = 32


class HistorySpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[histories.NAME]``: a number that the solver prints as it goes, in a text file.

    path: the file, relative to the configuration file.
    column: which number of a line: a heading of the table (or the key of "key = value"), or the
        number of the column from 1.
    step, time: the same for step and time; "" where the file does not say. Without steps lines are
        counted.
    pattern: instead of columns, regular expressions that are tried on each line; what their groups
        named value, step and time match is taken, step and time from earlier lines too.
    step_factor: solver steps per number found.
    min, max: bounds that the number must keep.
    alarm: take exponential growth, a broken bound or a value that is not finite for an alarm of the
        run; without this they are only told.
    """

    path: str
    column: str | int = ""
    step: str | int = ""
    time: str | int = ""
    pattern: tuple[str, ...] = ()
    step_factor: int = 1
    min: float | None = None
    max: float | None = None
    alarm: bool = False


class WatchSpec(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Everything the reading process needs to know.

    folder: absolute folder that relative patterns start from.
    fields: specs by name; empty means every field that is found, with default settings.
    histories: text files to follow, by name.
    """

    folder: str
    snapshots: SnapshotSpec
    fields: dict[str, FieldSpec] = {}
    sketch: SketchSpec = SketchSpec()
    histories: dict[str, HistorySpec] = {}
