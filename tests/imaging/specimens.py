"""Samples shared by the tests of imaging."""

import jax.numpy as jnp
import numpy as np

from gutz.imaging.sample import Region, Sample, uniform

RUBIDIUM = 86.909180527 * 1.66053906660e-27
"""Mass of 87Rb in kg (AME2020, from memory)."""


def box(side: float, n: float = 0.5, height: float = 1.0, planes: int = 0, spacing: float = 425e-9) -> Sample:
    """A cube (or planes) of sites with <b_1 b_2>² = <b_1† b_2>² = height n², 87Rb, depth 20."""
    outputs = {"filling": np.array([n, n]), "order_parameter": np.zeros(2), "condensate": np.zeros(2)}
    order = dict.fromkeys(("pair", "antipair"), np.sqrt(height) * n)
    sites = (side, side, float(planes or side))
    return uniform(outputs, sites, RUBIDIUM, spacing, 20.0, planes, order)


def sphere(diameter: float, n: float = 0.5, height: float = 1.0, spacing: float = 425e-9) -> Sample:
    """A uniform sphere: rms radius along an axis D/(2 √5)."""
    sites = np.pi / 6 * diameter**3
    radius = jnp.full(3, diameter / (2 * np.sqrt(5)))

    def region(total: float) -> Region:
        return Region(jnp.asarray(total), radius, radius)

    order = region(height * sites * n * n)
    own = region(sites * n * n)
    regions = {"pair": order, "antipair": order, "1": own, "2": own}
    atoms = jnp.full(2, sites * n)
    return Sample(atoms, jnp.full(2, RUBIDIUM), jnp.asarray(spacing), jnp.full((2, 3), 20.0), regions, jnp.zeros(2))
