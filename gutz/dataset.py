"""Labelled results: the outputs of a solution as an xarray Dataset with units, long names and flag meanings.

In:  arrays by name, names and coordinates of its batch axes, the unit of its energies.
Out: an xarray.Dataset following the CF conventions for flags; no file is touched here.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr

from gutz import attributes
from gutz.errors import InputError
from gutz.variables import VARIABLES


def to_dataset(
    outputs: Mapping[str, Any],
    dims: Sequence[str] | None = None,
    coords: Mapping[str, Any] | None = None,
    energy_unit: str = "1",
) -> xr.Dataset:
    """Label outputs, keyed as in `VARIABLES`. dims: one name per batch axis, default axis_0, axis_1, ...

    Raises InputError where the number of names does not fit the batch.
    """
    shape = np.shape(outputs["status"])
    names = tuple(dims) if dims is not None else tuple(f"axis_{i}" for i in range(len(shape)))
    if len(names) != len(shape):
        raise InputError(f"dims has {len(names)} names; the solution has {len(shape)} batch axes")
    species = np.arange(1, np.shape(outputs["filling"])[-1] + 1)
    direction = np.arange(1, np.shape(outputs["coherence"])[-1] + 1)
    fixed = {
        "species": species,
        "species_": species,
        "direction": xr.Variable("direction", direction, attributes.DIRECTIONS),
    }
    data = {}
    for name, variable in VARIABLES.items():
        if name in outputs:
            values = np.asarray(outputs[name]).astype(variable.dtype)
            data[name] = xr.Variable((*names, *variable.dims), values, attributes.of_output(name, energy_unit))
    used = {d for v in data.values() for d in v.dims}
    all_coords = {k: v for k, v in fixed.items() if k in used} | dict(coords or {})
    return xr.Dataset(data, coords=all_coords)
