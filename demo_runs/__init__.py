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
