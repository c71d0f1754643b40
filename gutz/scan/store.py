"""Where a scan lands while it runs: a Zarr store, one chunk of every array = one unit of work.

In:  a `Plan`, the `Document` it came from, and the numbers of one chunk at a time.
Out: a folder `data.zarr` that any Zarr or xarray reader opens; `open_run` reads it back, checked.

Rules: metadata first, then the data of a chunk, its status last; a chunk exists when its status does. Every
chunk carries a checksum, every description a seal, so damage is found and not read as numbers. One writer.
"""

import hashlib
import json
import shutil
import warnings
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import zarr
from zarr.codecs import ZstdCodec

from gutz import __version__
from gutz.errors import DataError, OutputError
from gutz.scan import schema
from gutz.scan.document import Document
from gutz.scan.paths import inside
from gutz.scan.plan import Plan, recoil_words
from gutz.scan.spec import differences
from gutz.variables import VARIABLES

NAME = "data.zarr"
_LEVEL = 3


class Store:
    """One run on disk. Make it with `create` or `reopen`; then `write` chunks and `finish`."""

    def __init__(self, path: Path, plan: Plan) -> None:
        self.path = path
        self._plan = plan
        self._fields = schema.layout(plan)
        group = zarr.open_group(path, mode="r+", use_consolidated=False)
        self._arrays = {name: _array(group, name).with_config({"write_empty_chunks": True}) for name in self._fields}

    @classmethod
    def create(cls, folder: Path, plan: Plan, document: Document, tolerances: Mapping[str, float]) -> "Store":
        """Write descriptions and coordinates of a new run. Raises OutputError if one is there already."""
        path = inside(folder, NAME)
        if path.exists():
            raise OutputError(
                f"{folder.name} holds a run already; continue it with --resume or replace it with --force"
            )
        sweep(folder)
        unfinished = inside(folder, NAME + ".partial")
        _write_descriptions(unfinished, plan, provenance(plan, document, tolerances))
        unfinished.rename(path)
        return cls(path, plan)

    @classmethod
    def reopen(cls, folder: Path, plan: Plan) -> "Store":
        """Open a run to continue it.

        Raises DataError if it is damaged or not ours, OutputError if its settings or its chunks are others.
        """
        path = inside(folder, NAME)
        sweep(folder)
        group = _open_group(path)
        theirs = str(group.attrs["config_json"])
        if group.attrs["config_sha256"] != plan.spec.sha256():
            changes = [*differences(theirs, plan.spec.canonical())]
            shown = "; ".join(changes[:5]) + (f"; and {len(changes) - 5} more" if len(changes) > 5 else "")
            raise OutputError(
                f"{folder.name} holds a run with other settings ({shown}); "
                "choose another --out or replace it with --force"
            )
        if tuple(_list(group, "chunk")) != plan.chunk:
            raise OutputError(f"{folder.name} was begun by another version of gutz; replace it with --force")
        return cls(path, plan)

    def done(self, index: Sequence[int]) -> bool:
        """True if a chunk has been written and every number of it can be read."""
        region = self._plan.region(index)
        try:
            if np.any(self._arrays["status"][region] == schema.NOT_COMPUTED):
                return False
            for name, array in self._arrays.items():
                if not _chunk_file(self.path / name, index, array.ndim).exists():
                    return False
                array[region]
        except Exception:  # whatever a damaged file makes the reader raise, the chunk is computed again
            return False
        return True

    def write(self, index: Sequence[int], values: Mapping[str, Any]) -> None:
        """Write one chunk, data first, status last; arrays of full chunk shape are cut at the grid's end."""
        region = self._plan.region(index)
        inner = tuple(slice(0, part.stop - part.start) for part in region)
        for name, field in self._fields.items():
            self._arrays[name][region] = np.asarray(values[name], field.dtype)[inner]

    def finish(self) -> None:
        """Gather all descriptions in one place, which makes opening the finished run fast."""
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", message="Consolidated metadata", category=UserWarning)
            zarr.consolidate_metadata(self.path, zarr_format=3)


def exists(folder: Path) -> bool:
    """True if a folder holds a run, finished or not."""
    return inside(folder, NAME).exists()


def remove(folder: Path) -> None:
    """Delete the run in a folder. Raises DataError if it was not written by `gutz`."""
    path = inside(folder, NAME)
    if path.exists():
        try:
            ours = str(json.loads((path / "zarr.json").read_bytes())["attributes"]["source"]).startswith("gutz ")
        except (OSError, ValueError, KeyError, TypeError):
            ours = False
        if not ours:
            raise DataError(f"{folder.name}/{NAME} was not written by gutz; it is not replaced, move it away yourself")
        shutil.rmtree(path)


def sweep(folder: Path) -> int:
    """Delete what a killed run left half-written (`*.partial`); return how many pieces there were."""
    strays = [path for path in (*folder.glob("*.partial"), *folder.glob(f"{NAME}/**/*.partial"))]
    for path in strays:
        if path.is_dir() and not path.is_symlink():
            shutil.rmtree(path)
        else:
            path.unlink(missing_ok=True)
    return len(strays)


def open_run(path: str | Path, variables: Sequence[str] | None = None) -> xr.Dataset:
    """Read a run, checked: layout, units, checksums, and that no piece is missing.

    path: the output folder of a scan. variables: names to read (status always comes along), None for all.
    Points that were not computed yet have status -1. Raises DataError, one sentence, for anything unreadable.
    """
    folder = Path(path)
    store = folder / NAME if folder.name != NAME else folder
    group = _open_group(store)
    names = [str(name) for name in _list(group, "variables")]
    wanted = names if variables is None else [n for n in names if n in variables or n == "status"]
    _check_chunks(store, group, wanted)
    try:
        dataset = xr.open_zarr(
            store,
            chunks=None,
            consolidated=False,
            mask_and_scale=False,
            decode_times=False,
            decode_timedelta=False,
        )[wanted].load()
    except Exception as error:  # readers raise anything from KeyError to RuntimeError on damaged files
        raise DataError(f"{_shown(store)} is damaged and cannot be read ({_cause(error)})") from None
    _check_layout(store, dataset)
    return dataset


def _write_descriptions(path: Path, plan: Plan, attributes: dict[str, Any]) -> None:
    """Make every array empty, write the coordinates, and seal the descriptions."""
    group = zarr.create_group(path, zarr_format=3)
    codec = ZstdCodec(level=_LEVEL, checksum=True)
    lengths = schema.sizes(plan)
    for name, (values, words) in schema.coordinates(plan).items():
        array = group.create_array(
            name,
            data=values,
            chunks=values.shape,
            compressors=[codec],
            dimension_names=(name,),
            attributes=words,
        )
        assert array.shape == values.shape
    for name, field in schema.layout(plan).items():
        shape = tuple(lengths[d] for d in field.dims)
        group.create_array(
            name,
            shape=shape,
            chunks=(*plan.chunk, *shape[len(plan.chunk) :]),
            dtype=field.dtype,
            fill_value=field.fill,
            compressors=[codec],
            dimension_names=field.dims,
            attributes=field.attributes,
        )
    group.attrs.update({**attributes, "seal": _seal(path, attributes)})


def _seal(path: Path, attributes: Mapping[str, Any]) -> str:
    """SHA-256 over the run's attributes and the description of every array."""
    digest = hashlib.sha256(json.dumps(attributes, sort_keys=True).encode())
    for description in sorted(path.glob("*/zarr.json")):
        digest.update(description.parent.name.encode() + description.read_bytes())
    return digest.hexdigest()


def provenance(plan: Plan, document: Document, tolerances: Mapping[str, float]) -> dict[str, Any]:
    """Where the numbers come from; no host, no user, no path."""
    spec = plan.spec
    return {
        "Conventions": "CF-1.11",
        "title": spec.output.title or document.name.removesuffix(".toml"),
        "source": f"gutz {__version__}",
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "schema_version": schema.VERSION,
        "ansatz": spec.ansatz.kind,
        "dim": spec.dim,
        "n_species": spec.species,
        "energy_unit": plan.energy_unit,
        "energy_unit_means": recoil_words(plan) or plan.energy_unit,
        "tolerances": dict(tolerances),
        "versions": {name: version(name) for name in ("jax", "numpy", "scipy", "xarray", "zarr")},
        "config_name": document.name,
        "config_toml": document.text,
        "config_overrides": list(document.overrides),
        "config_json": spec.canonical(),
        "config_sha256": spec.sha256(),
        "figures": list(spec.output.figures),
        "axes": [axis.name for axis in plan.axes],
        "chunk": list(plan.chunk),
        "variables": [*schema.layout(plan)],
    }


def _open_group(path: Path) -> zarr.Group:
    """Open a store and check that it is ours and its descriptions are whole."""
    if not (path / "zarr.json").is_file():
        raise DataError(f"{_shown(path)} does not exist; name the output folder of a scan")
    try:
        group = zarr.open_group(path, mode="r", use_consolidated=False)
        attributes = dict(group.attrs)
        seal = attributes.pop("seal", None)
        ours = str(attributes.get("source", "")).startswith("gutz ")
        number = attributes.get("schema_version")
        whole = seal == _seal(path, attributes)
    except Exception as error:  # a damaged description can fail in any way
        raise DataError(f"{_shown(path)} is damaged: its description cannot be read ({_cause(error)})") from None
    if not ours:
        raise DataError(f"{_shown(path)} was not written by gutz")
    if isinstance(number, int) and number > schema.VERSION:
        raise DataError(
            f"{_shown(path)} was written by a newer gutz (layout {number}); this one reads up to {schema.VERSION}"
        )
    if not whole:
        raise DataError(f"{_shown(path)} is damaged: its description does not match its seal")
    return group


def _check_chunks(path: Path, group: zarr.Group, names: Sequence[str]) -> None:
    """Refuse a run in which a chunk has a status but some of its numbers are missing."""
    status = _array(group, "status")
    counts = [-(-n // c) for n, c in zip(status.shape, status.chunks, strict=True)]
    for index in np.ndindex(*counts):
        if _chunk_file(path / "status", index, status.ndim).exists():
            for name in names:
                if not _chunk_file(path / name, index, _array(group, name).ndim).exists():
                    raise DataError(
                        f"{_shown(path)} is damaged: a piece of {name} is missing; --resume computes it again"
                    )


def _check_layout(path: Path, dataset: xr.Dataset) -> None:
    """Refuse numbers whose type or unit is not what their name promises."""
    for name, array in dataset.data_vars.items():
        if name in VARIABLES and array.dtype != VARIABLES[str(name)].dtype:
            raise DataError(
                f"{_shown(path)}: {name} is stored as {array.dtype}; it must be {VARIABLES[str(name)].dtype}"
            )
        if not {"units", "long_name"} <= array.attrs.keys():
            raise DataError(f"{_shown(path)}: {name} has no unit or no name for people")


def _array(group: zarr.Group, name: str) -> zarr.Array[Any]:
    found = group[name]
    assert isinstance(found, zarr.Array)
    return found


def _list(group: zarr.Group, name: str) -> list[Any]:
    found = group.attrs[name]
    assert isinstance(found, list)
    return found


def _chunk_file(array: Path, index: Sequence[int], ndim: int) -> Path:
    """The file of a chunk: zarr's default key encoding; trailing dimensions are never split."""
    return array.joinpath("c", *map(str, (*index, *[0] * (ndim - len(index)))))


def _shown(path: Path) -> str:
    return f"{path.parent.name}/{path.name}"


def _cause(error: Exception) -> str:
    words = str(error).splitlines()[0] if str(error) else type(error).__name__
    return words[:100]
