"""What a stored run looks like: the arrays of its dataset, their dimensions, types, units and words.

In:  a `Plan`.
Out: `Field` by name, in the order in which they are written (status last), and attributes for files.
"""

import json
from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz import attributes
from gutz.optics import Caution
from gutz.scan.plan import Plan
from gutz.variables import ABSENT, ENERGY, VARIABLES

VERSION = 1
"""Version of the layout of stored runs; it changes when an older `gutz` could misread a newer run."""

NOT_COMPUTED = -1
"""Status of a point whose chunk has not been written."""


class Field(NamedTuple):
    """One array. dims: all its dimensions; dtype: numpy name; attributes: units, names, flags."""

    dims: tuple[str, ...]
    dtype: str
    attributes: dict[str, Any]

    @property
    def fill(self) -> float | int:
        """Value of points not computed: nan, or -1 for whole numbers."""
        return float("nan") if self.dtype.startswith("float") else NOT_COMPUTED


_INPUTS = {
    "t": (("species", "direction"), ENERGY, "Hopping"),
    "U": (("species",), ENERGY, "On-site interaction"),
    "U12": ((), ENERGY, "Interspecies interaction"),
}


def coordinates(plan: Plan) -> dict[str, tuple[NDArray[Any], dict[str, Any]]]:
    """Coordinate arrays and their attributes: the axes, then species and directions."""
    found: dict[str, tuple[NDArray[Any], dict[str, Any]]] = {
        axis.name: (axis.values, {"units": axis.unit, "long_name": axis.words, "parameter": axis.target.path})
        for axis in plan.axes
    }
    species = np.arange(1, plan.spec.species + 1, dtype=np.int8)
    found["species"] = (species, {"units": "1", "long_name": "Species"})
    found["species_"] = (species, {"units": "1", "long_name": "Species (second index)"})
    found["direction"] = (
        np.arange(1, plan.spec.dim + 1, dtype=np.int8),
        dict(attributes.DIRECTIONS),
    )
    return found


def sizes(plan: Plan) -> dict[str, int]:
    """Length of every dimension."""
    return {name: values.size for name, (values, _) in coordinates(plan).items()}


def layout(plan: Plan) -> dict[str, Field]:
    """Every variable of the run, inputs first, status last.

    A variable whose name an axis bears is left out: the coordinate holds the same numbers.
    """
    grid = tuple(axis.name for axis in plan.axes)
    unit = plan.energy_unit
    found: dict[str, Field] = {}
    for name, (dims, units, words) in _INPUTS.items():
        if name != "U12" or plan.spec.species == 2:
            found[name] = Field(
                (*grid, *dims),
                "float64",
                {
                    "units": attributes.with_energy(units, unit),
                    "long_name": words,
                    "description": "parameter of the model",
                },
            )
    if plan.spec.lattice is not None:
        found["cautions"] = Field((*grid,), "int32", attributes.of_flags(Caution, "Cautions about the lattice"))
    for name, variable in VARIABLES.items():
        found[name] = Field((*grid, *variable.dims), variable.dtype, attributes.of_output(name, unit))
    for name in (*grid, *ABSENT[plan.spec.ansatz.kind]):
        found.pop(name, None)
    status = found.pop("status")
    return {**found, "status": status}


def bytes_per_point(plan: Plan) -> int:
    """Bytes of one point before compression."""
    length = sizes(plan)
    return sum(
        np.dtype(field.dtype).itemsize * int(np.prod([length[d] for d in field.dims[len(plan.axes) :]], dtype=int))
        for field in layout(plan).values()
    )


def to_attributes(given: Mapping[str, Any]) -> dict[str, Any]:
    """Attributes a netCDF file can hold: texts, numbers, number arrays; anything else becomes JSON text."""
    kept: dict[str, Any] = {}
    for key, value in given.items():
        if isinstance(value, str | int | float | np.number | np.ndarray) and not isinstance(value, bool):
            kept[key] = value
        elif isinstance(value, list) and value and all(type(part) is int for part in value):
            kept[key] = np.array(value, np.int32)
        else:
            kept[key] = json.dumps(value, sort_keys=True, default=str)
    return kept
