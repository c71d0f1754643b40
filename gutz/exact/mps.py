"""Ground states of open one- and two-species chains as matrix-product states, atom numbers conserved.

In:  a `LatticeModel` on an open chain, atom numbers, the largest bond dimension.
Out: a `ChainState`: site tensors, energy, discarded weight, energy variance (correlators: `mps_correlators`).
Method: density-matrix renormalisation (S. R. White, PRL 69, 2863 (1992)) in two-site sweeps. Both sides of
the optimised bond are kept as matrices per charge sector (their own energy and the annihilators of their
outermost site), which for nearest-neighbour hopping is all the chain needs.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray
from scipy.linalg import eigh_tridiagonal

from gutz.errors import InputError
from gutz.exact.lattice import Floats, LatticeModel
from gutz.exact.mps_energy import bond_hopping, energy_variance, onsite_energies
from gutz.exact.mps_tensors import (
    Bond,
    Charge,
    Fusion,
    LocalSpace,
    SiteOperator,
    SiteTensor,
    TensorChain,
    add,
    fock_space,
    fuse,
    fused_sizes,
    subtract,
)

Matrices = dict[Charge, Floats]

_LANCZOS_STEPS = 12
# The start: how far charges may stray from an even filling, how many states each brings, their amplitude.
_START_SPREAD = 2
_START_STATES = 3
_START_NOISE = 0.02


@dataclass(frozen=True, eq=False)
class ChainState(TensorChain):
    """Ground state found by the sweeps.

    `energy` includes - sum mu n; `discarded` is the largest weight cut at a bond in the last sweep;
    `converged` tells whether the energy settled within the tolerance before the sweeps ran out.
    """

    model: LatticeModel
    numbers: Charge
    energy: float
    discarded: float
    converged: bool
    sweeps: int

    @cached_property
    def variance(self) -> float:
        """<(H - E)^2>, in full (no truncation beyond the state's own); zero for an exact eigenstate."""
        return energy_variance(self.model, self, self.energy)


# --- one side of the chain ----------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Side:
    """One side of a bond: its own energy, and b_a of its outermost site (ket charge -> matrix)."""

    bond: Bond
    energy: Matrices
    edge: tuple[Matrices, ...]


@dataclass(frozen=True, eq=False)
class _Enlarged:
    """A side plus one site, still unreduced: fused leg, energy, and b_a of the new site as index lists.

    lower[a][q] = (rows in sector q - e_a, columns in sector q, factors).
    """

    fusion: Fusion
    sizes: Bond
    energy: Matrices
    lower: tuple[dict[Charge, tuple[NDArray[np.int64], NDArray[np.int64], Floats]], ...]


def _enlarge(
    side: _Side,
    space: LocalSpace,
    onsite: Floats,
    hopping: Floats,
    allowed: Callable[[Charge], bool],
) -> _Enlarged:
    """Add a site to a side; `hopping` is t_a on the bond between them."""
    fusion = fuse(side.bond, space, allowed)
    sizes = fused_sizes(fusion)
    lowers = [space.lower(a) for a in range(space.species)]
    energy = {}
    for q, parts in fusion.items():
        matrix, diagonal = np.zeros((sizes[q], sizes[q])), np.empty(sizes[q])
        for (s, incoming), rows in parts.items():
            matrix[rows, rows] += side.energy[incoming]
            diagonal[rows] = onsite[s]
            for a, lower in enumerate(lowers):
                raised = subtract(incoming, lower.shift)
                if s in lower.entries and side.bond.get(raised):
                    target, factor = lower.entries[s]
                    block = -hopping[a] * factor * side.edge[a][raised]
                    other = parts[target, raised]
                    matrix[other, rows] += block.T
                    matrix[rows, other] += block
        matrix.flat[:: sizes[q] + 1] += diagonal
        energy[q] = matrix
    index_lists = []
    for lower in lowers:
        lists = {}
        for q, parts in fusion.items():
            lowered = fusion.get(add(q, lower.shift), {})
            pieces = [
                (lowered[lower.entries[s][0], incoming], rows, lower.entries[s][1])
                for (s, incoming), rows in parts.items()
                if s in lower.entries and (lower.entries[s][0], incoming) in lowered
            ]
            if pieces:
                lists[q] = (
                    np.concatenate([np.arange(to.start, to.stop) for to, _, _ in pieces]),
                    np.concatenate([np.arange(rows.start, rows.stop) for _, rows, _ in pieces]),
                    np.concatenate([np.full(rows.stop - rows.start, f) for _, rows, f in pieces]),
                )
        index_lists.append(lists)
    return _Enlarged(fusion, sizes, energy, tuple(index_lists))


def _reduce(enlarged: _Enlarged, kept: Matrices, lowers: Sequence[SiteOperator]) -> _Side:
    """The enlarged side in the basis of the kept columns."""
    energy = {q: u.T @ enlarged.energy[q] @ u for q, u in kept.items()}
    edges: list[Matrices] = []
    for a, lower in enumerate(lowers):
        edge: Matrices = {}
        for q, u in kept.items():
            target = kept.get(add(q, lower.shift))
            if target is None:
                edge[q] = np.zeros((0, u.shape[1]))
            elif q in enlarged.lower[a]:
                rows, columns, factors = enlarged.lower[a][q]
                edge[q] = target[rows].T @ (factors[:, None] * u[columns])
            else:
                edge[q] = np.zeros((target.shape[1], u.shape[1]))
        edges.append(edge)
    return _Side({q: u.shape[1] for q, u in kept.items()}, energy, tuple(edges))


# --- the optimised bond -------------------------------------------------------------------------------------


class _BondProblem:
    """H acting on the two-site wavefunction: matrices theta[q] (rows: back side, columns: front side).

    All sectors lie in one flat vector. Each side's own energy acts by matrix products; the hopping across the
    bond is one sparse matrix, since b_a of a bare site has at most one entry per row.
    """

    def __init__(self, back: _Enlarged, front: _Enlarged, hopping: Floats, total: Charge) -> None:
        self.back, self.front, self.total = back, front, total
        self.layout: dict[Charge, tuple[int, int, int]] = {}
        self.size = 0
        for q, rows in back.sizes.items():
            columns = front.sizes.get(subtract(total, q), 0)
            if columns:
                self.layout[q] = (self.size, rows, columns)
                self.size += rows * columns
        self.one_way = self._hopping_matrix(hopping)
        self.other_way = sp.csr_array(self.one_way.T)

    def _hopping_matrix(self, hopping: Floats) -> sp.csr_array:
        """- sum_a t_a b+_a (back) b_a (front), from sector q to sector q + e_a."""
        outs, ins, values = [np.empty(0, int)], [np.empty(0, int)], [np.empty(0)]
        for a, t in enumerate(hopping):
            for q_up, (to_rows, from_columns, back_factor) in self.back.lower[a].items():
                q = tuple(x - (species == a) for species, x in enumerate(q_up))
                p = subtract(self.total, q)
                if q not in self.layout or q_up not in self.layout or p not in self.front.lower[a]:
                    continue
                front_rows, front_columns, front_factor = self.front.lower[a][p]
                start_in, _, width_in = self.layout[q]
                start_out, _, width_out = self.layout[q_up]
                outs.append((start_out + from_columns[:, None] * width_out + front_rows).ravel())
                ins.append((start_in + to_rows[:, None] * width_in + front_columns).ravel())
                values.append((-t * back_factor[:, None] * front_factor).ravel())
        entries = (np.concatenate(values), (np.concatenate(outs), np.concatenate(ins)))
        return sp.csr_array(entries, shape=(self.size, self.size))

    def pack(self, theta: Matrices) -> Floats:
        """Flat vector of the given sectors (missing ones are zero)."""
        flat = np.zeros(self.size)
        for q, matrix in theta.items():
            if q in self.layout:
                start, rows, columns = self.layout[q]
                flat[start : start + rows * columns] = matrix.ravel()
        return flat

    def unpack(self, flat: Floats) -> Matrices:
        """Sectors of a flat vector, as views."""
        return {q: flat[o : o + m * n].reshape(m, n) for q, (o, m, n) in self.layout.items()}

    def apply(self, flat: Floats) -> Floats:
        """H theta."""
        result = self.one_way @ flat + self.other_way @ flat
        out, theta = self.unpack(result), self.unpack(flat)
        for q, matrix in theta.items():
            out[q] += self.back.energy[q] @ matrix
            out[q] += matrix @ self.front.energy[subtract(self.total, q)]
        return result


def _lowest(apply: Callable[[Floats], Floats], start: Floats, tolerance: float) -> tuple[float, Floats]:
    """Lowest eigenpair in the Krylov space of `start` (Lanczos, fully reorthogonalised)."""
    basis = [start / np.linalg.norm(start)]
    diagonal: list[float] = []
    off: list[float] = []
    while True:
        image = apply(basis[-1])
        diagonal.append(float(basis[-1] @ image))
        stack = np.array(basis)
        for _ in range(2):
            image = image - (stack @ image) @ stack
        length = float(np.linalg.norm(image))
        values, vectors = eigh_tridiagonal(np.array(diagonal), np.array(off), select="i", select_range=(0, 0))
        weights = vectors[:, 0]
        if length * abs(weights[-1]) < tolerance or len(basis) == min(_LANCZOS_STEPS, len(start)):
            vector = weights @ stack
            return float(values[0]), vector / np.linalg.norm(vector)
        off.append(length)
        basis.append(image / length)


def _truncate(theta: Matrices, max_bond: int, cutoff: float) -> tuple[Matrices, float]:
    """Left singular vectors of the largest singular values over all sectors, and the weight cut."""
    vectors, weights = {}, {}
    for q, matrix in theta.items():
        u, s, _ = np.linalg.svd(matrix, full_matrices=False)
        vectors[q], weights[q] = u, s**2
    order = np.sort(np.concatenate(list(weights.values())))[::-1]
    total = order.sum()
    tail = total - np.cumsum(order)
    count = min(max_bond, int(np.searchsorted(-tail, -cutoff * total)) + 1, len(order))
    threshold = order[count - 1]
    kept = {}
    for q, u in vectors.items():
        chosen = (weights[q] >= threshold) & (weights[q] > 1e-30 * total)
        if chosen.any():
            kept[q] = u[:, chosen]
    lost = 1.0 - sum(float(weights[q][: u.shape[1]].sum()) for q, u in kept.items()) / total
    return kept, max(lost, 0.0)


# --- sweeps -------------------------------------------------------------------------------------------------


def _even_filling(N: Charge, sites: int) -> list[Charge]:
    """Occupation of each site: every species spread as evenly as whole atoms allow, interleaved."""
    rows = []
    for a, atoms in enumerate(N):
        steps = np.diff(np.arange(sites + 1) * atoms // sites)
        rows.append(np.roll(steps, a * max(1, sites // max(1, 2 * atoms))))
    return [tuple(int(x) for x in column) for column in np.array(rows).T]


class _Sweeper:
    """Both stacks of sides, and the wavefunction on the current bond."""

    def __init__(self, model: LatticeModel, N: Charge, seed: int) -> None:
        self.model, self.total = model, N
        self.sites = model.cluster.sites
        self.space = fock_space(model.cutoff)
        self.lowers = [self.space.lower(a) for a in range(model.species)]
        self.hopping = bond_hopping(model)
        zero = (0,) * model.species
        empty = _Side({zero: 1}, {zero: np.zeros((1, 1))}, ({zero: np.zeros((0, 1))},) * model.species)
        # sides[0][i]: sites before i; sides[1][i]: sites after i; tensors likewise, each grown from its end.
        self.sides: tuple[dict[int, _Side], dict[int, _Side]] = ({0: empty}, {self.sites - 1: empty})
        self.tensors: tuple[dict[int, SiteTensor], dict[int, SiteTensor]] = ({}, {})
        # What one half-sweep enlarges on its way the next one meets again, unchanged, on its way back.
        self.waiting: tuple[dict[int, _Enlarged], dict[int, _Enlarged]] = ({}, {})
        self.theta = self._start(np.random.default_rng(seed))

    def _start(self, rng: np.random.Generator) -> Matrices:
        """Right side of every bond, and a wavefunction on the first: an even filling plus random states.

        The random ones, a few for every charge near the even one, let sweeps reach arrangements of atoms that
        hop slowly or not at all, which a product state would leave where it happened to put them.
        """
        filling = _even_filling(self.total, self.sites)
        charge = (0,) * self.model.species
        for i in range(self.sites - 1, 0, -1):
            enlarged = self.enlarged(1, i)
            place = enlarged.fusion[add(charge, filling[i])][self.space.physical.index(filling[i]), charge]
            charge = add(charge, filling[i])
            kept = {}
            for q, rows in enlarged.sizes.items():
                if np.abs(np.subtract(q, charge)).max() <= _START_SPREAD:
                    columns = rng.normal(size=(rows, min(rows, _START_STATES)))
                    if q == charge:
                        # The first state of this sector is, bond after bond, the even filling.
                        columns[:, 0] = 0.0
                        columns[place.start, 0] = 1.0
                    kept[q] = np.linalg.qr(columns)[0]
            if i > 1:
                self.store(1, i, enlarged, kept)
        theta = {}
        for q, rows in self.enlarged(0, 0).sizes.items():
            right = kept.get(subtract(self.total, q))
            if right is not None:
                random = rng.normal(size=(rows, right.shape[1]))
                theta[q] = _START_NOISE * random @ right.T
                if q == filling[0]:
                    theta[q] += right[:, 0]
        return theta

    def enlarged(self, end: int, i: int) -> _Enlarged:
        """The side grown from `end` (0 left, 1 right) that stops before site i, plus site i."""
        inner = i if end == 0 else self.sites - 1 - i
        bond = i - 1 if end == 0 else i
        t = self.hopping[:, bond] if inner > 0 else np.zeros(self.model.species)
        beyond = self.sites - 1 - inner

        def allowed(q: Charge) -> bool:
            return all(
                0 <= total - x <= beyond * most for x, total, most in zip(q, self.total, self.model.cutoff, strict=True)
            )

        onsite = onsite_energies(self.model, self.space, i)
        return _enlarge(self.sides[end][i], self.space, onsite, t, allowed)

    def store(self, end: int, i: int, enlarged: _Enlarged, kept: Matrices) -> None:
        """Keep the given columns of an enlarged side as the side (and tensor) that includes site i."""
        self.tensors[end][i] = SiteTensor(enlarged.fusion, kept)
        self.sides[end][i + 1 if end == 0 else i - 1] = _reduce(enlarged, kept, self.lowers)

    def carry(self, end: int, i: int, kept: Matrices, front: Fusion) -> Matrices:
        """Wavefunction on the next bond: site i joins the kept side, the front side opens its next tensor."""
        step = 1 if end == 0 else -1
        opened = self.tensors[1 - end][i + 2 * step]
        grown = fuse({q: u.shape[1] for q, u in kept.items()}, self.space, lambda q: True)
        sizes = fused_sizes(grown)
        theta: Matrices = {}
        for q, u in kept.items():
            if q not in self.theta:
                continue
            part = u.T @ self.theta[q]
            for (s, outer), columns in front[subtract(self.total, q)].items():
                target = add(q, self.space.charges[s])
                if outer in opened.blocks:
                    block = opened.blocks[outer]
                    if target not in theta:
                        theta[target] = np.zeros((sizes[target], block.shape[0]))
                    theta[target][grown[target][s, q]] = part[:, columns] @ block.T
        return theta

    def half_sweep(self, end: int, max_bond: int, cutoff: float, tolerance: float) -> tuple[float, float]:
        """Optimise every bond once, moving away from `end`; the last energy and the largest weight cut."""
        step = 1 if end == 0 else -1
        path = range(self.sites - 1) if end == 0 else range(self.sites - 1, 0, -1)
        energy, worst = 0.0, 0.0
        for i in path:
            back = self.waiting[end][i] = self.enlarged(end, i)
            front = self.waiting[1 - end].pop(i + step, None) or self.enlarged(1 - end, i + step)
            t = self.hopping[:, min(i, i + step)]
            problem = _BondProblem(back, front, t, self.total)
            energy, flat = _lowest(problem.apply, problem.pack(self.theta), tolerance)
            self.theta = problem.unpack(flat)
            if i + step == path[-1] + step:
                # The far end: turn round, exchanging the roles of the two sides.
                self.theta = {subtract(self.total, q): matrix.T for q, matrix in self.theta.items()}
                return energy, worst
            kept, lost = _truncate(self.theta, max_bond, cutoff)
            worst = max(worst, lost)
            self.store(end, i, back, kept)
            self.theta = self.carry(end, i, kept, front.fusion)
        return energy, worst

    def left_orthonormal(self, max_bond: int) -> tuple[SiteTensor, ...]:
        """Tensors of the current state (on the first bond, facing right), without further optimisation."""
        for i in range(self.sites - 1):
            back, front = self.enlarged(0, i), self.enlarged(1, i + 1)
            kept, _ = _truncate(self.theta, max_bond, 0.0)
            self.store(0, i, back, kept)
            if i < self.sites - 2:
                self.theta = self.carry(0, i, kept, front.fusion)
        last = fuse(self.tensors[0][self.sites - 2].bond, self.space, lambda q: q == self.total)
        column = np.zeros((fused_sizes(last)[self.total], 1))
        zero = (0,) * self.model.species
        for (s, q), rows in last[self.total].items():
            if q in self.theta:
                place = front.fusion[self.space.charges[s]][s, zero]
                column[rows] = kept[q].T @ self.theta[q][:, place]
        column /= np.linalg.norm(column)
        return (*(self.tensors[0][i] for i in range(self.sites - 1)), SiteTensor(last, {self.total: column}))


def ground_state(
    model: LatticeModel,
    N: int | Sequence[int],
    *,
    max_bond: int = 150,
    cutoff: float = 1e-13,
    tolerance: float = 1e-9,
    max_sweeps: int = 40,
    seed: int = 0,
) -> ChainState:
    """Ground state of an open chain at fixed atom numbers.

    Args:
        model: one or two species on `chain(L)`, L >= 2; hopping per bond and mu per site are free.
        N: atoms per species.
        max_bond: most states kept on a bond.
        cutoff: weight that may be cut at a bond even below max_bond.
        tolerance: relative change of the energy over a sweep that counts as settled.
        max_sweeps: sweeps (there and back) before giving up; the result then says converged = False.
        seed: of the random part of the starting state.

    The bond dimension doubles from sweep to sweep up to max_bond. How far the result is from an eigenstate:
    look at `discarded` and `variance`, and at a larger max_bond. Which eigenstate: with hoppings of very
    unequal size, or wells far apart, sweeps can settle in a metastable arrangement of the slow atoms whose
    variance is zero; only other seeds reveal that, and the lowest energy is the best answer.
    Raises InputError for impossible numbers or a cluster that is not an open chain.
    """
    numbers = (int(N),) if isinstance(N, int | np.integer) else tuple(int(n) for n in N)
    most = [cutoff_a * model.cluster.sites for cutoff_a in model.cutoff]
    if len(numbers) != model.species or any(not 0 <= n <= m for n, m in zip(numbers, most, strict=True)):
        raise InputError(f"N: got {N}, must be one atom number per species, within 0..{tuple(most)}.")
    if max_bond < 1 or max_sweeps < 1:
        raise InputError(f"max_bond, max_sweeps: got {max_bond}, {max_sweeps}, must be at least 1.")
    sweeper = _Sweeper(model, numbers, seed)
    energy, previous, discarded = np.inf, np.inf, 0.0
    converged = False
    sweep = 0
    while sweep < max_sweeps and not converged:
        bond = min(max_bond, 20 * 2**sweep)
        accuracy = 1e-12 if bond == max_bond else 1e-7
        sweeper.half_sweep(0, bond, cutoff, accuracy)
        energy, discarded = sweeper.half_sweep(1, bond, cutoff, accuracy)
        converged = bond == max_bond and abs(energy - previous) <= tolerance * max(1.0, abs(energy))
        previous = energy
        sweep += 1
    tensors = sweeper.left_orthonormal(max_bond)
    return ChainState(sweeper.space, tensors, model, numbers, energy, discarded, converged, sweep)
