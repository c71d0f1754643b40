"""The file reference entries are kept in: netCDF-4, one group per entry, a checksum on each.

In:  a path; datasets of single entries.
Out: the same datasets, checked. A write adds to a copy and renames it, so the file is whole at any moment; what
     a reader finds changed since then (checksum), it refuses.
"""

import hashlib
import json
import shutil
from collections.abc import Iterable
from pathlib import Path
from typing import Any, Final

import h5netcdf
import numpy as np
import xarray as xr

from gutz.errors import DataError, InputError, OutputError
from gutz.scan.fields import suggestion
from gutz.scan.paths import replace_durably

ENGINE: Final = "h5netcdf"
FORMAT: Final = "gutz references 1"
STORED: Final = Path(__file__).parent.parent / "data" / "references.nc"
"""The set that comes with gutz."""

_CHECKSUM = "sha256"
_COMPRESSED = 2000


def names(path: Path) -> list[str]:
    """Names of all entries, in the order of making. Raises DataError if the file cannot be read as ours."""
    try:
        with h5netcdf.File(path, "r") as file:
            if file.attrs.get("format") != FORMAT:
                raise DataError(f"{path.name} is not a file of reference entries (its format is not {FORMAT!r})")
            listed = json.loads(str(file.attrs["entries"]))
            return [str(name) for name in listed]
    except DataError:
        raise
    except FileNotFoundError:
        raise DataError(f"{path.name} does not exist; gutz reference make writes one") from None
    except Exception as error:  # the HDF5 layer raises many kinds
        raise DataError(f"{path.name} cannot be read ({_first_line(error)})") from None


def read(path: Path, name: str) -> xr.Dataset:
    """Read one entry and check it. Raises InputError for an unknown name, DataError for a damaged entry."""
    known = names(path)
    if name not in known:
        raise InputError(f'"{name}" is not an entry of {path.name}{suggestion(name, tuple(known))}')
    try:
        with xr.open_dataset(path, group=name, engine=ENGINE, mask_and_scale=False, decode_times=False) as dataset:
            loaded = dataset.load()
    except Exception as error:  # the HDF5 layer raises many kinds
        raise DataError(f'{path.name}: entry "{name}" cannot be read ({_first_line(error)})') from None
    stated = loaded.attrs.pop(_CHECKSUM, "")
    if stated != checksum(loaded):
        raise DataError(f'{path.name}: entry "{name}" is damaged (checksum does not match); restore the file')
    return loaded


def read_all(path: Path) -> dict[str, xr.Dataset]:
    """Every entry by name. Raises DataError for the first that is damaged."""
    return {name: read(path, name) for name in names(path)}


def write(path: Path, name: str, dataset: xr.Dataset) -> None:
    """Add an entry, or replace the one of its name. Raises OutputError if the file cannot be written."""
    held = names(path) if path.exists() else []
    temporary = path.with_name(path.name + ".partial")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        if name in held or not held:
            kept = [(other, read(path, other) if other != name else dataset) for other in held]
            _write_new(temporary, kept if name in held else [(name, dataset)])
        else:
            shutil.copyfile(path, temporary)
            _append(temporary, [(name, dataset)], held)
        replace_durably(temporary, path)
    except OSError as error:
        raise OutputError(f"{path.name} cannot be written ({(error.strerror or 'disk error').lower()})") from None
    finally:
        temporary.unlink(missing_ok=True)


def write_all(path: Path, entries: Iterable[tuple[str, xr.Dataset]]) -> None:
    """Write a whole file anew. Raises OutputError if it cannot be written."""
    temporary = path.with_name(path.name + ".partial")
    try:
        _write_new(temporary, entries)
        replace_durably(temporary, path)
    except OSError as error:
        raise OutputError(f"{path.name} cannot be written ({(error.strerror or 'disk error').lower()})") from None
    finally:
        temporary.unlink(missing_ok=True)


def _write_new(path: Path, entries: Iterable[tuple[str, xr.Dataset]]) -> None:
    with h5netcdf.File(path, "w") as file:
        file.attrs["format"] = FORMAT
    _append(path, entries, [])


def _append(path: Path, entries: Iterable[tuple[str, xr.Dataset]], held: list[str]) -> None:
    listed = list(held)
    for name, dataset in entries:
        marked = dataset.assign_attrs({_CHECKSUM: checksum(dataset)})
        encoding: dict[Any, dict[str, Any]] = {v: _encoding(array) for v, array in marked.variables.items()}
        marked.to_netcdf(path, mode="a", group=name, engine=ENGINE, encoding=encoding)
        listed.append(name)
    with h5netcdf.File(path, "a") as file:
        file.attrs["entries"] = json.dumps(listed)


def checksum(dataset: xr.Dataset) -> str:
    """SHA-256 over every variable (name, dimensions, numbers) and attribute of an entry."""
    digest = hashlib.sha256()
    for name in sorted(map(str, dataset.variables)):
        array = dataset.variables[name]
        values = np.ascontiguousarray(array.values)
        head = [name, list(map(str, array.dims)), values.dtype.newbyteorder("<").str, list(values.shape)]
        digest.update(json.dumps(head).encode())
        digest.update(values.astype(values.dtype.newbyteorder("<")).tobytes())
        digest.update(_attributes(array.attrs))
    digest.update(_attributes({key: value for key, value in dataset.attrs.items() if key != _CHECKSUM}))
    return digest.hexdigest()


def _attributes(given: dict[Any, Any]) -> bytes:
    plain = {str(key): value.tolist() if hasattr(value, "tolist") else value for key, value in given.items()}
    return json.dumps(plain, sort_keys=True).encode()


def _encoding(array: xr.Variable) -> dict[str, Any]:
    """Compression of large arrays; in small ones its bookkeeping takes more room than it saves."""
    if array.size < _COMPRESSED or array.dtype.kind not in "iuf":
        return {"_FillValue": None} if array.dtype.kind in "iuf" else {}
    return {"zlib": True, "complevel": 4, "shuffle": True, "_FillValue": None}


def _first_line(error: Exception) -> str:
    return (str(error).splitlines() or [type(error).__name__])[0][:100]
