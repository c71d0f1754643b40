"""Integrable chains: closed results in one dimension, free of any cutoff or extrapolation.

In:  couplings (XXZ anisotropy; t and U12 of the hard-core mixture), or a one-species hard-core model.
Out: energies, velocities, Luttinger parameters of the infinite chain; hard-core bosons as free fermions.
Convention: the boson Luttinger parameter K, 1 for hard-core bosons, infinite for free bosons,
<b+(x) b(0)> ~ x^(-1/(2K)).
Methods: Bethe ansatz (Yang & Yang 1966; Lieb & Wu 1968), Jordan-Wigner strings as determinants
(Lieb, Schultz & Mattis 1961).
"""

from dataclasses import dataclass

import numpy as np
from scipy.integrate import quad
from scipy.special import expit, j0, j1

from gutz.errors import InputError
from gutz.exact.lattice import Floats, LatticeModel


def _anisotropy_angle(delta: float) -> float:
    if not -1 < delta <= 1:
        raise InputError(f"delta: got {delta}, must lie in -1 < delta <= 1 (the gapless XXZ chain).")
    return float(np.arccos(delta))


def xxz_energy(delta: float) -> float:
    """Ground-state energy per site, unit J, of J sum (SxSx + SySy + delta SzSz) on the infinite chain.

    -1 < delta = cos(g) <= 1: delta/4 - sin(g) int_0^inf dx sinh((pi - g) x) / (sinh(pi x) cosh(g x))
    (Yang & Yang, Phys. Rev. 150, 327 (1966)), the integrand written with decaying exponentials.
    Raises InputError outside that range.
    """
    g = _anisotropy_angle(delta)
    if g < 1e-6:
        # Series in g: the correction to the integral's limit ln 2 is of order g^2.
        return delta / 4 - float(np.log(2.0))

    def integrand(y: float) -> float:
        # y = g x; sinh ratio and 1/cosh with their growing factors divided out.
        ratio = np.exp(-y) * -np.expm1(-2 * (np.pi - g) * y / g) / -np.expm1(-2 * np.pi * y / g)
        return float(ratio * 2 * np.exp(-y) / (1 + np.exp(-2 * y)))

    area = quad(integrand, 0, 40, epsabs=1e-13, epsrel=1e-13, limit=400)[0]
    return float(delta / 4 - np.sin(g) / g * area)


def xxz_luttinger(delta: float) -> float:
    """Luttinger parameter K = pi / (2 arccos(-delta)) of the XXZ chain, zero field: 1/2 at delta = 1, 1 at 0.

    Raises InputError unless -1 < delta <= 1.
    """
    return float(np.pi / (2 * (np.pi - _anisotropy_angle(delta))))


def xxz_velocity(delta: float) -> float:
    """Sound velocity (pi/2) sin(g)/g, delta = cos(g), unit J times lattice constant; -1 < delta <= 1."""
    return float(np.pi / 2 * np.sinc(_anisotropy_angle(delta) / np.pi))


def counterflow_luttinger(U: float, U12: float) -> float:
    """K of the counterflow channel, one atom per site, equal species, deep in the Mott regime (t << U, U12).

    The spin chain has delta = 1 - 2 U12/U (Kuklov & Svistunov 2003); 0 <= U12 < U.
    """
    if not (np.isfinite(U) and U > 0 and 0 <= U12 < U):
        raise InputError(f"U12: got U = {U}, U12 = {U12}, must satisfy 0 <= U12 < U.")
    return xxz_luttinger(1 - 2 * U12 / U)


def _positive_hopping(t: float) -> None:
    if not (np.isfinite(t) and t > 0):
        raise InputError(f"t: got {t}, must be finite and above 0.")


def mixture_energy(t: float, U12: float) -> float:
    """Energy per site of the infinite hard-core mixture, equal t, each species half filled, any sign of U12.

    Jordan-Wigner makes it the fermionic Hubbard chain, so with x = |U12|/t
    E/(L t) = -4 int_0^inf dw J0(w) J1(w) / (w (1 + exp(w x/2)))  (Lieb & Wu, PRL 20, 1445 (1968));
    attraction follows from particle-hole exchange of one species, E(-U12) = E(U12) - U12/2.
    Unit: that of t. Raises InputError for t <= 0.
    """
    _positive_hopping(t)
    if U12 == 0:
        return -4 * t / np.pi
    x = abs(U12) / t

    # Past the end the Fermi factor, or the J0 J1 / w ~ cos(2w) / w^2 tail, is below 1e-11.
    end = min(80 / x, 1e5)
    edges = np.linspace(0, end, int(end / 1.5) + 40)
    node, weight = np.polynomial.legendre.leggauss(16)
    half = np.diff(edges)[:, None] / 2
    w = edges[:-1, None] + half * (1 + node)
    area = np.sum(half * weight * j0(w) * j1(w) / w * expit(-w * x / 2))
    return float(-4 * t * area + min(U12, 0.0) / 2)


def mixture_gap(t: float, U12: float) -> float:
    """Gap of the half-filled hard-core mixture: charge gap for U12 > 0, cost of breaking a pair for U12 < 0.

    (16 t^2/|U12|) int_1^inf dy sqrt(y^2 - 1) / sinh(2 pi t y/|U12|)  (Lieb & Wu 1968), the gap being
    E(N+1) + E(N-1) - 2 E(N) in one species. Zero at U12 = 0. Unit: that of t. Raises InputError for t <= 0.
    """
    _positive_hopping(t)
    if U12 == 0:
        return 0.0
    decay = 2 * np.pi * t / abs(U12)

    def integrand(s: float) -> float:
        # y = 1 + s^2 removes the square root at the lower end; the factor exp(-decay) is taken out.
        y = 1 + s * s
        return float(2 * s * s * np.sqrt(y + 1) * 2 * np.exp(-decay * s * s) / -np.expm1(-2 * decay * y))

    area = quad(integrand, 0, np.sqrt(45 / decay), epsabs=0, epsrel=1e-11, limit=400)[0]
    return float(16 * t**2 / abs(U12) * np.exp(-decay) * area)


@dataclass(frozen=True, eq=False)
class HardCoreState:
    """Hard-core bosons on an open chain as free fermions; extensive values, H including - sum mu n.

    `correlation`[i, j] = <c+_i c_j> of the fermions, shape (sites, sites). `free_energy` is -T ln Xi, or the
    energy at T = 0; `entropy` in units of k_B.
    """

    temperature: float
    free_energy: float
    energy: float
    entropy: float
    correlation: Floats

    @property
    def filling(self) -> Floats:
        """Mean occupation per site, shape (sites,)."""
        return np.diag(self.correlation).copy()


def hard_core_chain(model: LatticeModel, T: float = 0.0, N: int | None = None) -> HardCoreState:
    """Exact state of one hard-core species on an open chain: T >= 0 grand-canonical, or N atoms at T = 0.

    The model must have one species, n_max = 1 and the bonds of `chain(L)`; hopping per bond and mu per
    site are free. At T = 0 without N every level below zero is filled. Raises InputError otherwise.
    """
    sites = model.cluster.sites
    if model.species != 1 or model.cutoff != (1,):
        raise InputError(f"model: got {model.species} species with n_max = {model.cutoff}, must be one with n_max = 1.")
    if not model.cluster.is_open_chain:
        raise InputError("cluster: the bonds are not those of an open chain, (i, i + 1), as they must be.")
    if not (np.isfinite(T) and T >= 0) or (N is not None and T > 0):
        raise InputError(f"T: got T = {T}, N = {N}, must be T >= 0 without N or T = 0 with N.")
    if N is not None and not 0 <= N <= sites:
        raise InputError(f"N: got {N} atoms, must lie within 0..{sites}.")
    matrix = np.diag(-model.potential[0])
    for (i, j), t in zip(model.cluster.bonds, model.hopping[0], strict=True):
        matrix[i, j] = matrix[j, i] = -t
    levels, orbitals = np.linalg.eigh(matrix)
    if T > 0:
        occupation = expit(-levels / T)
        free_energy = float(-T * np.logaddexp(0, -levels / T).sum())
    else:
        filled = N if N is not None else int(np.count_nonzero(levels < 0))
        occupation = (np.arange(sites) < filled).astype(float)
        free_energy = float(levels @ occupation)
    energy = float(levels @ occupation)
    entropy = (energy - free_energy) / T if T > 0 else 0.0
    return HardCoreState(T, free_energy, energy, entropy, (orbitals * occupation) @ orbitals.T)


def hard_core_one_body(correlation: Floats) -> Floats:
    """<b+_i b_j> of the bosons from the fermions' <c+_i c_j>, shape (sites, sites), real symmetric.

    The Jordan-Wigner string between i < j turns it into (1/2) det (2C - 1) over rows i..j-1, columns i+1..j
    (Lieb, Schultz & Mattis, Ann. Phys. 16, 407 (1961)).
    """
    sites = len(correlation)
    contraction = 2 * correlation - np.eye(sites)
    result = np.diag(np.diag(correlation)).astype(float)
    for i in range(sites):
        for j in range(i + 1, sites):
            result[i, j] = result[j, i] = 0.5 * np.linalg.det(contraction[i:j, i + 1 : j + 1])
    return result


def hard_core_density_density(correlation: Floats) -> Floats:
    """<n_i n_j> by Wick's theorem, C_ii C_jj - C_ij^2 (i != j) and <n_i> (i = j), shape (sites, sites)."""
    filling = np.diag(correlation)
    return np.outer(filling, filling) - correlation**2 + np.diag(filling)
