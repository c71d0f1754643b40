"""Exchange between sites that hold one set of degenerate states: couplings and effective bond operators.

In:  a two-species `Mixture` and the low-energy states of a site: one atom (anti-pairs), nothing or a pair
     (pairs), or any other set.
Out: second-order couplings per lattice direction, and the effective two-site operator as a matrix; batched
     and differentiable in every parameter.

Second order in the hopping, with bare interaction energies in the denominators (Schrieffer and Wolff, Phys.
Rev. 149, 491 (1966)). For pseudo-spins, with S = 1/2 operators and each bond counted once,

    H_bond = constant + J_z Sz Sz - J_perp (Sx Sx + Sy Sy) + field (Sz + Sz')
"""

from functools import lru_cache, partial
from itertools import product
from typing import Any, Literal, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.model import Mixture

Array = Any
Order = Literal["pair", "antipair"]
State = tuple[int, int]

STATES: dict[str, tuple[State, State]] = {
    "antipair": ((1, 0), (0, 1)),
    "pair": ((1, 1), (0, 0)),
}
"""Occupations (n1, n2) of pseudo-spin up and down."""


_SMALLEST = 1e-75
"""Floor of a denominator where the hopping vanishes too; its square and its inverse's square are in range."""


class ExchangeCouplings(NamedTuple):
    """Couplings of the effective bond Hamiltonian in the module's head; energies in the mixture's unit.

    perp, zz, field, constant: shape (..., direction). `field` belongs to Sz_i + Sz_j of each bond.
    gap: lowest two-site energy outside the low-energy states above those inside, shape (...); where it is not
        positive, something else is the ground state.
    validity: largest admixture of an outside state, |matrix element| / |energy difference|, shape (...).
        Small is good; the relative error of the couplings is of the order of its square. Denominators
        smaller than the hopping are replaced by the hopping, so numbers stay finite at a resonance, where
        `validity` is of order 1 and they mean nothing.
    """

    perp: Array
    zz: Array
    field: Array
    constant: Array
    gap: Array
    validity: Array

    @property
    def anisotropy(self) -> Array:
        """Delta = sum of J_z over the directions / sum of J_perp, shape (...); 0 where J_perp vanishes."""
        total = self.perp.sum(-1)
        return jnp.where(total != 0, self.zz.sum(-1) / jnp.where(total != 0, total, 1.0), 0.0)

    @property
    def pair_hopping(self) -> Array:
        """Amplitude t_p of -t_p (p†_i p_j + h.c.), p = b1 b2 (pairs) or b1† b2 (anti-pairs): J_perp / 2."""
        return 0.5 * self.perp

    @property
    def pair_interaction(self) -> Array:
        """Energy V_p of V_p n_i n_j between neighbouring pairs, n = Sz + 1/2 (positive repels): J_z."""
        return self.zz

    @property
    def pair_energy(self) -> Array:
        """Energy per bond end of a single pair, the coefficient of n_i + n_j: field - J_z / 2."""
        return self.field - 0.5 * self.zz


def exchange_couplings(mixture: Mixture, order: Order = "antipair") -> ExchangeCouplings:
    """Second-order couplings between sites with one atom ("antipair") or with a pair or nothing ("pair").

    With W = U12 for anti-pairs and W = -U12 for pairs (Kuklov and Svistunov, PRL 90, 100401 (2003); Duan,
    Demler and Lukin, PRL 91, 090402 (2003); derived again here, from the energies of two sites):

        J_perp = 4 t1 t2 / W,   J_z = 2 (t1² + t2²) / W - 4 t1² / U1 - 4 t2² / U2

    Hard cores (n_max = 1) have no U1, U2 terms. Pseudo-spin up is |1,0> or |1,1>, down |0,1> or |0,0>.
    Returns arrays of shape (..., direction). Raises InputError for one species or an unknown order.
    """
    _states_of(order)
    _two_species(mixture)
    return _couplings(mixture, order)


def bond_operator(mixture: Mixture, states: tuple[State, ...]) -> Array:
    """Effective two-site operator on any set of local states, shape (..., direction, d², d²) for d states.

    states: occupations (n1, n2). Rows and columns run over (state of the first site, state of the second),
    the second fastest. First order (hopping inside the set) plus second order; where two states of the set
    differ in energy the two denominators are averaged. Energies of the sites themselves are not included.
    Unit: the mixture's energy. Raises InputError for one species, a repeated state or one beyond the cutoff
    n_max.
    """
    _two_species(mixture)
    return _operator(mixture, _checked(states, mixture.n_max))


@partial(jax.jit, static_argnames="order")
def _couplings(mixture: Mixture, order: Order) -> ExchangeCouplings:
    hard = mixture.n_max == 1
    t = jnp.asarray(mixture.t)
    floor = t.max((-1, -2))
    sign = 1.0 if order == "antipair" else -1.0
    apart = (t**2 * _inverse(sign * mixture.U12, floor)[..., None, None]).sum(-2)
    perp = 4.0 * t[..., 0, :] * t[..., 1, :] * _inverse(sign * mixture.U12, floor)[..., None]
    double = 4.0 * t**2 * _inverse(jnp.asarray(mixture.U), floor[..., None])[..., None]
    double = jnp.zeros_like(double) if hard else double
    if order == "antipair":
        up, down = -double[..., 0, :], -double[..., 1, :]
    else:
        up, down = -double.sum(-2), jnp.zeros_like(apart)
    gap, validity = _isolation(mixture, STATES[order])
    return ExchangeCouplings(
        perp=perp,
        zz=up + down + 2.0 * apart,
        field=0.5 * (up - down),
        constant=0.25 * (up + down - 2.0 * apart),
        gap=gap,
        validity=validity,
    )


@partial(jax.jit, static_argnames="states")
def _operator(mixture: Mixture, states: tuple[State, ...]) -> Array:
    s = _space(states, mixture.n_max)
    hop = _hopping(mixture, s)
    half = _admixture(mixture, s, hop)
    second = jnp.einsum("...mi,...mj->...ij", hop, half)
    second = 0.5 * (second + jnp.swapaxes(second, -1, -2))
    first = -jnp.einsum("...ad,aij->...dij", jnp.asarray(mixture.t), jnp.asarray(s.inside))
    return first + second


class _TwoSites(NamedTuple):
    """Static structure. Energies are coefficients of (U1, U2, U12).

    low: (d², 3); outside: (m, 3); hop: b†b between low and outside states per species, (2, m, d²); inside:
    (2, d², d²);
    same: outside states with the atom numbers of a low state, (m, d²).
    """

    low: NDArray[np.float64]
    outside: NDArray[np.float64]
    hop: NDArray[np.float64]
    inside: NDArray[np.float64]
    same: NDArray[np.bool_]


@lru_cache(maxsize=64)
def _space(states: tuple[State, ...], n_max: int | None) -> _TwoSites:
    low = list(product(states, states))
    totals = sorted({_total(pair) for pair in low})
    outside = [
        ((a, b), (na - a, nb - b))
        for na, nb in totals
        for a, b in product(range(na + 1), range(nb + 1))
        if n_max is None or max(a, b, na - a, nb - b) <= n_max
        if ((a, b), (na - a, nb - b)) not in low
    ]
    return _TwoSites(
        low=np.array([_energy(p) for p in low]).reshape(-1, 3),
        outside=np.array([_energy(p) for p in outside]).reshape(-1, 3),
        hop=_elements(outside, low),
        inside=_elements(low, low),
        same=np.array([[_total(m) == _total(i) for i in low] for m in outside], bool).reshape(-1, len(low)),
    )


def _total(pair: tuple[State, State]) -> State:
    return pair[0][0] + pair[1][0], pair[0][1] + pair[1][1]


def _energy(pair: tuple[State, State]) -> list[float]:
    return [
        *(sum(0.5 * s[a] * (s[a] - 1) for s in pair) for a in (0, 1)),
        float(sum(s[0] * s[1] for s in pair)),
    ]


def _elements(rows: list[tuple[State, State]], columns: list[tuple[State, State]]) -> NDArray[np.float64]:
    """<row| b†_A b_B + b†_B b_A |column> of each species, shape (2, row, column)."""
    out = np.zeros((2, len(rows), len(columns)))
    for a, (r, row), (c, column) in product((0, 1), enumerate(rows), enumerate(columns)):
        for giver, taker in ((0, 1), (1, 0)):
            new = [list(site) for site in column]
            new[giver][a] -= 1
            new[taker][a] += 1
            if tuple(map(tuple, new)) == row:
                out[a, r, c] += np.sqrt(column[giver][a] * row[taker][a])
    return out


def _hopping(mixture: Mixture, s: _TwoSites) -> Array:
    """Hopping between low and outside states, shape (..., direction, outside, low)."""
    return -jnp.einsum("...ad,ami->...dmi", jnp.asarray(mixture.t), jnp.asarray(s.hop))


def _below(mixture: Mixture, s: _TwoSites) -> Array:
    """E_low - E_outside, shape (..., outside, low)."""
    U = jnp.concatenate([jnp.asarray(mixture.U), jnp.asarray(mixture.U12)[..., None]], -1)
    return (U @ s.low.T)[..., None, :] - (U @ s.outside.T)[..., :, None]


def _admixture(mixture: Mixture, s: _TwoSites, hop: Array) -> Array:
    """First-order amplitude of outside states, shape (..., direction, outside, low)."""
    floor = jnp.asarray(mixture.t).max((-1, -2))[..., None, None]
    return hop * _inverse(_below(mixture, s), floor)[..., None, :, :]


def _isolation(mixture: Mixture, states: tuple[State, ...]) -> tuple[Array, Array]:
    """Gap and validity of `ExchangeCouplings`; two-hop states count with the second-order energy."""
    s = _space(states, mixture.n_max)
    hop = _hopping(mixture, s)
    amplitude = jnp.abs(_admixture(mixture, s, hop))
    below = _below(mixture, s)
    gap = jnp.where(s.same, -below, jnp.inf).min((-1, -2), initial=jnp.inf)
    largest = amplitude.max((-1, -2, -3), initial=0.0)
    distant = s.same & ~(np.abs(s.hop) > 0).any(0)
    if not distant.any():
        return gap, largest
    floor = jnp.asarray(mixture.t).max((-1, -2))[..., None, None]
    exchange = (amplitude * jnp.abs(hop)).max((-1, -2, -3), initial=0.0)
    inverse = jnp.where(distant, jnp.abs(_inverse(below, floor)), 0.0).max((-1, -2))
    return gap, jnp.maximum(largest, exchange * inverse)


def _inverse(x: Array, floor: Array) -> Array:
    """1/x, with |x| raised to `floor` where it is smaller: exact elsewhere, finite everywhere."""
    x = jnp.asarray(x)
    floor = jnp.maximum(floor, _SMALLEST)
    return 1.0 / jnp.where(jnp.abs(x) < floor, jnp.where(x < 0, -floor, floor), x)


def _states_of(order: str) -> tuple[State, State]:
    if order not in STATES:
        raise InputError(f"order is {order!r}; it must be one of {', '.join(map(repr, STATES))}")
    return STATES[order]


def _two_species(mixture: Mixture) -> None:
    if mixture.species != 2:
        raise InputError(f"species is {mixture.species}; exchange between pairs or anti-pairs needs 2")


def _checked(states: tuple[State, ...], n_max: int | None) -> tuple[State, ...]:
    clean = tuple((int(a), int(b)) for a, b in states)
    if len(set(clean)) != len(clean) or not clean:
        raise InputError(f"states is {states}; it must name at least one state, and each only once")
    for state in clean:
        if min(state) < 0 or (n_max is not None and max(state) > n_max):
            allowed = "0 or more" if n_max is None else f"from 0 to n_max = {n_max}"
            raise InputError(f"states contains {state}; occupations must be whole numbers {allowed}")
    return clean
