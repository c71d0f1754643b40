"""A finished run as one netCDF-4 file, for colleagues and other programs.

In:  a dataset and the path of the file to make.
Out: the file, whole or not at all: written beside its final name, synced, renamed. The same dataset always
     gives the same bytes. Checksums (fletcher32) are on, because plain HDF5 reads damage back as numbers.
"""

from pathlib import Path
from typing import Any, Final

import xarray as xr

from gutz.errors import DataError, OutputError
from gutz.scan.paths import replace_durably
from gutz.scan.schema import to_attributes

ENGINE: Final = "h5netcdf"


def write_netcdf(dataset: xr.Dataset, path: Path) -> None:
    """Write a dataset as netCDF-4. Raises OutputError if the file cannot be written."""
    clean = dataset.copy()
    clean.attrs = to_attributes(dataset.attrs)
    for array in clean.variables.values():
        array.attrs = to_attributes(array.attrs)
        array.encoding = {}
    encoding: dict[Any, dict[str, Any]] = {name: _encoding(array) for name, array in clean.variables.items()}
    temporary = path.with_name(path.name + ".partial")
    try:
        clean.to_netcdf(temporary, engine=ENGINE, format="NETCDF4", encoding=encoding)
        replace_durably(temporary, path)
    except OSError as error:
        raise OutputError(f"{path.name} cannot be written ({(error.strerror or 'disk error').lower()})") from None
    finally:
        temporary.unlink(missing_ok=True)


def read_netcdf(path: Path) -> xr.Dataset:
    """Read a file back, wholly. Raises DataError if it is damaged."""
    try:
        with xr.open_dataset(
            path, engine=ENGINE, mask_and_scale=False, decode_times=False, decode_timedelta=False
        ) as dataset:
            return dataset.load()
    except Exception as error:  # the HDF5 layer raises many kinds
        raise DataError(f"{path.name} cannot be read ({str(error).splitlines()[0][:100]})") from None


def _encoding(array: xr.Variable) -> dict[str, Any]:
    """Checksum and light compression; scalars and empty arrays have no chunks to put them on."""
    if array.ndim == 0 or array.size == 0 or array.dtype.kind not in "iuf":
        return {"_FillValue": None} if array.dtype.kind in "iuf" else {}
    return {"zlib": True, "complevel": 1, "fletcher32": True, "shuffle": True, "_FillValue": None}
