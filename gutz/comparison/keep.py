"""Renew the mean-field outputs kept beside the stored references: python -m gutz.comparison.keep [--new]

In:  the stored references.
Out: gutz/data/predictions.nc. To be run by whoever changes the solver (everything afresh, some minutes) or adds
     references (--new: only what is not kept yet).
"""

import sys

import numpy as np

from gutz.comparison import predictions, references
from gutz.comparison.references import References
from gutz.solver import ANSATZE


def keep(new_only: bool = False) -> None:
    """Solve mean field at the stored entries with both ansaetze and write the outputs of all of them."""
    every = references.load()
    identities = [str(dataset.attrs["identity"]) for some in every.values() for dataset in some.datasets]
    found = {}
    for ansatz in ANSATZE:
        held = predictions.stored(predictions.STORED, ansatz) if new_only else {}
        for some in every.values():
            held |= _solved(some, ansatz, skip=set(held))
        found[ansatz] = {
            name: np.stack([np.asarray(held[identity][name]) for identity in identities])
            for name in predictions.OUTPUTS
        }
    predictions.write(predictions.STORED, identities, found)


def _solved(some: References, ansatz: str, skip: set[str]) -> dict[str, dict[str, predictions.Floats]]:
    """Outputs of the entries not to be skipped, by identity, species axes padded to two with nan."""
    identities = [str(dataset.attrs["identity"]) for dataset in some.datasets]
    todo = np.array([number for number, identity in enumerate(identities) if identity not in skip], dtype=int)
    if not todo.size:
        return {}
    solved = predictions.solve_places(some.places[todo], ansatz, some.noise[todo])
    padded = {name: _both_species(solved[name], len(dims)) for name, dims in predictions.OUTPUTS.items()}
    return {identities[number]: {name: values[row] for name, values in padded.items()}
            for row, number in enumerate(todo)}  # fmt: skip


def _both_species(values: predictions.Floats, species_axes: int) -> predictions.Floats:
    missing = [(0, 0)] + [(0, 2 - n) for n in values.shape[1 : 1 + species_axes]]
    return np.pad(values, missing, constant_values=np.nan)


if __name__ == "__main__":
    keep(new_only="--new" in sys.argv[1:])
