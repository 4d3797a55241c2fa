"""What `scout` says: a description for a person, and a commented starter ``stepwarden.toml``."""

from __future__ import annotations

import json
import posixpath

from monitor.namereading import stride
from monitor.scout import MOST_FILES, Scouted, Sight

# A component axis is short, and much shorter than the grid axes beside it.
_MOST_COMPONENTS = 4
_MUCH_LONGER = 4


def describe(scouted: Scouted) -> str:
    """What was understood, in plain lines."""
    lines = [f"{scouted.folder}: {scouted.listed} file(s) seen"]
    if scouted.cut:
        lines.append(f"only the first {MOST_FILES} were looked at; name a folder further down")
    for sight in scouted.sights:
        lines += ["", *_sight_lines(sight)]
    if scouted.snapshots is None:
        lines += ["", "nothing here could be read as a snapshot"]
    else:
        lines += ["", f"to watch: {scouted.snapshots.group.pattern}"]
        if scouted.checkpoints:
            lines.append(f"to restart from: {scouted.checkpoints.group.pattern}")
    return "\n".join(lines)


def propose(scouted: Scouted, base: str = "") -> str:
    """A ``stepwarden.toml`` that `monitor.config.load` accepts. Needs `scouted.snapshots`.

    base: the scouted folder as seen from the file's own, "" if it will lie there.
    """
    sight = scouted.snapshots
    if sight is None or sight.contents is None:
        raise ValueError("there is nothing to propose")
    contents = sight.contents
    out = [
        "# Proposed by stepwarden scout from what lay in this folder; check every line.",
        "# Lines that begin with # show what else can be set.",
        "",
        "[run]",
        f"name = {_text(scouted.folder.resolve().name)}",
        "# pid = 4711                # the run ends when this process ends",
        "# last_step = 100000        # or at this step",
        '# end_file = "run-ended"    # or when this file appears',
        "# idle_seconds = 3600       # or after this long without a snapshot",
        "",
        "[snapshots]",
        f"# {_summary(sight)}",
        f"pattern = {_text(posixpath.join(base, sight.group.pattern))}",
    ]
    if sight.group.parts:
        out.append(f"parts = {len(sight.group.parts)}                  # files per snapshot")
    if contents.growing:
        out.append('record_axis = "yes"         # each new record is a snapshot')
    if sight.group.dated:
        out.append("# the names carry a time, which is no step; the files may tell the step inside")
    out += ["# step_factor = 1           # solver steps per number in the name", ""]
    for name, shape, dtype in contents.fields:
        out += _field_lines(name, shape, dtype)
    if scouted.checkpoints:
        out += [
            "[checkpoints]",
            "# what the solver restarts from: these are pinned",
            f"pattern = {_text(posixpath.join(base, scouted.checkpoints.group.pattern))}",
            "",
        ]
    out += [
        "[pins]",
        "budget_gb = 20.0            # of all copies of checkpoints",
        "",
        "# Nothing is stopped until a section like this is there; see guard --show-stop.",
        "# [[stop]]",
        '# do = "file"',
        '# path = "STOP"             # a file that your solver looks for',
        "# wait_seconds = 60",
        "",
    ]
    return "\n".join(out)


def _sight_lines(sight: Sight) -> list[str]:
    if sight.contents is None:
        count = len(sight.group.names)
        return [f"{sight.group.pattern}  ({count} file(s))", f"  not understood: {sight.failure}"]
    lines = [sight.group.pattern, f"  {_summary(sight)}"]
    for name, shape, dtype in sight.contents.fields:
        lines.append(f"  {name}: {_cells(shape)}, {dtype}")
    if sight.group.dated:
        lines.append("  the names carry a time, which is no step")
    return lines + [f"  note: {note}" for note in sight.contents.notes]


def _summary(sight: Sight) -> str:
    contents, steps = sight.contents, sight.steps
    parts = [f"{contents.format if contents else 'unknown'}, {sight.snapshots} snapshot(s)"]
    if steps:
        parts.append(f"steps {steps[0]} to {steps[-1]}")
    if stride(steps):
        parts.append(f"every {stride(steps)}")
    if sight.group.parts:
        parts.append(f"{len(sight.group.parts)} parts each")
    if contents and contents.growing:
        parts.append("one growing file")
    if sight.cadence is not None:
        parts.append(f"about {sight.cadence:.3g} s apart")
    return ", ".join(parts)


def _field_lines(name: str, shape: tuple[int, ...], dtype: str) -> list[str]:
    out = [f"[fields.{_text(name)}]", f"# {_cells(shape)}, {dtype}"]
    components = _components(shape)
    if components:
        out.append(f'components = "{components}"')
    elif len(shape) > 3:
        out.append("grid = false                # more than three axes: judged by its bulk only")
    return [
        *out,
        "# min = 0.0                 # bounds that the field must keep",
        "# spacing = [0.1, 0.1]      # cell size per axis",
        "",
    ]


def _components(shape: tuple[int, ...]) -> str:
    """ "first" or "last" where that axis is so short that it must hold components, else ""."""
    if len(shape) < 2:
        return ""
    for where, short, others in (("first", shape[0], shape[1:]), ("last", shape[-1], shape[:-1])):
        if short <= _MOST_COMPONENTS and min(others) >= _MUCH_LONGER * short:
            return where
    return ""


def _cells(shape: tuple[int, ...]) -> str:
    return " x ".join(map(str, shape)) + " cells"


def _text(value: str) -> str:
    """A TOML basic string: what JSON escapes within the basic plane is valid TOML too. Bytes of a
    name that are no UTF-8 become "?", the wildcard of one character."""
    valid = value.encode("utf-8", "replace").decode("utf-8")
    return json.dumps(valid, ensure_ascii=False).replace("\x7f", "\\u007f")
