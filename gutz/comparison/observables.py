"""What is compared: one table of observables, what a reference says of each, what mean field says.

In:  a stored entry; outputs of mean field at its place (`predictions`).
Out: numbers by observable, one per species or one; nan where a side has nothing to say.

An error is |prediction - reference| / scale, where the scale is the reference itself but not less than a floor (so
that nothing is called wrong for missing what hardly exists), and for the energy the hopping energy of the reference.
"""

from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.phases import Phase
from gutz.reference.plan import Entry

Floats = NDArray[np.float64]

FAR = 8
"""Distance (sites) at which correlators are compared; or the largest stored, if that is smaller."""


class Observable(NamedTuple):
    """One observable. floor: the least scale its error is measured against."""

    words: str
    units: str
    floor: float


OBSERVABLES: dict[str, Observable] = {
    "energy": Observable("Energy per site", "energy", 1e-9),
    "entropy": Observable("Entropy per site", "k_B", 0.05),
    "number_variance": Observable("Number variance of a site", "1", 0.05),
    "number_covariance": Observable("Number covariance of the species on a site", "1", 0.05),
    "coherence": Observable("Nearest-neighbour coherence", "1", 0.05),
    "one_body_far": Observable(f"Coherence over {FAR} sites", "1", 0.02),
    "pair_far": Observable(f"Pair correlator over {FAR} sites", "1", 0.01),
    "antipair_far": Observable(f"Anti-pair correlator over {FAR} sites", "1", 0.01),
    "exponent": Observable("Exponent of coherence, 1/(2K)", "1", 0.02),
    "pair_exponent": Observable("Exponent of pairs", "1", 0.02),
    "antipair_exponent": Observable("Exponent of anti-pairs", "1", 0.02),
    "coherence_length": Observable("Coherence length", "sites", 0.5),
    "pair_peak": Observable("Noise peak between species at k' = -k", "1", 0.05),
    "antipair_peak": Observable("Noise peak between species at k' = k", "1", 0.05),
    "bunching_peak": Observable("Noise peak of one species at k' = k", "1", 0.05),
    "phase": Observable("Phase", "1", 1.0),
}


_POWER_LAWS = {
    "exponent": ("one_body", (Phase.SUPERFLUID,)),
    "pair_exponent": ("pair", (Phase.SUPERFLUID, Phase.PAIRED)),
    "antipair_exponent": ("antipair", (Phase.SUPERFLUID, Phase.COUNTERFLOW)),
}
"""Which stored correlator an exponent is of, and the phases of a reference in which it follows a power law."""


class Measured(NamedTuple):
    """What a reference says: numbers, their errors, and the scale of an error of mean field."""

    values: dict[str, Floats]
    errors: dict[str, Floats]
    scales: dict[str, Floats]


def measured(entry: Entry, dataset: xr.Dataset) -> Measured:
    """Numbers of a stored entry, by observable; absent where it has none."""
    values: dict[str, Floats] = {}
    errors: dict[str, Floats] = {}

    def put(name: str, value: Any, error: Any) -> None:
        values[name], errors[name] = np.atleast_1d(value).astype(float), np.atleast_1d(error).astype(float)

    def take(name: str, source: str, index: Any = ...) -> None:
        if source in dataset:
            put(name, dataset[source].values[index], dataset[f"{source}_error"].values[index])

    take("energy", "energy")
    take("entropy", "entropy")
    both = np.arange(entry.species)
    take("number_variance", "number_variance", (both, both))
    take("coherence", "one_body", (..., 1))
    far = dataset.sizes["distance"] - 1
    if far >= FAR or entry.T > 0:
        far = min(FAR, far)
        take("one_body_far", "one_body", (..., far))
        take("pair_far", "pair", far)
        take("antipair_far", "antipair", far)
    if entry.species == 2:
        take("number_covariance", "number_variance", (0, 1))
    for name, (source, phases) in _POWER_LAWS.items():
        if f"{source}_exponent" in dataset and int(dataset["phase"]) in phases:
            take(name, f"{source}_exponent")
    if entry.T > 0 and "one_body_decay_length" in dataset:
        length = dataset["one_body_decay_length"].values
        put("coherence_length", length, 0.1 * length)
    if "noise" in dataset:
        for name, value in peaks(dataset["noise"].values).items():
            put(name, value, np.zeros_like(np.atleast_1d(value)))
    if int(dataset["phase"]) != Phase.UNDECIDED:
        put("phase", int(dataset["phase"]), 0.0)
    scales = {
        name: np.maximum(np.abs(value), OBSERVABLES[name].floor) for name, value in values.items() if name != "phase"
    }
    hopping = 2 * float(np.sum(np.array(entry.t) * dataset["one_body"].values[:, 1]))
    scales["energy"] = np.array([hopping])
    return Measured(values, errors, scales)


def peaks(noise: Floats) -> dict[str, Floats]:
    """Peak weights of normal-ordered noise maps, shape (..., species, species, k, k'): means along k' = -k and k' = k.

    Momenta from pi/4 to 3 pi/4 either way only: around k = 0 sits the condensate, whose shape in an open chain reaches
    over several momenta, and at the zone edge both lines meet.
    """
    sites = noise.shape[-1]
    k = np.arange(sites)
    k = k[np.abs(np.minimum(k, sites - k) / sites - 0.25) <= 0.125 + 1e-9]
    along, across = noise[..., k, k].mean(-1), noise[..., k, -k % sites].mean(-1)
    both = np.arange(noise.shape[-3])
    found = {"bunching_peak": along[..., both, both]}
    if noise.shape[-3] == 2:
        found |= {"pair_peak": across[..., 0, 1], "antipair_peak": along[..., 0, 1]}
    return found


def predicted(found: Mapping[str, NDArray[Any]], T: float) -> dict[str, Floats]:
    """Numbers mean field gives at one place, by observable. found: the outputs of that place (no point axis)."""
    species = int(np.sum(np.isfinite(found["filling"])))
    both = np.arange(species)
    variance = found["number_variance"]
    said: dict[str, Any] = {
        "energy": found["energy"],
        "number_variance": variance[both, both],
        "coherence": found["coherence"][:species],
        "one_body_far": found["condensate"][:species],
        "bunching_peak": found["bunching_peak"][:species],
        "phase": found["phase"],
    }
    if T > 0:
        said |= {"entropy": found["entropy"], "coherence_length": found["coherence_length"][:species]}
    else:
        said["exponent"] = found["exponent"][:species]
    if species == 2:
        said |= {
            "number_covariance": variance[0, 1],
            "pair_far": found["pair_order"] ** 2,
            "antipair_far": found["antipair_order"] ** 2,
            "pair_peak": found["pair_peak"],
            "antipair_peak": found["antipair_peak"],
        }
        if T == 0:
            said |= {"pair_exponent": found["exponent_pair"], "antipair_exponent": found["exponent_antipair"]}
    return {name: np.atleast_1d(np.asarray(value, dtype=float)) for name, value in said.items()}
