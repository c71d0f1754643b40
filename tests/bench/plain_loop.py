"""The loop a physicist would write: self-consistency on phi with numpy, point by point, for comparison.

In:  Hubbard parameters of a grid of points (two species), a temperature, a cutoff.
Out: order parameters and free energies; also the same loop with all points stacked into one eigenproblem.
Written from the equations, independently of the package: the tests use it as a second implementation.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Vector = NDArray[np.float64]


@dataclass(frozen=True)
class PlainSite:
    """Operators of one two-species site with at most n_max atoms of each."""

    n_max: int

    @property
    def operators(self) -> tuple[Vector, Vector, Vector, Vector]:
        """b1, b2, n1 (diagonal), n2 (diagonal)."""
        single = np.diag(np.sqrt(np.arange(1, self.n_max + 1)), 1)
        one = np.eye(self.n_max + 1)
        n = np.diag(single.T @ single)
        return np.kron(single, one), np.kron(one, single), np.kron(n, np.ones_like(n)), np.kron(np.ones_like(n), n)


def site_energies(U: Vector, U12: Vector, mu: Vector, n_max: int) -> Vector:
    """Diagonal of h0. U, mu: (points, 2); U12: (points,). Returns (points, states)."""
    _, _, n1, n2 = PlainSite(n_max).operators
    return (
        U[:, :1] / 2 * n1 * (n1 - 1)
        + U[:, 1:] / 2 * n2 * (n2 - 1)
        + U12[:, None] * n1 * n2
        - mu[:, :1] * n1
        - mu[:, 1:] * n2
    )


def _thermal(E: Vector, T: float) -> tuple[Vector, Vector]:
    """Boltzmann weights and free energy of levels (..., states)."""
    low = E[..., :1]
    if T == 0:
        weight = np.zeros_like(E)
        weight[..., 0] = 1
        return weight, low[..., 0]
    boltzmann = np.exp(-(E - low) / T)
    total = boltzmann.sum(-1, keepdims=True)
    return boltzmann / total, low[..., 0] - T * np.log(total[..., 0])


def loop(
    energy: Vector,
    zt: Vector,
    T: float,
    n_max: int,
    tolerance: float = 1e-10,
    most: int = 20000,
    start: tuple[float, float] = (1.0, 0.9),
) -> tuple[Vector, Vector, int]:
    """Point by point, the first from `start`, each other from the point before.

    Returns phi (points, 2), F (points,), number of eigenproblems.
    """
    b1, b2, _, _ = PlainSite(n_max).operators
    f1, f2 = b1 + b1.T, b2 + b2.T
    phi = np.array(start)
    phis, Fs, count = np.empty_like(zt), np.empty(len(zt)), 0
    for i in range(len(zt)):
        if i:
            phi = np.maximum(phi, 0.1)
        h0 = np.diag(energy[i])
        for _ in range(most):
            J = zt[i] * phi
            E, V = np.linalg.eigh(h0 - J[0] * f1 - J[1] * f2)
            count += 1
            weight, F = _thermal(E, T)
            new = 0.5 * np.array([(V * (f1 @ V)).sum(0) @ weight, (V * (f2 @ V)).sum(0) @ weight])
            change = np.abs(new - phi).max()
            phi = new
            if change < tolerance:
                break
        phis[i] = phi
        Fs[i] = F + (2 * J * phi - zt[i] * phi**2).sum()
    return phis, Fs, count


def stacked(
    energy: Vector, zt: Vector, T: float, n_max: int, tolerance: float = 1e-10, most: int = 20000
) -> tuple[Vector, Vector, int]:
    """All points at once with stacked eigenproblems; points that are done drop out."""
    b1, b2, _, _ = PlainSite(n_max).operators
    fields = np.stack([b1 + b1.T, b2 + b2.T])
    phi = np.tile([1.0, 0.9], (len(zt), 1))
    F = np.empty(len(zt))
    active, count = np.arange(len(zt)), 0
    diagonal = np.arange(energy.shape[1])
    for _ in range(most):
        J = zt[active] * phi[active]
        h = -np.einsum("pa,aij->pij", J, fields)
        h[:, diagonal, diagonal] += energy[active]
        E, V = np.linalg.eigh(h)
        count += len(active)
        weight, trial = _thermal(E, T)
        new = np.stack([0.5 * ((V * (f @ V)).sum(1) * weight).sum(1) for f in fields], axis=1)
        change = np.abs(new - phi[active]).max(1)
        phi[active] = new
        F[active] = trial + (2 * J * new - zt[active] * new**2).sum(1)
        active = active[change >= tolerance]
        if not len(active):
            break
    return phi, F, count
