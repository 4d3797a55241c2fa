"""Which reader a file gets: content before name, and clear words where there is none."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from probes.errors import NotYet, Refused
from probes.formats import find_reader, readers
from tests.probes.formats.writers import FORMS, Form, spec


@pytest.mark.parametrize("form", FORMS, ids=lambda form: form.name)
def test_content_decides(form: Form, tmp_path: Path) -> None:
    """Under a wrong suffix every file with a header is known by its first bytes."""
    path = tmp_path / "anything.dat"
    form.write(tmp_path / f"u{form.suffix}", np.ones((4, 4), form.dtypes[-1]))
    (tmp_path / f"u{form.suffix}").rename(path)
    if form.name == "raw":
        with pytest.raises(Refused, match="no reader recognises"):
            find_reader(path, spec())
        return
    kin = {"netcdf4": "hdf5"}.get(form.name, form.name.split("-")[0])
    assert find_reader(path, spec()).name == kin


def test_settings_name_a_reader(tmp_path: Path) -> None:
    """A named reader is taken whatever the file holds; an unknown name lists the known ones."""
    path = tmp_path / "u.npy"
    np.save(path, np.ones(4))
    assert find_reader(path, spec(format="hdf5")).name == "hdf5"
    with pytest.raises(Refused, match="no reader 'hdf6'") as caught:
        find_reader(path, spec(format="hdf6"))
    assert "netcdf3" in caught.value.remedy


@pytest.mark.parametrize("data", [b"", b"\0" * 100])
def test_a_file_that_is_only_begun(data: bytes, tmp_path: Path) -> None:
    """Empty, or zeros where the header will be: not yet."""
    path = tmp_path / "u.h5"
    path.write_bytes(data)
    with pytest.raises(NotYet):
        find_reader(path, spec())


def test_all_readers_can_be_had() -> None:
    """Our own come first and in a fixed order."""
    own = ["npy", "npz", "hdf5", "netcdf3", "raw"]
    assert [name for name in readers() if name in own] == own
