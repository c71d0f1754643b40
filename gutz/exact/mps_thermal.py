"""Grand-canonical thermal states of open chains by purification and imaginary-time evolution.

In:  a `LatticeModel` on an open chain (mu included), a temperature.
Out: a `ThermalChain`: purified matrix-product state, grand potential, energy, entropy (correlators:
     `mps_correlators`).
Method: every site gets an auxiliary copy; at infinite temperature each is maximally entangled with its own,
and exp(-H/2T) acts on the physical half bond by bond (F. Verstraete, J. J. Garcia-Ripoll & J. I. Cirac, PRL
93, 207204 (2004)), Trotter-split to fourth order. Bonds conserve physical minus auxiliary numbers.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import product

import numpy as np
from scipy.linalg import expm

from gutz.errors import InputError
from gutz.exact.lattice import Floats, LatticeModel
from gutz.exact.mps_energy import bond_hopping, energy, onsite_energies
from gutz.exact.mps_tensors import (
    Bond,
    Charge,
    Fusion,
    LocalSpace,
    SiteTensor,
    TensorChain,
    add,
    fock_space,
    fuse,
    fused_sizes,
)

Matrices = dict[Charge, Floats]
Gate = dict[tuple[int, int], list[tuple[int, int, float]]]

# Suzuki's fourth-order composition of five symmetric second-order steps (Phys. Lett. A 146, 319 (1990)).
_OUTER = 1 / (4 - 4 ** (1 / 3))
_COMPOSITION = (_OUTER, _OUTER, 1 - 4 * _OUTER, _OUTER, _OUTER)


@dataclass(frozen=True, eq=False)
class ThermalChain(TensorChain):
    """Purification of exp(-H/T)/Xi; `free_energy` = -T ln Xi, extensive, H including - sum mu n.

    `discarded` is the sum of all weights cut on the way; later cooling mixes what was cut back in, so errors
    of ln Xi and of correlators go with its square root. `entropy` in units of k_B.
    """

    model: LatticeModel
    temperature: float
    free_energy: float
    energy: float
    entropy: float
    discarded: float


@dataclass(frozen=True, eq=False)
class _Leg:
    """Fused leg bond x auxiliary x physical, laid out so that equal physical states are contiguous.

    `coarse`: charge -> (physical state, charge of bond and auxiliary) -> rows; `fine`: the same rows split by
    (doubled local state, bond charge), as `SiteTensor` wants them.
    """

    coarse: Fusion
    fine: Fusion
    sizes: Bond


def _leg(bond: Bond, physical: LocalSpace, auxiliary: LocalSpace) -> _Leg:
    inner = fuse(bond, auxiliary, lambda q: True)
    coarse = fuse(fused_sizes(inner), physical, lambda q: True)
    fine: Fusion = {}
    for q, parts in coarse.items():
        fine[q] = {}
        for (s, v), rows in parts.items():
            for (m, incoming), piece in inner[v].items():
                state = s * len(auxiliary.charges) + m
                fine[q][state, incoming] = slice(rows.start + piece.start, rows.start + piece.stop)
    return _Leg(coarse, fine, fused_sizes(coarse))


def _gates(model: LatticeModel, space: LocalSpace, duration: float) -> list[Gate]:
    """exp(-duration h) of every bond; each site's own energy is shared by its bonds."""
    states = len(space.physical)
    number = np.array(space.physical)
    hopping = bond_hopping(model)
    last = model.cluster.sites - 2
    gates = []
    for i in range(last + 1):
        left = onsite_energies(model, space, i) * (1.0 if i == 0 else 0.5)
        right = onsite_energies(model, space, i + 1) * (1.0 if i == last else 0.5)
        h = np.diag(np.add.outer(left, right).ravel())
        for a in range(space.species):
            lower = np.zeros((states, states))
            for s, (target, factor) in space.lower(a).entries.items():
                lower[target, s] = factor
            hop = np.kron(lower.T, lower)
            h -= hopping[a, i] * (hop + hop.T)
        matrix = expm(-duration * h).reshape((states,) * 4)
        gate: Gate = {}
        for s, s2 in product(range(states), repeat=2):
            conserving = (number[:, None] + number[None] == number[s] + number[s2]).all(axis=2)
            gate[s, s2] = [(t, t2, matrix[t, t2, s, s2]) for t, t2 in np.argwhere(conserving)]
        gates.append(gate)
    return gates


class _Evolver:
    """A purified chain whose centre wanders: isometries on both sides of the two-site wavefunction.

    `theta`[q]: rows, the fused leg of the side behind the centre with charge q; columns, of the side ahead,
    with charge -q. `log_norm` is the logarithm of the norm taken out so far.
    """

    def __init__(self, model: LatticeModel, max_bond: int, cutoff: float) -> None:
        self.model, self.max_bond, self.cutoff = model, max_bond, cutoff
        self.sites = model.cluster.sites
        self.physical = fock_space(model.cutoff)
        negative = tuple(tuple(-x for x in n) for n in self.physical.charges)
        self.auxiliary = LocalSpace(self.physical.physical, negative, None)
        self.zero = (0,) * model.species
        self.log_norm = 0.5 * self.sites * np.log(len(self.physical.charges))
        self.discarded = 0.0
        self.tensors: tuple[dict[int, SiteTensor], dict[int, SiteTensor]] = ({}, {})
        leg = self.leg({self.zero: 1})
        entangled = np.zeros((leg.sizes[self.zero], 1))
        states = len(self.physical.charges)
        for s in range(states):
            entangled[leg.fine[self.zero][s * states + s, self.zero]] = 1 / np.sqrt(states)
        for i in range(1, self.sites):
            self.tensors[1][i] = SiteTensor(leg.fine, {self.zero: entangled})
        self.theta: Matrices = {self.zero: entangled @ entangled.T}

    def leg(self, bond: Bond) -> _Leg:
        """Fused leg of a site whose outer bond is given."""
        return _leg(bond, self.physical, self.auxiliary)

    def outer_bond(self, end: int, i: int) -> Bond:
        """Bond on the far side of site i, seen along a side grown from `end`."""
        previous = self.tensors[end].get(i - 1 if end == 0 else i + 1)
        return previous.bond if previous else {self.zero: 1}

    def apply(self, gate: Gate, back: _Leg, front: _Leg, turned: bool) -> None:
        """Let a gate act on the two physical states; `turned`: the back side is the right one."""
        out = {q: np.zeros_like(matrix) for q, matrix in self._complete(back, front).items()}
        for q, matrix in self.theta.items():
            for (s, v), rows in back.coarse[q].items():
                for (s2, w), columns in front.coarse[_minus(q)].items():
                    block = matrix[rows, columns]
                    for first, second, factor in gate[(s2, s) if turned else (s, s2)]:
                        t, t2 = (second, first) if turned else (first, second)
                        q2 = add(v, self.physical.charges[t])
                        target = out[q2][back.coarse[q2][t, v], front.coarse[_minus(q2)][t2, w]]
                        target += factor * block
        norm = float(np.sqrt(sum(np.sum(matrix**2) for matrix in out.values())))
        self.log_norm += np.log(norm)
        self.theta = {q: matrix / norm for q, matrix in out.items()}

    def _complete(self, back: _Leg, front: _Leg) -> Matrices:
        return {
            q: np.empty((rows, front.sizes[_minus(q)])) for q, rows in back.sizes.items() if _minus(q) in front.sizes
        }

    def split(self) -> tuple[Matrices, Matrices]:
        """Isometry of the back side, and what remains: kept states x front side."""
        factors = {q: np.linalg.svd(matrix, full_matrices=False) for q, matrix in self.theta.items()}
        weights = np.sort(np.concatenate([s for _, s, _ in factors.values()]) ** 2)
        lost = np.cumsum(weights)
        cut = max(int(np.searchsorted(lost, self.cutoff)), len(weights) - self.max_bond)
        threshold = weights[cut]
        kept, rest = {}, {}
        for q, (u, s, v) in factors.items():
            chosen = s**2 >= threshold
            if chosen.any():
                kept[q], rest[q] = u[:, chosen], s[chosen, None] * v[chosen]
        self.discarded += float(lost[cut - 1]) if cut else 0.0
        norm = np.sqrt(sum(np.sum(matrix**2) for matrix in rest.values()))
        return kept, {q: matrix / norm for q, matrix in rest.items()}

    def pass_over(self, end: int, gates: list[Gate] | None) -> None:
        """Move from `end` to the other end, applying every bond's gate once (None: only moving)."""
        step = 1 if end == 0 else -1
        path = list(range(self.sites - 1)) if end == 0 else list(range(self.sites - 1, 0, -1))
        for i in path:
            back = self.leg(self.outer_bond(end, i))
            front = self.leg(self.outer_bond(1 - end, i + step))
            if gates is not None:
                self.apply(gates[min(i, i + step)], back, front, turned=end == 1)
            if i == path[-1]:
                self.theta = {_minus(q): matrix.T for q, matrix in self.theta.items()}
                return
            kept, rest = self.split()
            self.tensors[end][i] = SiteTensor(back.fine, kept)
            self.theta = self._carry(rest, front, self.tensors[1 - end][i + 2 * step])

    def _carry(self, rest: Matrices, front: _Leg, opened: SiteTensor) -> Matrices:
        """Wavefunction on the next bond: the front site joins the kept states, its outer bond is opened."""
        grown = self.leg({q: matrix.shape[0] for q, matrix in rest.items()})
        states = len(self.physical.charges)
        theta: Matrices = {}
        for q, matrix in rest.items():
            for (state, outer), columns in front.fine[_minus(q)].items():
                s, m = divmod(state, states)
                target = add(add(q, self.physical.charges[s]), self.auxiliary.charges[m])
                block = opened.blocks[outer]
                if target not in theta:
                    theta[target] = np.zeros((grown.sizes[target], block.shape[0]))
                theta[target][grown.fine[target][state, q]] = matrix[:, columns] @ block.T
        return theta

    def left_orthonormal(self) -> tuple[SiteTensor, ...]:
        """Tensors of the current state; the wavefunction must sit on the first bond, facing right."""
        for i in range(self.sites - 1):
            front = self.leg(self.outer_bond(1, i + 1))
            back = self.leg(self.outer_bond(0, i))
            kept, rest = self.split()
            self.tensors[0][i] = SiteTensor(back.fine, kept)
            if i < self.sites - 2:
                self.theta = self._carry(rest, front, self.tensors[1][i + 2])
        last = self.leg({q: matrix.shape[0] for q, matrix in rest.items()})
        column = np.zeros((last.sizes[self.zero], 1))
        for (state, q), rows in last.fine[self.zero].items():
            column[rows] = rest[q][:, front.fine[_minus(q)][state, self.zero]]
        return (
            *(self.tensors[0][i] for i in range(self.sites - 1)),
            SiteTensor(last.fine, {self.zero: column}),
        )


def _minus(q: Charge) -> Charge:
    return tuple(-x for x in q)


def _durations(total: float, steps: int) -> Iterator[float]:
    for _ in range(steps):
        for fraction in _COMPOSITION:
            yield fraction * total / steps


def thermal_state(
    model: LatticeModel,
    T: float,
    *,
    max_bond: int = 100,
    cutoff: float = 1e-14,
    steps: int | None = None,
) -> ThermalChain:
    """Grand-canonical thermal state of an open chain at temperature T > 0 (units of the couplings).

    Args:
        model: one or two species on `chain(L)`, L >= 2; hopping per bond and mu per site are free.
        T: temperature.
        max_bond: most states kept on a bond (of the doubled chain).
        cutoff: weight that may be cut at a bond and step even below max_bond.
        steps: fourth-order Trotter steps down to T; omitted: one per 0.2 of (largest t)/(2T), at least 4.
            The error of the grand potential falls as steps^-4.

    Cost grows with the square of the local dimension: two soft-core species need patience. Raises InputError
    for T <= 0 or a cluster that is not an open chain.
    """
    if not (np.isfinite(T) and T > 0):
        raise InputError(f"T: got {T}, must be finite and above 0 (use ground_state for T = 0).")
    if max_bond < 1 or (steps is not None and steps < 1):
        raise InputError(f"max_bond, steps: got {max_bond}, {steps}, must be at least 1.")
    total = 0.5 / T
    fastest = float(np.max(np.abs(bond_hopping(model))))
    count = steps if steps is not None else max(4, int(np.ceil(total * fastest / 0.2)))
    evolver = _Evolver(model, max_bond, cutoff)
    gates: dict[float, list[Gate]] = {}
    for duration in _durations(total, count):
        if duration not in gates:
            gates[duration] = _gates(model, evolver.physical, duration / 2)
        evolver.pass_over(0, gates[duration])
        evolver.pass_over(1, gates[duration])
    free_energy = -2 * T * evolver.log_norm
    tensors = evolver.left_orthonormal()
    chain = TensorChain(fock_space(model.cutoff, doubled=True), tensors)
    mean = energy(model, chain)
    return ThermalChain(chain.space, tensors, model, T, free_energy, mean, (mean - free_energy) / T, evolver.discarded)
