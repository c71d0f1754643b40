"""Attributes of every output and coordinate, following the CF conventions for units and flags.

In:  the name of an output, the unit of the energies.
Out: plain dictionaries of texts, numbers and lists of whole numbers; no array library is needed to write them.
"""

from enum import IntFlag
from typing import Any

from gutz.phases import WORDS, Phase, Range
from gutz.status import Status
from gutz.variables import ENERGY, VARIABLES

DIRECTIONS: dict[str, Any] = {
    "units": "1",
    "long_name": "Direction",
    "flag_values": [1, 2, 3],
    "flag_meanings": "x y z",
}


def of_output(name: str, energy_unit: str) -> dict[str, Any]:
    """Attributes of the output `name` in a run whose energies are in `energy_unit` ("1": plain numbers)."""
    variable = VARIABLES[name]
    attributes: dict[str, Any] = {
        "units": with_energy(variable.units, energy_unit),
        "long_name": variable.long_name,
        "description": variable.description,
    }
    if name == "phase":
        attributes["flag_values"] = [int(phase) for phase in Phase]
        attributes["flag_meanings"] = " ".join(WORDS[phase].replace(" ", "_") for phase in Phase)
    elif name == "order_range":
        attributes["flag_values"] = [int(reach) for reach in Range]
        attributes["flag_meanings"] = "none long-range quasi-long-range short-range"
    elif name == "status":
        attributes |= of_flags(Status, variable.long_name)
    return attributes


def of_flags(kind: type[IntFlag], words: str) -> dict[str, Any]:
    """Attributes of an array of bits of `kind`."""
    bits = [bit for bit in kind if int(bit)]
    return {
        "units": "1",
        "long_name": words,
        "flag_masks": [int(bit) for bit in bits],
        "flag_meanings": " ".join(str(bit.name).lower() for bit in bits),
    }


def with_energy(units: str, energy_unit: str) -> str:
    """Fill the run's energy unit in; energies without a name are plain numbers."""
    filled = units.replace(ENERGY, energy_unit)
    return "1" if filled == "1 / 1" else filled
