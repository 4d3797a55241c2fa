"""Four small explicit solvers of the invented Skerrow coastal works, whose true growth is known.

They import nothing of the rest of the project, so that their truth is independent of what is
measured. Each runs as ``python -m demo_runs.NAME --out FOLDER``.
"""

from __future__ import annotations

# Module by name, and the pattern of its files below the folder given with --out.
SOLVERS: dict[str, str] = {
    "plate": "T_{step}.npy",
    "basin": "basin_{step}.npz",
    "channel": "channel.h5",
    "pipe": "pipe_{step}.nc",
}

# Cell size along each axis of the field that is judged, m: [fields.NAME] and its lines.
_FIELDS: dict[str, str] = {
    "plate": """[fields.T]                   # temperature, K
spacing = [0.01, 0.01]       # m
""",
    "basin": """[fields.h]                   # water level, m
spacing = [10.0, 10.0]       # m

[fields.u]                   # velocity on the faces between rows, m/s
spacing = [10.0, 10.0]

[fields.v]                   # velocity on the faces between columns, m/s
spacing = [10.0, 10.0]
""",
    "channel": """[fields.dye]                 # concentration, relative
spacing = [0.5, 0.5]         # m
""",
    "pipe": """[fields.p]                   # pressure, Pa
spacing = [0.5]              # m

[fields.u]                   # velocity on the faces between cells, m/s
spacing = [0.5]
""",
}


def settings_text(name: str, out: str) -> str:
    """A whole ``stepwarden.toml`` for the solver `name` that writes into the folder `out`.

    out: as it is to stand in the file, relative to that or absolute. Raises KeyError for an unknown
    solver.
    """
    return f"""\
# Watches what python -m demo_runs.{name} writes.

[run]
name = "{name} of the Skerrow works"

[snapshots]
pattern = {_quoted(f"{out}/{SOLVERS[name]}")}

{_FIELDS[name]}
[[stop]]                     # the solver looks for this file at every snapshot
do = "file"
path = {_quoted(f"{out}/STOP")}
wait_seconds = 15
"""


def _quoted(text: str) -> str:
    """A basic string of TOML."""
    plain = text.replace("\\", "\\\\").replace('"', '\\"')
    return '"' + "".join(c if c.isprintable() else f"\\U{ord(c):08x}" for c in plain) + '"'
