"""The loop a physicist would write for a trapped lattice: every site in turn, with its neighbours' order parameters.

In:  Hubbard parameters, potentials on a lattice, a temperature.
Out: order parameters, fillings and the grand potential.
Written from the equations, independently of the package: the tests use it as a second implementation.
"""

import itertools

import numpy as np
import plain_loop

Vector = np.ndarray


def neighbours(shape):
    """For every site the flat numbers of its neighbours, open edges."""
    index = np.arange(int(np.prod(shape))).reshape(shape)
    found = [[] for _ in range(index.size)]
    for site in itertools.product(*(range(n) for n in shape)):
        for axis in range(len(shape)):
            for step in (-1, 1):
                other = list(site)
                other[axis] += step
                if 0 <= other[axis] < shape[axis]:
                    found[index[site]].append(index[tuple(other)])
    return found


def sweep(phi, energy, links, t, T, operators):
    """One pass over all sites, each using the newest values of its neighbours; returns the largest change."""
    b1, b2 = operators[:2]
    f1, f2 = b1 + b1.T, b2 + b2.T
    worst = 0.0
    for i, near in enumerate(links):
        J = t * phi[near].sum(0)
        E, V = np.linalg.eigh(np.diag(energy[i]) - J[0] * f1 - J[1] * f2)
        weight, _ = plain_loop._thermal(E, T)
        new = 0.5 * np.array([(V * (f1 @ V)).sum(0) @ weight, (V * (f2 @ V)).sum(0) @ weight])
        worst = max(worst, np.abs(new - phi[i]).max())
        phi[i] = new
    return worst


def solve(shape, potential, U, U12, mu, t, T, n_max, tolerance=1e-9, most=5000):
    """Sweep until nothing changes. potential: (2, *shape). Returns phi, filling (site, 2), grand potential."""
    operators = plain_loop.PlainSite(n_max).operators
    level = np.asarray(mu)[None, :] - potential.reshape(2, -1).T
    count = len(level)
    energy = plain_loop.site_energies(np.full((count, 2), U), np.full(count, U12), level, n_max)
    links = neighbours(shape)
    phi = np.tile([0.7, 0.6], (count, 1))
    for _ in range(most):
        if sweep(phi, energy, links, t, T, operators) < tolerance:
            break
    b1, b2, n1, n2 = operators
    filling, total = np.empty_like(phi), 0.0
    for i, near in enumerate(links):
        J = t * phi[near].sum(0)
        E, V = np.linalg.eigh(np.diag(energy[i]) - J[0] * (b1 + b1.T) - J[1] * (b2 + b2.T))
        weight, F = plain_loop._thermal(E, T)
        density = (V**2) @ weight
        filling[i] = density @ n1, density @ n2
        total += F + (J * phi[i]).sum()
    return phi, filling, total
