"""The file reference entries are kept in: netCDF-4, every variable with a leading dimension `entry`, and a seal.

In:  a path; datasets of single entries.
Out: the same datasets, checked. A write makes a new file and renames it, so the file is whole at any moment. Behind the
     last byte of the netCDF file stands the SHA-256 of all before it; what a reader finds changed it refuses, before
     any other library sees it.

Entries differ in their sizes and variables: in the file all are padded to the largest with nan, and `layout` (JSON)
says what each really has. Coordinates that only count are not stored but made again.
"""

import hashlib
import json
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.errors import DataError, InputError, OutputError
from gutz.scan.fields import suggestion
from gutz.scan.paths import replace_durably

ENGINE: Final = "h5netcdf"
_SEAL: Final = b"\ngutz references 1, sha256 "
STORED: Final = Path(__file__).parent.parent / "data" / "references.nc"
"""The set that comes with gutz."""

_COUNTED: Final[dict[str, Callable[[int], NDArray[Any]]]] = {
    "distance": lambda n: np.arange(n),
    "span": lambda n: np.arange(1, n + 1),
    "species": lambda n: np.arange(1, n + 1),
    "species_": lambda n: np.arange(1, n + 1),
    "k": lambda n: 2 * np.pi * np.arange(n) / n,
    "k_": lambda n: 2 * np.pi * np.arange(n) / n,
}
"""Coordinates that follow from the length of their dimension."""


def read_all(path: Path) -> dict[str, xr.Dataset]:
    """Every entry by name, in the order of making. Raises DataError for a file or an entry that is damaged."""
    whole = _open(path)
    try:
        layouts = json.loads(whole.attrs["layout"])
        return {str(name): _entry(whole, number, layouts[name]) for number, name in enumerate(whole["entry"].values)}
    except Exception as error:  # a layout that does not fit its arrays fails in many ways
        raise DataError(f"{path.name} is not a file this version of gutz can read ({error})") from None


def read(path: Path, name: str) -> xr.Dataset:
    """Read one entry. Raises InputError for an unknown name, DataError for a damaged file."""
    entries = read_all(path)
    if name not in entries:
        raise InputError(f'"{name}" is not an entry of {path.name}{suggestion(name, tuple(entries))}')
    return entries[name]


def write(path: Path, name: str, dataset: xr.Dataset) -> None:
    """Add an entry, or replace the one of its name. Raises OutputError if the file cannot be written."""
    held = read_all(path) if path.exists() else {}
    write_all(path, {**held, name: dataset})


def write_all(path: Path, entries: Mapping[str, xr.Dataset]) -> None:
    """Write a whole file anew. Raises OutputError if it cannot be written."""
    bare = {name: _bare(dataset) for name, dataset in entries.items()}
    packed = _packed(bare)
    temporary = path.with_name(path.name + ".partial")
    encoding: dict[Any, dict[str, Any]] = {
        name: {"zlib": True, "complevel": 4, "shuffle": True, "fletcher32": True, "_FillValue": None}
        for name, array in packed.variables.items()
        if array.dtype.kind == "f"
    }
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        packed.to_netcdf(temporary, engine=ENGINE, encoding=encoding)
        with temporary.open("r+b") as file:
            seal = _SEAL + hashlib.sha256(file.read()).hexdigest().encode()
            file.write(seal)
        replace_durably(temporary, path)
    except OSError as error:
        raise OutputError(f"{path.name} cannot be written ({(error.strerror or 'disk error').lower()})") from None
    finally:
        temporary.unlink(missing_ok=True)


def _open(path: Path) -> xr.Dataset:
    """The packed dataset, if the seal is right."""
    try:
        raw = path.read_bytes()
    except FileNotFoundError:
        raise DataError(f"{path.name} does not exist; gutz reference make writes one") from None
    except OSError as error:
        raise DataError(f"{path.name} cannot be read ({(error.strerror or 'disk error').lower()})") from None
    body, mark, stated = raw.rpartition(_SEAL)
    if not mark:
        raise DataError(f"{path.name} is not a whole file of reference entries (its checksum is missing)")
    if hashlib.sha256(body).hexdigest().encode() != stated:
        raise DataError(f"{path.name} is damaged (its checksum does not match); restore it")
    try:
        with xr.open_dataset(path, engine=ENGINE, mask_and_scale=False, decode_times=False) as opened:
            return opened.load()
    except Exception as error:  # the HDF5 layer raises many kinds
        raise DataError(f"{path.name} is not a file this version of gutz can read ({error})") from None


def _bare(dataset: xr.Dataset) -> xr.Dataset:
    """Without the coordinates that are made again."""
    return dataset.drop_vars([name for name in _COUNTED if name in dataset.variables])


def _packed(entries: Mapping[str, xr.Dataset]) -> xr.Dataset:
    """All entries in one dataset, padded with nan."""
    sizes: dict[str, int] = {}
    for dataset in entries.values():
        for dim, size in dataset.sizes.items():
            sizes[str(dim)] = max(sizes.get(str(dim), 0), size)
    data: dict[str, Any] = {}
    for name in dict.fromkeys(str(name) for dataset in entries.values() for name in dataset.variables):
        first = next(dataset.variables[name] for dataset in entries.values() if name in dataset.variables)
        dims = tuple(map(str, first.dims))
        block = np.full((len(entries), *(sizes[dim] for dim in dims)), np.nan)
        for number, dataset in enumerate(entries.values()):
            if name in dataset.variables:
                values = dataset.variables[name].values
                block[number, ...][tuple(slice(0, size) for size in values.shape)] = values
        data[name] = (("entry", *dims), block, dict(first.attrs))
    layout = {name: _layout(dataset) for name, dataset in entries.items()}
    packed = xr.Dataset(data, coords={"entry": list(entries)})
    return packed.assign_attrs(layout=json.dumps(layout, sort_keys=True))


def _layout(dataset: xr.Dataset) -> dict[str, Any]:
    return {
        "sizes": {str(dim): size for dim, size in dataset.sizes.items()},
        "variables": {str(name): array.dtype.str for name, array in dataset.variables.items()},
        "attributes": _plain(dataset.attrs),
    }


def _entry(whole: xr.Dataset, number: int, layout: dict[str, Any]) -> xr.Dataset:
    """One entry again as it was before padding."""
    sizes: dict[str, int] = layout["sizes"]
    data: dict[str, Any] = {}
    for name, dtype in layout["variables"].items():
        array = whole.variables[name]
        dims = [str(dim) for dim in array.dims[1:]]
        values = array.values[number, ...][tuple(slice(0, sizes[dim]) for dim in dims)].astype(np.dtype(dtype))
        data[name] = (dims, values, dict(array.attrs))
    dataset = xr.Dataset(data, attrs=layout["attributes"])
    coords = {dim: make(sizes[dim]) for dim, make in _COUNTED.items() if dim in dataset.dims}
    return dataset.assign_coords(coords)


def _plain(attributes: Mapping[Any, Any]) -> dict[str, Any]:
    return {str(key): value.item() if isinstance(value, np.generic) else value for key, value in attributes.items()}
