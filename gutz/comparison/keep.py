"""Renew the mean-field outputs kept beside the stored references: python -m gutz.comparison.keep

In:  the stored references.
Out: gutz/data/predictions.nc, to be run by whoever changes the solver or the references. Takes minutes.
"""

import numpy as np

from gutz.comparison import predictions, references
from gutz.solver import ANSATZE


def keep() -> None:
    """Solve mean field at every stored entry with both ansaetze and write the outputs."""
    every = references.load()
    identities = [str(dataset.attrs["identity"]) for some in every.values() for dataset in some.datasets]
    found = {}
    for ansatz in ANSATZE:
        parts = [predictions.solve_places(some.places, ansatz, some.noise) for some in every.values()]
        found[ansatz] = {
            name: np.concatenate([_both_species(part[name], len(dims)) for part in parts])
            for name, dims in predictions.OUTPUTS.items()
        }
    predictions.write(predictions.STORED, identities, found)


def _both_species(values: predictions.Floats, species_axes: int) -> predictions.Floats:
    """Pad the species axes of one-species outputs with nan."""
    missing = [(0, 0)] + [(0, 2 - n) for n in values.shape[1 : 1 + species_axes]]
    return np.pad(values, missing, constant_values=np.nan)


if __name__ == "__main__":
    keep()
