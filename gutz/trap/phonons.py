"""Entropy of the collective modes, which single-site states miss: phonons of the superfluid above all.

In:  a uniform gas, chemical potentials at the nodes of a cloud, a temperature.
Out: entropy per site at every node, from the one-loop free energy of `gutz.fluctuations`; a power law in T that stands
     for it while a temperature is looked for.

The modes are taken at the density of the product state: their back action on density and order is left out. They are
computed at a few nodes and count as linear in between, which is good to some per cent of their sum.
"""

import numpy as np
from numpy.typing import NDArray

from gutz.fluctuations import GaussianLayer, local_sites
from gutz.solver import solve
from gutz.trap.climb import Sums
from gutz.trap.geometry import Nodes
from gutz.trap.local import LocalGas, States

FloatArray = NDArray[np.float64]

SAMPLES = {"line": 16, "plane": 40}
"""Nodes at which the modes are computed."""

_MOMENTA = {1: 256, 2: 48, 3: 24}
_FILLED = 1e-3
_TAIL = 4.0
"""Depth in T beyond the bottom of the band at which the last sample on a line stands."""


class PhononLaw:
    """S(T) = amplitude (T / T_0)^power of a whole cloud, in k_B; concave when added to the grand potential.

    foreign: taken over from a similar cloud, so that only its power is worth keeping.
    """

    def __init__(self, amplitude: float, T: float, power: float = 3.0, foreign: bool = False) -> None:
        self.amplitude, self.T, self.power, self.foreign = max(amplitude, 0.0), T, power, foreign

    def entropy(self, T: float) -> float:
        """Entropy at T."""
        return self.amplitude * (T / self.T) ** self.power

    def through(self, T: float, amplitude: float) -> "PhononLaw":
        """The law through another value, with the power between the two where they lie apart."""
        apart = abs(np.log(T / self.T))
        power = self.power
        if apart > 0.02 and amplitude > 0 and self.amplitude > 0 and not self.foreign:
            power = float(np.clip(np.log(amplitude / self.amplitude) / np.log(T / self.T), 0.5, 4.0))
        return PhononLaw(amplitude, T, power)

    def added(self, sums: Sums) -> Sums:
        """Sums of a cloud with the modes in them."""
        T = float(sums.y[-1])
        S = self.entropy(T)
        totals, response = sums.totals.copy(), sums.response.copy()
        totals[-1] += S
        if T > 0:
            response[-1, -1] += self.power * S / T
        return sums._replace(potential=sums.potential - T * S / (self.power + 1), totals=totals, response=response)


def entropy_at_nodes(gas: LocalGas, nodes: Nodes, states: States, mu: FloatArray, T: float) -> FloatArray:
    """Entropy per site of the collective modes at every node, k_B; mu: at the bottom of the traps, (species,).

    For the product ansatz at T > 0; 0 at T = 0.
    """
    size = nodes.weight.size
    filled = np.flatnonzero(states.of("filling").sum(-1) > _FILLED)
    if T == 0 or filled.size == 0:
        return np.zeros(size)
    if nodes.line is not None and size > 1:
        # Samples move smoothly with mu and T, so that a search for T sees no jumps.
        ratio = nodes.potential[-1] / nodes.line[-1]
        end = float(((mu + gas.z_t + _TAIL * T) / ratio).max())
        marks = np.linspace(0.0, max(end, 1e-12), SAMPLES["line"])
        return np.asarray(np.interp(nodes.line, marks, _modes(gas, mu - marks[:, None] * ratio, T), right=0.0))
    if size == 1:
        return _modes(gas, mu - nodes.potential, T)
    # On a plane each sample stands for an equal share of the filled sites, in the order of the potential.
    order = filled[np.argsort(nodes.potential[filled].sum(-1), kind="stable")]
    below = np.cumsum(nodes.weight[order])
    marks = (np.arange(SAMPLES["plane"]) + 0.5) / SAMPLES["plane"] * below[-1]
    place = np.searchsorted(below, marks).clip(0, order.size - 1)
    unique, back = np.unique(place, return_inverse=True)
    found = _modes(gas, mu - nodes.potential[order[unique]], T)
    values = np.zeros(size)
    slot = np.minimum((below / below[-1] * SAMPLES["plane"]).astype(int), SAMPLES["plane"] - 1)
    values[order] = found[back][slot]
    return values


def _modes(gas: LocalGas, mu: FloatArray, T: float) -> FloatArray:
    """One-loop entropy per site at chemical potentials mu (point, species)."""
    count = len(mu)
    mixture = gas.mixture[np.zeros(count, np.intp)].replace(
        mu=mu, T=np.full(count, T), filling=None, entropy=None, n_max=gas.n_max
    )
    points = _MOMENTA[gas.mixture.dim]
    # Half the zone suffices: the hopping energy is even in every direction.
    row = (np.arange(points) + 0.5) * np.pi / points
    k = np.stack(np.meshgrid(*[row] * gas.mixture.dim, indexing="ij"), -1).reshape(-1, gas.mixture.dim)
    found = np.zeros(count)
    for i, sites in enumerate(local_sites(solve(mixture, gas.ansatz))):
        if sites is not None:
            S = GaussianLayer(sites).one_loop(k)[1]
            found[i] = S if np.isfinite(S) else 0.0
    return found
