"""Excitations around a solution: energies and spectral weights of the Gaussian modes.

In:  `LocalSites`, momenta.
Out: ω_ν(k) from low to high, and the weights with which b_a and b_a† excite each mode.

Every pair of levels m < n of a site is an oscillator of energy E_n - E_m and strength sqrt(P_m - P_n); hopping
couples them through the matrix elements of b + b† and b - b†. With K_Q, K_P the stiffnesses of the two
quadratures, ω² are the eigenvalues of K_P K_Q. This is an independent route to the averages of
`gutz.fluctuations.layer`, without any frequency sum. Excitations between levels of one energy have no strength and
no mode.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import ResourceError
from gutz.fluctuations.sites import LocalSites

Floats = NDArray[np.float64]

MAX_PAIRS = 3000
"""Largest number of pairs of levels that are coupled."""

_FAINT = 1e-13


class Spectrum(NamedTuple):
    """Modes at K momenta. energy: (K, mode), nan where a momentum is unstable. added, removed: weight of b_a† and of
    b_a, |<ν|b_a†|0>|² at T = 0, (K, a, mode), for the uniform superposition of the sublattices."""

    energy: Floats
    added: Floats
    removed: Floats


def spectrum(sites: LocalSites, k: Floats, modes: int | None = None) -> Spectrum:
    """Return the lowest `modes` (default all) excitations at momenta k, (K, D) in 1/lattice constant.

    Raises ResourceError where too many levels are occupied.
    """
    k = np.atleast_2d(np.asarray(k, float))
    gap, Q, P = _oscillators(sites)
    a, S = sites.species, sites.sublattices
    energy = -2.0 * np.einsum("kd,dab->kab", np.cos(k), sites.hopping)
    normal, anomalous = energy[:, :a, :a], energy[:, :a, a:]
    kept = gap.size if modes is None else min(modes, gap.size)
    nothing = np.full((len(k), a, kept), np.nan)
    out = Spectrum(np.full((len(k), kept), np.nan), nothing, nothing.copy())
    for i in range(len(k)):
        stiff_Q = np.diag(gap) + Q.T @ _between(normal[i] + anomalous[i], S) @ Q
        stiff_P = np.diag(gap) + P.T @ _between(normal[i] - anomalous[i], S) @ P
        lowest, axes = np.linalg.eigh(stiff_Q)
        if lowest[0] < -1e-9 * gap.max():
            continue
        root = (axes * np.sqrt(np.maximum(lowest, 0.0))) @ axes.T
        square, turn = np.linalg.eigh(root @ stiff_P @ root)
        if square[0] < -1e-9 * gap.max() ** 2:
            continue
        omega = np.sqrt(np.maximum(square, 0.0))
        safe = np.where(omega > 0, omega, np.inf)
        inverse = (axes / np.sqrt(np.where(lowest > 0, lowest, np.inf))) @ axes.T
        # Amplitudes of the two quadratures, then of b and b†.
        q = (Q @ inverse @ turn) * np.sqrt(0.5 * omega)
        p = (P @ root @ turn) / np.sqrt(2.0 * safe)
        q, p = (v.reshape(S, a, -1).sum(0) / np.sqrt(S) for v in (q, p))
        out.energy[i] = omega[:kept]
        out.added[i] = (0.5 * (q + p) ** 2)[:, :kept]
        out.removed[i] = (0.5 * (q - p) ** 2)[:, :kept]
    return out


def _oscillators(sites: LocalSites) -> tuple[Floats, Floats, Floats]:
    """Energies (pair,), and couplings to both quadratures of every species and sublattice, (S a, pair)."""
    S, a = sites.sublattices, sites.species
    gaps, Qs, Ps = [], [], []
    for s in range(S):
        low, high = np.triu_indices(sites.energy.shape[1], 1)
        strength = np.sqrt(np.maximum(sites.weight[s][low] - sites.weight[s][high], 0.0))
        down, up = sites.lower[s][:, low, high], sites.lower[s][:, high, low]
        Q, P = (down + up) * strength, (down - up) * strength
        used = (Q**2 + P**2).max(0) > _FAINT
        wide = np.zeros((2, S, a, int(used.sum())))
        wide[0, s], wide[1, s] = Q[:, used], P[:, used]
        gaps.append((sites.energy[s][high] - sites.energy[s][low])[used])
        Qs.append(wide[0].reshape(S * a, -1))
        Ps.append(wide[1].reshape(S * a, -1))
    gap = np.concatenate(gaps)
    if gap.size > MAX_PAIRS:
        raise ResourceError(f"spectrum: {gap.size} pairs of levels are occupied; at most {MAX_PAIRS} are coupled")
    return gap, np.concatenate(Qs, 1), np.concatenate(Ps, 1)


def _between(energy: Floats, sublattices: int) -> Floats:
    """Hopping energy (a, a) between the sublattices, or on the one there is."""
    if sublattices == 1:
        return energy
    nothing = np.zeros_like(energy)
    return np.block([[nothing, energy], [energy, nothing]])
