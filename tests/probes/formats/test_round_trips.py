"""What a format's own library writes, a reader hands out again, whatever the slab thickness."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as nps

from tests.probes.formats.writers import FORMS, Array, Form, contents, read

by_form = pytest.mark.parametrize("form", FORMS, ids=lambda form: form.name)


@st.composite
def arrays(draw: st.DrawFn, dtypes: tuple[str, ...]) -> Array:
    """Arrays of one to three axes with two cells at least, any bits that are numbers."""
    shape = draw(nps.array_shapes(min_dims=1, max_dims=3, min_side=1, max_side=7))
    if np.prod(shape) < 2:
        shape = (2, *shape[1:])
    return draw(nps.arrays(np.dtype(draw(st.sampled_from(dtypes))), shape))


@by_form
@settings(max_examples=25, deadline=None, suppress_health_check=list(HealthCheck))
@given(data=st.data(), planes=st.integers(1, 9))
def test_values_come_back(form: Form, data: st.DataObject, planes: int, tmp_path: Path) -> None:
    """Bit by bit, NaN and infinity included, as numpy, h5py, netCDF4 and SciPy wrote them."""
    values = data.draw(arrays(form.dtypes))
    path = tmp_path / f"u{form.suffix}"
    form.write(path, values)
    back = read(path, "u", planes, **form.settings(values))
    np.testing.assert_array_equal(back, values)
    assert np.signbit(back.real).tolist() == np.signbit(values.real).tolist()


@pytest.mark.parametrize("name", ["npy", "npz"])
@pytest.mark.parametrize("planes", [1, 2, 50])
def test_fortran_order(name: str, planes: int, tmp_path: Path) -> None:
    """Stored first axis fastest, read in storage order, the same array comes out."""
    form = next(f for f in FORMS if f.name == name)
    values = np.asfortranarray(np.arange(60.0).reshape(3, 4, 5))
    path = tmp_path / f"u{form.suffix}"
    form.write(path, values)
    (info,) = contents(path).fields
    assert info.fortran
    assert info.stored_shape == (5, 4, 3)
    np.testing.assert_array_equal(read(path, "u", planes), values)


@by_form
def test_the_buffer_may_be_used_again(form: Form, tmp_path: Path) -> None:
    """A field is read twice from one open file with the same result."""
    from probes.formats import open_snapshot
    from tests.probes.formats.writers import spec

    values = np.arange(40).reshape(8, 5).astype(form.dtypes[-1])
    path = tmp_path / f"u{form.suffix}"
    form.write(path, values)
    with open_snapshot(path, spec(**form.settings(values))) as snapshot:
        once = [slab.copy() for slab in snapshot.slabs("u", 0, 3)]
        again = [slab.copy() for slab in snapshot.slabs("u", 0, 3)]
    np.testing.assert_array_equal(np.concatenate(once), np.concatenate(again))


@by_form
def test_fields_that_are_not_there(form: Form, tmp_path: Path) -> None:
    """Another field, or a later record, is an error of reading, not of Python."""
    from probes.errors import ReadError
    from probes.formats import open_snapshot
    from tests.probes.formats.writers import spec

    values = np.ones((4, 4), form.dtypes[-1])
    path = tmp_path / f"u{form.suffix}"
    form.write(path, values)
    with open_snapshot(path, spec(**form.settings(values))) as snapshot:
        with pytest.raises(ReadError):
            list(snapshot.slabs("nothing", 0, 2))
        if not form.name.startswith(("hdf5", "netcdf4")):
            with pytest.raises(ReadError):
                list(snapshot.slabs("u", 1, 2))
