"""What a dressed state says: thermodynamics, responses, coherence and stiffness, as derivatives of the functional.

In:  a flat `Mixture`, chemical potentials, temperatures and the `DressedMinimum` found there.
Out: `DressedObservables`, numpy arrays over the points.

First derivatives are taken at fixed fields (envelope theorem: the fields are stationary). Second derivatives
add the response of the fields, dx/dy = -H^-1 ∂²F/∂x∂y, from central differences of exact gradients. The stiffness
has no such part: the functional is even in the twist at any fields.
"""

from typing import Any, NamedTuple

import numpy as np

from gutz.ansatz import bond, dressed, evaluate, families
from gutz.ansatz.dressed import Look, Sites
from gutz.ansatz.families import Family
from gutz.ansatz.selection import DressedMinimum
from gutz.fock import local_space
from gutz.model import Mixture

Array = Any


_SPIN = len(Family) + 1

_ROUNDING = 1e-13
"""Gradients closer than this, relative to 1 + |F|, are equal: some hundred times their rounding error."""


class DressedObservables(NamedTuple):
    """Per site, for N points. free_energy, entropy, energy, heat_capacity: (N,). filling: (N, species).

    number_covariance, compressibility: (N, species, species). coherence: <b†_ia b_ja> on a bond, (N, species,
    direction). stiffness: d2F/dtheta_a dtheta_b, (N, species, species, direction).
    """

    free_energy: Array
    entropy: Array
    energy: Array
    filling: Array
    number_covariance: Array
    compressibility: Array
    heat_capacity: Array
    coherence: Array
    stiffness: Array


def _responses(
    p: Sites, number: Array, x: Array, lam: Array, along: Array, f: bond.Frame, names: tuple[str, ...], *, cold: bool
) -> tuple[Array, Array]:
    """Second derivatives of F in (directions `along` of the fields, mu, T), and the step of the differences.

    along: (n, sublattice, field)."""
    n, a, sublattices = along.shape[0], len(number), x.shape[1]
    densities = [names.index(f"nu{i + 1}") for i in range(a)]

    def slopes(energy: Array, T: Array, x: Array) -> Array:
        at = evaluate.look(p._replace(energy=energy, T=T), x, lam, f=f, names=names, cold=cold, energies=False)
        # mu and nu enter h alike; nu has an explicit part besides.
        in_mu = (at.gradient[..., densities] - at.mean[..., densities] / sublattices).sum(1)
        fields = np.einsum("psk,nsk->pn", at.gradient, along)
        return np.concatenate([fields, in_mu, at.in_T[:, None]], -1)

    # Small against T, or against the level spacings.
    width = p.energy.max((-1, -2)) - p.energy.min((-1, -2)) + p.z_t.sum(-1)
    step = 1e-4 * (0.1 * width if cold else np.minimum(0.1 * width, p.T))
    out = np.zeros((len(x), n + a + 1, n + a + 1))
    for column in range(n + a + (not cold)):
        around = []
        for sign in (1.0, -1.0):
            e = sign * step
            energy, T, moved = p.energy, p.T, x
            if column < n:
                moved = x + e[:, None, None] * along[column]
            elif column < n + a:
                energy = p.energy - e[:, None, None] * number[column - n]
            else:
                T = p.T + e
            around.append(slopes(energy, T, moved))
        out[:, :, column] = (around[0] - around[1]) / (2.0 * step[:, None])
    return out, step


def observables(
    mixture: Mixture, mu: Array, T: Array, n_max: int, sublattices: int, state: DressedMinimum
) -> DressedObservables:
    """Everything `DressedObservables` lists, for the states given; points may be of any family and T ≥ 0.

    mixture: flat, N points. mu: (N, species). T: (N,).
    """
    mu, T = np.asarray(mu, float), np.asarray(T, float)
    species, dim = mixture.species, mixture.dim
    N = T.size
    out = DressedObservables(*(np.zeros((N, *s)) for s in _shapes(species, dim)))
    family = np.where(state.lam > 0, state.family, len(Family))
    if species == 2 and sublattices == 2:
        # Normal states carry total or difference fields (`families.variants`): a code of its own for the latter.
        nu = state.fields[..., -2:]
        spin = np.abs(nu[..., 0] - nu[..., 1]).max(-1) > np.abs(nu.sum(-1)).max(-1)
        family = np.where((family == Family.NORMAL) & spin, _SPIN, family)
    sites = evaluate.numbers(dressed.sites(mixture, mu, T, n_max, sublattices))
    for cold in (False, True):
        for code in np.unique(family):
            index = np.flatnonzero(((T == 0) == cold) & (family == code))
            if index.size:
                part = _group(sites, np.asarray(mixture.t), mu, n_max, state, index, int(code), cold)
                for whole, piece in zip(out, part, strict=True):
                    whole[index] = piece
    return out


def _shapes(species: int, dim: int) -> list[tuple[int, ...]]:
    pair = (species, species)
    return [(), (), (), (species,), pair, pair, (), (species, dim), (*pair, dim)]


def _group(
    sites: Sites, t: np.ndarray, mu: np.ndarray, n_max: int, state: DressedMinimum,
    index: np.ndarray, code: int, cold: bool,
) -> DressedObservables:  # fmt: skip
    """Points of one family, or code, see `observables`."""
    p, t, mu = evaluate.pick(sites, index), t[index], mu[index]
    T, sublattices, species = p.T, p.energy.shape[1], p.z_t.shape[1]
    family = Family.SINGLE if code == len(Family) else Family(code % _SPIN)
    f = bond.frame(n_max, species, families.KIND[family])
    densities = tuple(f"nu{a + 1}" for a in range(species))
    singles = families.variants(Family.SINGLE, species, sublattices)[0]
    order = {Family.SINGLE: singles, Family.PAIR: ("K",), Family.ANTIPAIR: ("M",)}.get(family, ())
    names = (*order, *densities)
    held = [dressed.NAMES[species].index(name) for name in names]
    used = families.variants(family, species, sublattices)[1 if code == _SPIN else 0]
    along = np.zeros((sublattices, len(used), sublattices, len(names)))
    for site in range(sublattices):
        along[site, :, site] = [families.spread(name, species)[held] for name in used]
    along = along.reshape(-1, sublattices, len(names))
    x, lam = np.ascontiguousarray(state.fields[index][..., held]), state.lam[index]
    look = Look(*(v[index] for v in state.look))
    number = local_space(n_max, species).number
    second, step = _responses(p, number, x, lam, along, f, names, cold=cold)

    F, entropy = look.free_energy, -look.in_T
    # Derivatives in the energy of a basis state are corrected occupations; averages of number operators follow.
    filling = np.einsum("nsi,ai->na", look.in_energy, number)
    squares = np.einsum("nsi,ai,bi->nab", look.in_energy, number, number)
    covariance = squares - filling[:, :, None] * filling[:, None, :]
    condensed = (look.phi * look.phi[:, ::-1]).mean(1)
    hopping = np.einsum("nab,nbd->nad", look.parts.sum(1), t)
    coherence = condensed[:, :, None] - lam[:, None, None] * hopping
    reduced = _relaxed(second, len(along), _ROUNDING * (1.0 + np.abs(F)) / step)
    stiffness = _stiffness(t, look.parts * lam[:, None, None, None], condensed)
    return DressedObservables(
        F,
        entropy,
        F + T * entropy + (mu * filling).sum(-1),
        filling,
        covariance,
        -reduced[:, :species, :species],
        -T * reduced[:, -1, -1],
        coherence,
        stiffness,
    )


def _relaxed(second: np.ndarray, n: int, rounding: np.ndarray) -> np.ndarray:
    """Second derivatives in (mu, T) after the n fields have followed; directions whose curvature is lost in rounding
    (a Mott plateau) do not move."""
    second = 0.5 * (second + np.swapaxes(second, -1, -2))
    H, mixed, rest = second[:, :n, :n], second[:, :n, n:], second[:, n:, n:]
    if n == 0:
        return rest
    size = np.abs(np.diagonal(H, axis1=-2, axis2=-1))
    flat = size <= rounding[:, None]
    H = np.where(flat[:, :, None] | flat[:, None, :], np.eye(n), H)
    mixed = np.where(flat[:, :, None], 0.0, mixed)
    size = np.sqrt(np.where(flat, 1.0, size))
    inverse = np.linalg.pinv(H / size[:, :, None] / size[:, None, :], rcond=1e-9, hermitian=True)
    scaled = mixed / size[:, :, None]
    return rest - np.swapaxes(scaled, -1, -2) @ inverse @ scaled


def _stiffness(t: np.ndarray, parts: np.ndarray, condensed: np.ndarray) -> np.ndarray:
    """Second derivative in the twist: t_a t_b [B+_ab cos(θa + θb) + B-_ab cos(θa - θb)] - 2 t_a φ_a² cos θa."""
    species, dim = t.shape[1:]
    out = np.zeros((t.shape[0], species, species, dim))
    for a in range(species):
        out[:, a, a] = 2.0 * t[:, a] * condensed[:, a, None] - 4.0 * t[:, a] ** 2 * parts[:, 0, a, a, None]
        for b in range(species):
            if b != a:
                both = 2.0 * t[:, a] * t[:, b]
                out[:, a, a] -= both * (parts[:, 0, a, b] + parts[:, 1, a, b])[:, None]
                out[:, a, b] = both * (parts[:, 1, a, b] - parts[:, 0, a, b])[:, None]
    return out
