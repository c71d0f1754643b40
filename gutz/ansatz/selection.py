"""Which state a point is in: every family is minimised, judged, and the best trustworthy one kept.

In:  a flat `Mixture`, chemical potentials, temperatures.
Out: `DressedMinimum`, numpy arrays over the points: the state, its fields and averages, and remarks on it.
The rules of acceptance are those at the top of `gutz.ansatz.families`.
"""

from functools import partial
from typing import Any, NamedTuple

import jax
import numpy as np

from gutz.ansatz import bond, descent, dressed, evaluate, families, product
from gutz.ansatz.dressed import Look, Sites
from gutz.ansatz.families import Family, Plan
from gutz.model import Mixture
from gutz.status import Status

Array = Any

_COLDEST = 0.02
"""Below this fraction of the exchange energy the size of pair and density fields has no effect on the state: their
minimum is found at this temperature, and evaluated at the one asked for."""

_HOTTEST = 2.0
"""Pair and anti-pair order is not looked for above this temperature, in units of n_max times the exchange energy: the
mean-field transition is at the exchange energy for one atom per site and grows with the filling."""

_PROBE = 0.3
_STABLE = 0.2
"""Pair and anti-pair fields are tried unless the normal state in a field of `_PROBE` times its natural size is pulled
back with at least `_STABLE` of the strength it would have without exchange, and has the higher free energy. Of 2000
random points, all whose order was not rounding had less than 0.1."""

_PREFERENCE = 1e-13
"""Free energies closer than this, relative to 1 + |F|, are equal; the family first in `Family` is taken."""


class DressedMinimum(NamedTuple):
    """States of N points. Shapes: (N,) unless given.

    family: `Family`. fields: trial fields in the order of `dressed.NAMES`, (N, sublattice, field). lam: 1, or 0 for the
    product state. status: bits of `Status`. dressing: |F_bond| / sqrt<V²>. softness: curvature in the
    single-particle fields relative to free response, > 0 in a stable state without single-particle order, 0 where there
    is such order. phi, filling: (N, sublattice, species). pair, antipair: <b_1 b_2>, <b_1† b_2>, (N, sublattice).
    energies: free energy of each family, inf where it was found not to be acceptable, (N, 4); stability against
    single-particle order is asked of those only that would win. look: all of the functional at the state, see `survey`.
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
    look: Look


def minimise(
    mixture: Mixture, mu: Array, T: Array, n_max: int, sublattices: int, product_x: Array | None = None
) -> DressedMinimum:
    """Find the state of every point of a flat mixture.

    mu: (N, species). T: (N,). product_x: order parameters at the product minimum, (N, sublattice, species).
    """
    mu, T = np.asarray(mu, float), np.asarray(T, float)
    sites = evaluate.numbers(dressed.sites(mixture, mu, T, n_max, sublattices))
    exchange = _exchange(mixture, sites.z_t)
    x = _product(sites, n_max) if product_x is None else np.asarray(product_x, float)
    out: DressedMinimum | None = None
    for cold in (False, True):
        index = np.flatnonzero((T == 0) == cold)
        if not index.size:
            continue
        part = _Points(evaluate.pick(sites, index), exchange[index], n_max, cold).solve(x[index])
        if out is None:
            out = jax.tree.map(partial(_empty, T.size), part)
        for whole, piece in zip(jax.tree.leaves(out), jax.tree.leaves(part), strict=True):
            whole[index] = piece
    if out is None:
        raise ValueError("no points")
    return out


def _empty(size: int, like: np.ndarray) -> np.ndarray:
    return np.zeros((size, *like.shape[1:]), like.dtype)


def _product(p: Sites, n_max: int) -> np.ndarray:
    """Order parameters at the product minimum, padded so that few shapes are compiled."""
    size, room = p.T.size, max(16, 1 << (p.T.size - 1).bit_length())
    at = np.minimum(np.arange(room), size - 1)
    start = np.full((room, p.energy.shape[1], p.z_t.shape[1]), 0.7)
    found = descent.descend(
        product.Sites(p.energy[at], p.z_t[at], p.T[at]), np.arange(room), start, np.asarray(size),
        n_max=n_max, lanes=min(64, room),
    )  # fmt: skip
    x = np.asarray(found.x)[:size]
    return np.where(np.abs(x) > families.ORDER_FLOOR, x, 0.0)


class _State(NamedTuple):
    """A family at every point. fields: in the order of `dressed.NAMES`; ok: nothing speaks against it yet."""

    fields: np.ndarray
    ok: np.ndarray
    free_energy: np.ndarray
    dressing: np.ndarray


class _Points:
    """Points that are all at T = 0 (`cold`) or all at T > 0."""

    def __init__(self, sites: Sites, exchange: np.ndarray, n_max: int, cold: bool) -> None:
        self.sites, self.exchange, self.n_max, self.cold = sites, exchange, n_max, cold
        self.size, self.sublattices = sites.energy.shape[:2]
        self.species = sites.z_t.shape[1]
        self.names = dressed.NAMES[self.species]
        self.slow_T = np.maximum(sites.T, _COLDEST * exchange)
        self.ceiling = np.full(self.size, np.inf)

    def solve(self, x: np.ndarray) -> DressedMinimum:
        """Minimise every family and pick."""
        single, collapsed = self._single(x)
        valid = single.ok & (single.dressing <= families.DRESSING_LIMIT) & (self.slow_T == self.sites.T)
        self.ceiling = np.where(valid, single.free_energy, np.inf)
        everywhere = np.ones(self.size, bool)
        normal = self._without_singles(Family.NORMAL, everywhere)
        states = {Family.SINGLE: single, Family.NORMAL: normal}
        for family in (Family.PAIR, Family.ANTIPAIR) if self.species == 2 else ():
            states[family] = self._without_singles(family, self._may_order(family, normal))
        return self._pick(states, collapsed, x)

    def _pick(self, states: dict[Family, _State], collapsed: np.ndarray, x: np.ndarray) -> DressedMinimum:
        energies = np.full((self.size, len(Family)), np.inf)
        fields = np.zeros((len(Family) + 1, self.size, self.sublattices, len(self.names)))
        for family, state in states.items():
            ok = state.ok & np.isfinite(state.free_energy) & (state.dressing <= families.DRESSING_LIMIT)
            energies[:, family] = np.where(ok, state.free_energy, np.inf)
            fields[family] = state.fields
        fields[-1, ..., : self.species] = self.sites.z_t[:, None, :] * x[:, ::-1, :]
        row, soft = self._stable(energies, fields, collapsed)
        fallback = row == len(Family)
        chosen = np.take_along_axis(fields, row[None, :, None, None], 0)[0]
        lam = np.where(fallback, 0.0, 1.0)
        look = survey(self.sites, chosen, lam, np.where(fallback, Family.SINGLE, row), self.n_max, cold=self.cold)
        phi = look.phi
        # Minus the derivative in a uniform source of Q: the trial average, corrected where the family left this field
        # out. (A staggered source on a number that does not fluctuate has no meaning, see `families.variants`.)
        mean = look.mean - look.gradient.sum(1, keepdims=True)
        dressing = families.dressing(look)
        has_order = np.abs(phi).max((-1, -2)) > families.ORDER_FLOOR
        family_code = np.where(fallback, np.where(has_order, Family.SINGLE, Family.NORMAL), row)
        F = look.free_energy
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
            soft,
            np.where(np.abs(phi) > families.ORDER_FLOOR, phi, 0.0),
            0.5 * mean[..., 2] if two else zero,
            0.5 * mean[..., 3] if two else zero,
            mean[..., -self.species :],
            energies,
            look,
        )

    def _stable(self, energies: np.ndarray, fields: np.ndarray, collapsed: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The lowest family of each point that is stable against single-particle order, len(Family) for none, and its
        softness. Only those that would win are examined; unstable ones get the energy inf."""
        plan = Plan("full", self.names, (1.0,), self.n_max, self.species, self.cold)
        row, soft = np.full(self.size, len(Family)), np.zeros(self.size)
        todo = np.arange(self.size)
        while todo.size:
            best = energies[todo].min(-1, keepdims=True)
            slack = _PREFERENCE * (1.0 + np.abs(np.where(np.isfinite(best), best, 0.0)))
            first = np.argmax(energies[todo] <= best + slack, axis=-1)
            settled = ~np.isfinite(best[:, 0]) | (first == Family.SINGLE)
            row[todo[settled]] = np.where(np.isfinite(best[settled, 0]), first[settled], len(Family))
            todo, first = todo[~settled], first[~settled]
            if not todo.size:
                break
            normal = first == Family.NORMAL
            x = fields[first, todo].copy()
            # The single-particle family branches off where no density field is on. In an insulator such a field costs
            # nothing, so its size is no more than noise, but it would move this branching point.
            uniform = x[normal][..., -self.species :].mean(1, keepdims=True)
            x[np.flatnonzero(normal), :, -self.species :] -= uniform
            found = families.onset(evaluate.pick(self.sites, todo), x, np.ones(todo.size), plan=plan)
            ok = (found.dressed > 0) & (~normal | (found.product > 0) | collapsed[todo])
            row[todo[ok]], soft[todo[ok]] = first[ok], found.dressed[ok]
            energies[todo[~ok], first[~ok]] = np.inf
            todo = todo[~ok]
        return row, soft

    def _single(self, x: np.ndarray) -> tuple[_State, np.ndarray]:
        """Follow the product minimum to λ = 1; where that has no order the family is empty. Returns the family and
        where its order shrank to zero on the way."""
        J = self.sites.z_t[:, None, :] * x[:, ::-1, :]
        names = families.variants(Family.SINGLE, self.species, self.sublattices)[0]
        scale = np.empty_like(J)
        scale[:] = 0.1 * np.maximum(self.sites.z_t.max(-1), 1e-12)[:, None, None]
        index = np.flatnonzero(np.abs(x).max((-1, -2)) > 0)

        def follow(index: np.ndarray, stages: tuple[float, ...]) -> tuple[_State, np.ndarray]:
            state, _, phi = self._descend(
                Family.SINGLE, names, index, J[index], scale[index], self.sites, self.cold, stages=stages
            )
            return state, np.abs(phi).max((-1, -2)) > families.SINGLE_FLOOR

        state, ordered = follow(index, families.QUICK)
        sure = state.ok & ordered & (state.dressing <= families.DRESSING_LARGE)
        again, better = follow(index[~sure[index]], families.CAREFUL)
        state = _State(*(_where(sure, old, new) for old, new in zip(state, again, strict=True)))
        ordered = np.where(sure, ordered, better)
        return state._replace(ok=state.ok & ordered), state.ok & ~ordered

    def _may_order(self, family: Family, normal: _State) -> np.ndarray:
        """Where the normal state is not clearly stable against a uniform pair or anti-pair field, or is no good."""
        out = (self.slow_T > 0) & (self.slow_T < _HOTTEST * self.n_max * self.exchange)
        index = np.flatnonzero(out & normal.ok & (self.slow_T == self.sites.T))
        if not index.size or self.sublattices == 2:
            return out
        names = families.variants(family, self.species, self.sublattices)[0]
        field = _PROBE * np.maximum(self.exchange, self.slow_T)[index]
        held = [self.names.index(name) for name in names]
        x = np.ascontiguousarray(normal.fields[index][..., held])
        x[..., 0] = field[:, None]
        look = evaluate.look(
            evaluate.pick(self.sites._replace(T=self.slow_T), index), x, np.ones(index.size),
            f=bond.frame(self.n_max, self.species, families.KIND[family]), names=names, cold=False, energies=False,
        )  # fmt: skip
        pulled_back = look.gradient[:, 0, 0] > _STABLE * field * look.response[:, 0, 0, 0]
        out[index] = ~(pulled_back & (look.free_energy > normal.free_energy[index]))
        return out

    def _without_singles(self, family: Family, possible: np.ndarray) -> _State:
        """Normal, pair and anti-pair families, from one uniform start and, on two sublattices, staggered ones."""
        size = np.maximum(self.exchange, self.slow_T)
        sites = self.sites._replace(T=self.slow_T)
        index = np.flatnonzero(possible & (self.slow_T > 0))
        best = self._nothing()
        if family is Family.NORMAL:
            # Without fields: the plain expansion, which is always there. Density fields lower it by little, and where
            # one is flat (in an insulator) its minimum may not be found.
            best = self._at_own_temperature(family, best._replace(ok=np.ones(self.size, bool)))
        for names in families.variants(family, self.species, self.sublattices):
            for tilt in (0.0,) if self.sublattices == 1 else (0.0, 0.5):
                start = np.zeros((self.size, self.sublattices, len(names)))
                if family is not Family.NORMAL:
                    start[..., 0] = size[:, None]
                if tilt > 0:
                    start[..., -1] = tilt * size[:, None] * np.array([1.0, -1.0])
                scale = np.broadcast_to(size[:, None, None], start.shape)
                state, order, _ = self._descend(family, names, index, start[index], scale[index], sites, False)
                if family is not Family.NORMAL:
                    state = state._replace(ok=state.ok & (order > families.PAIR_FLOOR))
                state = self._at_own_temperature(family, state)
                F = state.free_energy
                lower = state.ok & np.isfinite(F) & (F + 1e-12 * (1.0 + np.abs(F)) < best.free_energy)
                lower &= state.dressing <= families.DRESSING_LIMIT
                if self.sublattices == 2 and family is Family.NORMAL and lower.any():
                    # A staggered field can run away to where it closes a gap: single atoms would order there.
                    at = np.flatnonzero(lower)
                    found = families.onset(
                        evaluate.pick(self.sites, at), state.fields[at], np.ones(at.size),
                        plan=Plan("full", self.names, (1.0,), self.n_max, self.species, self.cold),
                    )  # fmt: skip
                    lower[at] = (found.dressed > 0) & (found.product > 0)
                best = _State(*(_where(lower, new, old) for new, old in zip(state, best, strict=True)))
        return best

    def _nothing(self) -> _State:
        shape = (self.size, self.sublattices, len(self.names))
        no = np.zeros(self.size, bool)
        return _State(np.zeros(shape), no, np.full(self.size, np.inf), np.zeros(self.size))

    def _at_own_temperature(self, family: Family, state: _State) -> _State:
        """Evaluate again where the fields were found at another temperature."""
        index = np.flatnonzero(state.ok & ((self.slow_T != self.sites.T) | ~np.isfinite(state.free_energy)))
        if not index.size:
            return state
        look = survey(
            evaluate.pick(self.sites, index), state.fields[index], np.ones(index.size),
            np.full(index.size, family), self.n_max, cold=self.cold,
        )  # fmt: skip
        ok, F, dressing = state.ok.copy(), state.free_energy.copy(), state.dressing.copy()
        F[index], dressing[index] = look.free_energy, families.dressing(look)
        if family is not Family.NORMAL:
            column = self.names.index(families.variants(family, self.species, self.sublattices)[0][0])
            ok[index] &= np.abs(look.mean[..., column]).max(-1) > families.PAIR_FLOOR
        return _State(state.fields, ok, F, dressing)

    def _descend(
        self,
        family: Family,
        names: tuple[str, ...],
        index: np.ndarray,
        start: np.ndarray,
        scale: np.ndarray,
        sites: Sites,
        cold: bool,
        stages: tuple[float, ...] = (1.0,),
    ) -> tuple[_State, np.ndarray, np.ndarray]:
        """Run the jobs; returns the family at all points, the average that its first field couples to, and phi."""
        out = self._nothing()
        order, phi = np.zeros(self.size), np.zeros((self.size, self.sublattices, self.species))
        if index.size == 0:
            return out, order, phi
        extrapolate = stages == families.QUICK
        plan = Plan(families.KIND[family], names, stages, self.n_max, self.species, cold, 0, extrapolate)
        found = families.descend(sites, index, start, scale, plan=plan, ceiling=self.ceiling[index])
        # The functional is even in every order-making field; the sign is a choice of phase.
        for i, name in enumerate(names):
            column = found.x[..., i]
            if families.makes_order(name):
                overall = np.where(column[np.arange(index.size), np.abs(column).argmax(-1)] < 0, -1.0, 1.0)
                column = column * overall[:, None]
            out.fields[index] += column[..., None] * families.spread(name, self.species)
        out.ok[index], out.free_energy[index], out.dressing[index] = found.converged, found.free_energy, found.dressing
        order[index], phi[index] = np.abs(found.mean[..., 0]).max(-1), found.phi
        return out, order, phi


def _where(which: np.ndarray, new: np.ndarray, old: np.ndarray) -> np.ndarray:
    return np.where(which.reshape(-1, *[1] * (new.ndim - 1)), new, old)


def survey(p: Sites, fields: np.ndarray, lam: np.ndarray, family: np.ndarray, n_max: int, *, cold: bool) -> Look:
    """Look at states of known families, each in the smallest basis that holds its fields.

    fields: in the order of `dressed.NAMES`, (point, sublattice, field). Averages and gradients of fields that a
    symmetry of the family makes vanish are 0; so are all responses of these fields, which are not asked for.
    """
    species = p.z_t.shape[1]
    whole: Look | None = None
    for code in np.unique(family):
        index = np.flatnonzero(family == code)
        f = bond.frame(n_max, species, families.KIND[Family(code)])
        held = [i for i, name in enumerate(dressed.NAMES[species]) if f.holds(name)]
        names = tuple(dressed.NAMES[species][i] for i in held)
        part = evaluate.look(
            evaluate.pick(p, index), np.ascontiguousarray(fields[index][..., held]), lam[index],
            f=f, names=names, cold=cold,
        )  # fmt: skip
        part = _widened(part, held, len(dressed.NAMES[species]))
        if whole is None:
            whole = Look(*(np.zeros((len(lam), *v.shape[1:])) for v in part))
        for everything, piece in zip(whole, part, strict=True):
            everything[index] = piece
    assert whole is not None
    return whole


def _widened(look: Look, held: list[int], n: int) -> Look:
    shape = look.mean.shape[:-1]
    gradient, mean, response = np.zeros((*shape, n)), np.zeros((*shape, n)), np.zeros((*shape, n, n))
    gradient[..., held], mean[..., held] = look.gradient, look.mean
    response[..., np.array(held)[:, None], held] = look.response
    return look._replace(gradient=gradient, mean=mean, response=response)


def _exchange(mixture: Mixture, z_t: np.ndarray) -> np.ndarray:
    """Second-order exchange on all bonds of a site, z t1 t2 / |U12| (at most z t): the scale of slow fields."""
    U = np.asarray(mixture.U)
    stiff = np.abs(np.asarray(mixture.U12)) if mixture.species == 2 else U[:, 0]
    product_t = z_t[:, 0] * z_t[:, -1]
    largest = np.sqrt(product_t)
    return product_t / (2 * mixture.dim) / np.maximum(stiff, largest + 1e-300)
