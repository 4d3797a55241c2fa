"""A file far larger than a slab is read in memory that does not grow with it."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from tests.probes.formats.writers import FORMS, Form

# Peak resident size of reading a field of so many megabytes in slabs of one, and summing it up.
_CODE = """
import resource, sys
from pathlib import Path
from probes.formats import open_snapshot
from probes.spec import RawSpec, SnapshotSpec
path, rows = Path(sys.argv[1]), int(sys.argv[2])
raw = RawSpec(fields=("u",), shape=(rows, 1024), dtype="<f4") if path.suffix == ".bin" else None
with open_snapshot(path, SnapshotSpec(pattern=("*",), raw=raw)) as snapshot:
    assert [f.name for f in snapshot.contents().fields] == ["u"]
    total = sum(float(slab[0, 0]) for slab in snapshot.slabs("u", 0, 256))
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""
_LARGE, _SMALL = 24_576, 256


def peak_mb(path: Path, rows: int) -> float:
    words = [sys.executable, "-c", _CODE, str(path), str(rows)]
    return int(subprocess.run(words, capture_output=True, check=True, text=True).stdout) / 1024


@pytest.mark.parametrize(
    "form",
    [f for f in FORMS if f.name in ("npy", "npz", "hdf5", "hdf5-packed", "netcdf3", "raw")],
    ids=lambda form: form.name,
)
def test_peak_memory(form: Form, tmp_path: Path) -> None:
    """A hundred megabytes take at most a quarter of that more than one megabyte does."""
    peaks = []
    for rows in (_SMALL, _LARGE):
        path = tmp_path / f"u{form.suffix}"
        if form.name == "hdf5-packed":
            import h5py

            with h5py.File(path, "w") as file:
                values = np.zeros((rows, 1024), "<f4")
                file.create_dataset("u", data=values, chunks=(64, 1024), compression="gzip")
        else:
            form.write(path, np.zeros((rows, 1024), "<f4"))
        if form.name == "npy":
            path = path.rename(tmp_path / "u.npy")
        peaks.append(peak_mb(path, rows))
        path.unlink()
    assert peaks[1] - peaks[0] < 24.0
