"""Cut and damaged files: only "not yet", "refused" or "unreadable", never a crash or a wrong size.

Truncation and bit errors are what a full disk, a killed solver or a copy in flight leave behind.
"""

from __future__ import annotations

import contextlib
from collections.abc import Iterable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from probes.errors import ReadError
from tests.probes.formats.writers import FORMS, Form, read

by_form = pytest.mark.parametrize("form", FORMS, ids=lambda form: form.name)
VALUES = np.arange(1.0, 241.0).reshape(12, 20)


def written(form: Form, folder: Path) -> tuple[Path, bytes]:
    path = folder / f"u{form.suffix}"
    form.write(path, VALUES.astype("<f4" if "<f4" in form.dtypes else form.dtypes[0]))
    return path, path.read_bytes()


def lengths(size: int) -> Iterable[int]:
    """Every length near both ends, and some in between."""
    return sorted({*range(min(size, 150)), *range(0, size, 97), *range(max(0, size - 60), size)})


@by_form
def test_cut_files_are_told_from_whole_ones(form: Form, tmp_path: Path) -> None:
    """A prefix of a file is never taken for the file: it is refused, or for some formats (whose
    data end before the file does) it gives the very values."""
    path, data = written(form, tmp_path)
    more = form.settings(VALUES.astype("<f4"))
    whole = read(path, "u", **more)
    refused = 0
    for n in lengths(len(data)):
        path.write_bytes(data[:n])
        try:
            np.testing.assert_array_equal(read(path, "u", **more), whole)
        except (ReadError, StopIteration):
            refused += 1
    assert refused >= len(list(lengths(len(data)))) - 4


@by_form
@settings(max_examples=60, deadline=None, suppress_health_check=list(HealthCheck))
@given(places=st.lists(st.tuples(st.floats(0, 1), st.integers(0, 255)), min_size=1, max_size=4))
def test_damaged_headers(form: Form, places: list[tuple[float, int]], tmp_path: Path) -> None:
    """Wrong bytes among the first 600: whatever can still be read is read, the rest is refused.

    HDF5 is left to the reading process, which its library may take along.
    """
    if form.name.startswith(("hdf5", "netcdf4")):
        return
    path, data = written(form, tmp_path)
    broken = bytearray(data)
    for where, value in places:
        broken[int(where * (min(600, len(data)) - 1))] = value
    path.write_bytes(bytes(broken))
    with contextlib.suppress(ReadError, StopIteration):
        read(path, "u", **form.settings(VALUES.astype("<f4")))


@by_form
def test_what_goes_while_it_is_looked_at(form: Form, tmp_path: Path) -> None:
    """A file that has gone is "not yet", like one that is still to come."""
    from probes.errors import NotYet

    with pytest.raises(NotYet):
        read(tmp_path / f"gone{form.suffix}", "u", **form.settings(VALUES))
