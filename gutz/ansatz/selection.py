"""Which state a point is in: every family is minimised, judged, and the best trustworthy one kept.

In:  a flat `Mixture`, chemical potentials, temperatures.
Out: `DressedMinimum`, numpy arrays over the points: the state, its fields and averages, and remarks on it.
The rules of acceptance are those at the top of `gutz.ansatz.families`.
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from gutz.ansatz import bond, descent, dressed, families, product
from gutz.ansatz.dressed import Look, Sites
from gutz.ansatz.families import Family, Plan, Reached
from gutz.model import Mixture
from gutz.status import Status

Array = Any

_COLDEST = 0.02
"""Below this fraction of the exchange energy the size of pair and density fields has no effect on the state: their
minimum is found at this temperature, and evaluated at the one asked for."""

_HOTTEST = 2.0
"""Pair and anti-pair order is not looked for above this temperature, in units of n_max times the exchange energy: the
mean-field transition is at the exchange energy for one atom per site and grows with the filling."""

_PREFERENCE = 1e-13
"""Free energies closer than this, relative to 1 + |F|, are equal; the family first in `Family` is taken."""


class DressedMinimum(NamedTuple):
    """States of N points. Shapes: (N,) unless given.

    family: `Family`. fields: trial fields in the order of `dressed.NAMES`, (N, sublattice, field). lam: 1, or 0 for the
    product state. status: bits of `Status`. dressing: |F_bond| / sqrt<V²>. softness: curvature in the
    single-particle fields relative to free response, > 0 in a stable state without single-particle order, 0 where there
    is such order. phi, filling: (N, sublattice, species). pair, antipair: <b_1 b_2>, <b_1† b_2>, (N, sublattice).
    energies: free energy of each family where it is acceptable, else inf, (N, 4).
    """

    family: Array
    fields: Array
    lam: Array
    free_energy: Array
    status: Array
    dressing: Array
    softness: Array
    phi: Array
    pair: Array
    antipair: Array
    filling: Array
    energies: Array


def minimise(
    mixture: Mixture, mu: Array, T: Array, n_max: int, sublattices: int, product_x: Array | None = None
) -> DressedMinimum:
    """Find the state of every point of a flat mixture.

    mu: (N, species). T: (N,). product_x: order parameters at the product minimum, (N, sublattice, species).
    """
    mu, T = np.asarray(mu, float), np.asarray(T, float)
    out: DressedMinimum | None = None
    for cold in (False, True):
        group = np.flatnonzero((T == 0) == cold)
        for begin in range(0, group.size, families.CHUNK):
            index = group[begin : begin + families.CHUNK]
            # Padding repeats the last point, so that few shapes are compiled.
            padded = np.concatenate([index, np.full(_room(index.size) - index.size, index[-1])])
            x = None if product_x is None else np.asarray(product_x)[padded]
            part = _Points(mixture[padded], mu[padded], T[padded], n_max, sublattices, cold).solve(x)
            if out is None:
                out = DressedMinimum(*(np.zeros((T.size, *v.shape[1:]), v.dtype) for v in part))
            for whole, piece in zip(out, part, strict=True):
                whole[index] = piece[: index.size]
    if out is None:
        raise ValueError("no points")
    return out


def _room(size: int) -> int:
    return max(16, 1 << (size - 1).bit_length())


class _Points:
    """The points of one compiled shape: all at T = 0 (`cold`) or all at T > 0."""

    def __init__(
        self, mixture: Mixture, mu: np.ndarray, T: np.ndarray, n_max: int, sublattices: int, cold: bool
    ) -> None:
        self.species, self.sublattices, self.n_max, self.cold = mixture.species, sublattices, n_max, cold
        self.names = dressed.NAMES[self.species]
        self.size = T.size
        self.sites = dressed.sites(mixture, jnp.asarray(mu), jnp.asarray(T), n_max, sublattices)
        self.z_t = np.asarray(self.sites.z_t)
        self.exchange = _exchange(mixture, self.z_t)
        self.T = T
        self.slow_T = np.maximum(T, _COLDEST * self.exchange)
        energy = np.asarray(self.sites.energy)
        self.width = energy.max((-1, -2)) - energy.min((-1, -2)) + 2 * n_max * self.z_t.sum(-1)
        self.ordinary = _plan_nodes(self.width, T)

    def solve(self, x: np.ndarray | None) -> DressedMinimum:
        """Minimise every family and pick."""
        x = self._product() if x is None else x
        states: dict[Family, tuple[np.ndarray, np.ndarray, Look, np.ndarray]] = {}
        single, ok = self._single(x)
        collapsed = ok.copy()
        look = self._survey(single, np.ones(self.size))
        ordered = np.abs(np.asarray(look.phi)).max((-1, -2)) > families.SINGLE_FLOOR
        collapsed &= ~ordered
        states[Family.SINGLE] = (single, ok & ordered, look, np.zeros(self.size))

        kinds = [Family.NORMAL] if self.species == 1 else [Family.NORMAL, Family.PAIR, Family.ANTIPAIR]
        for family in kinds:
            fields, ok, look = self._without_singles(family)
            stable = jax.block_until_ready(
                families.onset(self.sites, jnp.asarray(fields), jnp.ones(self.size), plan=self._full())
            )
            soft = np.asarray(stable.dressed)
            ok = ok & (soft > 0)
            if family is Family.NORMAL:
                ok &= (np.asarray(stable.product) > 0) | collapsed
            else:
                column = 2 if family is Family.PAIR else 3
                ok &= np.abs(np.asarray(look.mean)[..., column]).max(-1) > families.ORDER_FLOOR
            states[family] = (fields, ok, look, soft)
        return self._pick(states, x)

    def _pick(
        self, states: dict[Family, tuple[np.ndarray, np.ndarray, Look, np.ndarray]], x: np.ndarray
    ) -> DressedMinimum:
        energies = np.full((self.size, len(Family)), np.inf)
        shape = (self.size, self.sublattices, len(self.names))
        fields = np.zeros((len(Family) + 1, *shape))
        soft = np.zeros((len(Family) + 1, self.size))
        for family, (field, ok, look, softness) in states.items():
            F = np.asarray(look.free_energy)
            ok = ok & np.isfinite(F) & (_dressing(look) <= families.DRESSING_LIMIT)
            energies[:, family] = np.where(ok, F, np.inf)
            fields[family], soft[family] = field, softness
        fallback = ~np.isfinite(energies).any(-1)
        fields[-1, ..., : self.species] = self.z_t[:, None, :] * x[:, ::-1, :]
        best = energies.min(-1, keepdims=True)
        slack = _PREFERENCE * (1.0 + np.abs(np.where(np.isfinite(best), best, 0.0)))
        order = np.argmax(energies <= best + slack, axis=-1)
        row = np.where(fallback, len(Family), order)
        chosen = np.take_along_axis(fields, row[None, :, None, None], 0)[0]
        lam = np.where(fallback, 0.0, 1.0)
        look = self._survey(chosen, lam)
        phi = np.asarray(look.phi)
        # Minus the derivative in a uniform source of Q: the trial average, corrected where the family left this field
        # out. (A staggered source on a number that does not fluctuate has no meaning, see `families.variants`.)
        mean = np.asarray(look.mean) - np.asarray(look.gradient).sum(1, keepdims=True)
        dressing = _dressing(look)
        has_order = np.abs(phi).max((-1, -2)) > families.ORDER_FLOOR
        family_code = np.where(fallback, np.where(has_order, Family.SINGLE, Family.NORMAL), order)
        F = np.asarray(look.free_energy)
        status = np.where(fallback, int(Status.FALLBACK), 0)
        status |= np.where(dressing > families.DRESSING_LARGE, int(Status.DRESSING_LARGE), 0)
        status |= np.where(np.isfinite(F), 0, int(Status.NOT_FINITE))
        zero = np.zeros(mean.shape[:-1])
        two = self.species == 2
        return DressedMinimum(
            family_code.astype(np.int8),
            chosen,
            lam,
            F,
            status.astype(np.int32),
            dressing,
            np.take_along_axis(soft, row[None], 0)[0],
            np.where(np.abs(phi) > families.ORDER_FLOOR, phi, 0.0),
            0.5 * mean[..., 2] if two else zero,
            0.5 * mean[..., 3] if two else zero,
            mean[..., -self.species :],
            energies,
        )

    def _full(self) -> Plan:
        return Plan("full", self.names, (1.0,), self.n_max, self.species, self.cold, self.ordinary)

    def _survey(self, fields: np.ndarray, lam: np.ndarray) -> Look:
        # Waiting keeps eigensolver calls of different programs from running at the same time.
        return jax.block_until_ready(
            families.survey(self.sites, jnp.asarray(fields), jnp.asarray(lam), plan=self._full())
        )

    def _product(self) -> np.ndarray:
        p = product.Sites(self.sites.energy, self.sites.z_t, self.sites.T)
        start = np.full((self.size, self.sublattices, self.species), 0.7)
        found = descent.descend(
            p, jnp.arange(self.size), jnp.asarray(start), jnp.asarray(self.size), n_max=self.n_max, lanes=64
        )
        x = np.asarray(found.x)
        return np.where(np.abs(x) > families.ORDER_FLOOR, x, 0.0)

    def _single(self, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Follow the product minimum to λ = 1; where that has no order the family is empty."""
        J = self.z_t[:, None, :] * x[:, ::-1, :]
        names = families.variants(Family.SINGLE, self.species, self.sublattices)[0]
        scale = np.empty_like(J)
        scale[:] = 0.1 * np.maximum(self.z_t.max(-1), 1e-12)[:, None, None]
        index = np.flatnonzero(np.abs(x).max((-1, -2)) > 0)
        return self._descend(Family.SINGLE, names, index, J[index], scale[index], self.sites, self.cold)

    def _without_singles(self, family: Family) -> tuple[np.ndarray, np.ndarray, Look]:
        """Normal, pair and anti-pair families, from one uniform start and, on two sublattices, staggered ones."""
        size = np.maximum(self.exchange, self.slow_T)
        sites = self.sites._replace(T=jnp.asarray(self.slow_T))
        possible = self.slow_T > 0
        if family is not Family.NORMAL:
            possible &= self.slow_T < _HOTTEST * self.n_max * self.exchange
        index = np.flatnonzero(possible)
        best, good = np.zeros((self.size, self.sublattices, len(self.names))), np.zeros(self.size, bool)
        if family is Family.NORMAL:
            good = self.slow_T == 0
        lowest = np.full(self.size, np.inf)
        starts = [
            (names, tilt)
            for names in families.variants(family, self.species, self.sublattices)
            for tilt in ((0.0,) if self.sublattices == 1 else (0.0, 0.5))
        ]
        for names, tilt in starts:
            start = np.zeros((self.size, self.sublattices, len(names)))
            if family is not Family.NORMAL:
                start[..., 0] = size[:, None]
            if tilt > 0:
                start[..., -1] = tilt * size[:, None] * np.array([1.0, -1.0])
            scale = np.broadcast_to(size[:, None, None], start.shape)
            fields, ok = self._descend(family, names, index, start[index], scale[index], sites, False)
            look = self._survey(fields, np.ones(self.size))
            F = np.asarray(look.free_energy)
            ok &= np.isfinite(F)
            lower = ok & (F + 1e-12 * (1.0 + np.abs(F)) < lowest)
            best = np.where(lower[:, None, None], fields, best)
            lowest, good = np.where(lower, F, lowest), good | ok
        return best, good, look if len(starts) == 1 else self._survey(best, np.ones(self.size))

    def _descend(
        self,
        family: Family,
        names: tuple[str, ...],
        index: np.ndarray,
        start: np.ndarray,
        scale: np.ndarray,
        sites: Sites,
        cold: bool,
    ) -> tuple[np.ndarray, np.ndarray]:
        """Run the jobs; returns fields of all points in the order of `dressed.NAMES`, and where they converged."""
        fields = np.zeros((self.size, self.sublattices, len(self.names)))
        ok = np.zeros(self.size, bool)
        if index.size == 0:
            return fields, ok
        nodes = _plan_nodes(self.width, np.asarray(sites.T)) if not cold else 0
        plan = Plan(
            families.KIND[family],
            names,
            families.STAGES.get(family, (1.0,)),
            self.n_max,
            self.species,
            cold,
            nodes,
        )
        room = self.size - index.size
        found: Reached = families.descend(
            sites,
            jnp.asarray(np.concatenate([index, np.full(room, index[-1])])),
            jnp.asarray(np.concatenate([start, np.repeat(start[-1:], room, 0)])),
            jnp.asarray(np.concatenate([scale, np.repeat(scale[-1:], room, 0)])),
            jnp.asarray(index.size),
            plan=plan,
            lanes=min(families.LANES, self.size),
        )
        x = np.asarray(found.x)[: index.size]
        # The functional is even in every order-making field; the sign is a choice of phase.
        for i, name in enumerate(names):
            column = x[..., i]
            if families.makes_order(name):
                overall = np.where(column[np.arange(index.size), np.abs(column).argmax(-1)] < 0, -1.0, 1.0)
                column = column * overall[:, None]
            fields[index] += column[..., None] * families.spread(name, self.species)
        ok[index] = np.asarray(found.converged)[: index.size]
        return fields, ok


def _exchange(mixture: Mixture, z_t: np.ndarray) -> np.ndarray:
    """Second-order exchange on all bonds of a site, z t1 t2 / |U12| (at most z t): the scale of slow fields."""
    U = np.asarray(mixture.U)
    stiff = np.abs(np.asarray(mixture.U12)) if mixture.species == 2 else U[:, 0]
    product_t = z_t[:, 0] * z_t[:, -1]
    largest = np.sqrt(product_t)
    return product_t / (2 * mixture.dim) / np.maximum(stiff, largest + 1e-300)


def _plan_nodes(width: np.ndarray, T: np.ndarray) -> int:
    warm = T > 0
    if not warm.any():
        return 0
    return bond.enough_nodes(float((width[warm] / T[warm]).max()))


def _dressing(look: Look) -> np.ndarray:
    variance = np.asarray(look.variance)
    root = np.sqrt(np.where(variance > 0, variance, 1.0))
    return np.where(variance > 0, -np.asarray(look.bond) / root, 0.0)
