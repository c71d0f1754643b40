"""Labelled results: a `Solution` as an xarray Dataset with units, long names and flag meanings.

In:  a solution, names and coordinates of its batch axes, the unit of its energies.
Out: an xarray.Dataset following the CF conventions for flags; no file is touched here.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr

from gutz.errors import InputError
from gutz.phases import WORDS, Phase
from gutz.solution import Solution
from gutz.status import Status
from gutz.variables import ENERGY, VARIABLES


def to_dataset(
    solution: Solution,
    dims: Sequence[str] | None = None,
    coords: Mapping[str, Any] | None = None,
    energy_unit: str = "1",
) -> xr.Dataset:
    """Label every output. dims: one name per batch axis, default axis_0, axis_1, ...

    Raises InputError where the number of names does not fit the batch.
    """
    names = tuple(dims) if dims is not None else tuple(f"axis_{i}" for i in range(len(solution.shape)))
    if len(names) != len(solution.shape):
        raise InputError(f"dims has {len(names)} names; the solution has {len(solution.shape)} batch axes")
    species = np.arange(1, solution.mixture.species + 1)
    fixed = {
        "species": species,
        "species_": species,
        "direction": list("xyz"[: solution.mixture.dim]),
    }
    data = {}
    for name, variable in VARIABLES.items():
        if name in solution.outputs:
            values = np.asarray(solution.outputs[name]).astype(variable.dtype)
            data[name] = xr.Variable((*names, *variable.dims), values, attributes(name, energy_unit))
    used = {d for v in data.values() for d in v.dims}
    all_coords = {k: v for k, v in fixed.items() if k in used} | dict(coords or {})
    return xr.Dataset(data, coords=all_coords, attrs={"ansatz": solution.ansatz})


def attributes(name: str, energy_unit: str) -> dict[str, Any]:
    """CF attributes of an output. energy_unit replaces the mark of `gutz.variables.ENERGY`."""
    variable = VARIABLES[name]
    units = variable.units
    if ENERGY in units:
        units = "1" if energy_unit == "1" else units.replace(ENERGY, energy_unit)
    attrs: dict[str, Any] = {
        "units": units,
        "long_name": variable.long_name,
        "description": variable.description,
    }
    if name == "phase":
        attrs["flag_values"] = np.array([int(p) for p in Phase], np.int8)
        attrs["flag_meanings"] = " ".join(WORDS[p].replace(" ", "_") for p in Phase)
    if name == "status":
        bits = [s for s in Status if s != Status.OK]
        attrs["flag_masks"] = np.array([int(s) for s in bits], np.int32)
        attrs["flag_meanings"] = " ".join(str(s.name).lower() for s in bits)
    return attrs
