"""netCDF files: round trip (K1, 40 examples here), same bytes (K12), damage found, other readers agree."""

import time
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray as xr
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from gutz.errors import DataError, OutputError
from gutz.scan.export import read_netcdf, write_netcdf
from gutz.scan.schema import to_attributes

NAMES = st.text(st.characters(categories=["L", "N"]), min_size=1, max_size=12)
ATTRIBUTES = st.dictionaries(
    NAMES,
    st.one_of(
        st.text(st.characters(exclude_categories=["Cs", "Cc"]), min_size=1, max_size=20),
        st.integers(-(2**31), 2**31 - 1),
        st.floats(allow_nan=False),
        st.booleans(),
        st.none(),
        st.lists(st.integers(-100, 100), min_size=1, max_size=4),
        st.dictionaries(NAMES, st.integers(-5, 5), max_size=2),
    ),
    max_size=4,
)
DTYPES = st.sampled_from(["float64", "float32", "int8", "int16", "int32", "int64"])
ARRAYS = DTYPES.flatmap(
    lambda dtype: hnp.arrays(
        dtype,
        hnp.array_shapes(min_dims=0, max_dims=3, min_side=0, max_side=4),
        elements=hnp.from_dtype(np.dtype(dtype), allow_subnormal=True),
    )
)


@settings(
    max_examples=40,
    derandomize=True,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(array=ARRAYS, name=NAMES, attributes=ATTRIBUTES)
def test_round_trip_is_exact(tmp_path, array, name, attributes):
    dims = tuple(f"d{i}" for i in range(array.ndim))
    dataset = xr.Dataset({name: (dims, array, attributes)}, attrs=attributes)
    path = tmp_path / "x.nc"
    write_netcdf(dataset, path)
    back = read_netcdf(path)
    assert back[name].dtype == array.dtype
    assert back[name].values.tobytes() == array.tobytes()
    expected = to_attributes(attributes)
    for found in (back.attrs, back[name].attrs):
        assert found.keys() == expected.keys()
        # netCDF knows no lists of one number: they come back as the number.
        assert all(np.array_equal(np.squeeze(found[key]), np.squeeze(expected[key])) for key in expected)


def dataset():
    values = np.linspace(0, 1, 600).reshape(20, 30)
    return xr.Dataset(
        {"filling": (("mu", "t"), values, {"units": "1", "long_name": "Filling"})},
        coords={"mu": np.arange(20.0), "t": np.arange(30.0)},
        attrs={"created": "2026-01-01T00:00:00+00:00", "axes": ["mu", "t"]},
    )


def test_same_dataset_same_bytes(tmp_path):
    write_netcdf(dataset(), tmp_path / "a.nc")
    time.sleep(1.1)
    write_netcdf(dataset(), tmp_path / "b.nc")
    assert (tmp_path / "a.nc").read_bytes() == (tmp_path / "b.nc").read_bytes()


def test_an_independent_reader_sees_the_numbers(tmp_path):
    """K10: h5py reads values and units straight from the file."""
    write_netcdf(dataset(), tmp_path / "a.nc")
    with h5py.File(tmp_path / "a.nc") as file:
        assert np.array_equal(file["filling"][:], dataset()["filling"].values)
        assert file["filling"].attrs["units"] == "1"
        assert file["filling"].fletcher32


# h5netcdf's own clean-up stumbles over files it could not open; nothing of ours.
DAMAGED = pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")


@DAMAGED
def test_no_flipped_bit_is_read_as_a_number(tmp_path):
    """K5: 60 single-bit flips over the file; each is refused or harmless, never a wrong number."""
    path = tmp_path / "a.nc"
    write_netcdf(dataset(), path)
    whole = path.read_bytes()
    rng = np.random.default_rng(5)
    refused = 0
    for place in rng.integers(0, len(whole), 60):
        broken = bytearray(whole)
        broken[place] ^= 1 << int(rng.integers(8))
        path.write_bytes(broken)
        try:
            found = read_netcdf(path)
        except DataError:
            refused += 1
        else:
            if "filling" in found:
                assert np.array_equal(found["filling"].values, dataset()["filling"].values)
                assert all(np.array_equal(found[d], dataset()[d]) for d in ("mu", "t") if d in found)
    # Most bytes of so small a file are unused; measured: 13 refusals here.
    assert refused >= 10


@DAMAGED
def test_truncated_files_are_refused(tmp_path):
    path = tmp_path / "a.nc"
    write_netcdf(dataset(), path)
    whole = path.read_bytes()
    for fraction in (0, 0.1, 0.5, 0.9):
        path.write_bytes(whole[: int(len(whole) * fraction)])
        with pytest.raises(DataError, match="a.nc cannot be read"):
            read_netcdf(path)


def test_failure_leaves_the_old_file(tmp_path, monkeypatch):
    path = tmp_path / "a.nc"
    write_netcdf(dataset(), path)
    before = path.read_bytes()

    def full(self, target):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "replace", full)
    with pytest.raises(OutputError, match="no space left"):
        write_netcdf(dataset() * 2, path)
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["a.nc"]
