"""The bond term of many points at once, in numbers: value, split by kind of process, and slope in the Hamiltonians.

In:  levels of the sites of a batch of points, the deviations δb_a in these levels, products of hoppings.
Out: `Second`, numpy arrays. The formulas are those at the top of `gutz.ansatz.bond`, whose functions jax can
     differentiate; here nothing is compiled and what is zero is left out:

- pairs of levels that no operator connects, where the frame has blocks;
- early levels so high that exp(-E β/2) < 1e-11: time runs over (0, β/2), so each of them is weighted by less.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.ansatz.bond import COLD_DEGENERACY, WARM_DEGENERACY, Frame
from gutz.ansatz.gibbs import Levels

Floats = NDArray[np.float64]
Index = NDArray[np.intp] | slice

NEGLIGIBLE = 52.0
"""Energy above the lowest level, in units of T, from which exp(-E/2T) < 1e-11."""

_TINY = 1e-12


class Second(NamedTuple):
    """value, variance <V²>: (point,). parts: (point, 2, species, species), anomalous and normal processes.
    slope: derivative of the value in h of each site, in its levels, (point, sublattice, state, state)."""

    value: Floats
    variance: Floats
    parts: Floats
    slope: Floats


@dataclass(frozen=True)
class _Channel:
    """Operators of (b_1, b_1†, b_2, b_2†) that change the block alike. rows, columns: levels they connect, empty
    for all. combos: positions in `Frame.combos`; first, second: their operators; pairs: position in combos of every
    two operators; share: 2 for equal ones, 1 otherwise. begins: where the
    combos of each operator with itself and later ones begin, if all of them are there in this order."""

    operators: np.ndarray
    combos: np.ndarray
    first: np.ndarray
    second: np.ndarray
    pairs: np.ndarray
    share: np.ndarray
    rows: np.ndarray
    columns: np.ndarray
    begins: tuple[int, ...] | None


@lru_cache(maxsize=64)
def _channels(f: Frame) -> tuple[_Channel, ...]:
    ops = np.stack([m for b in f.lower for m in (b, b.T)])
    block = np.repeat(np.arange(len(f.blocks)), f.blocks)
    allowed = block[:, None] == np.arange(len(f.blocks))
    groups: dict[int, list[int]] = {}
    combos = [tuple(c) for c in f.combos.tolist()]
    for A in range(len(ops)):
        leader = next(i for i, D in combos if D == A)
        groups.setdefault(leader, []).append(A)
    out = []
    for members in groups.values():
        inside = [c for c, (A, _) in enumerate(combos) if A in members]
        first, second = f.combos[inside].T
        position = {combos[c]: k for k, c in enumerate(inside)}
        pairs = np.array([[position[min(A, D), max(A, D)] for D in members] for A in members])
        rows = columns = np.zeros(0, int)
        if len(f.blocks) > 1:
            # Blocks connected by any of the operators, as whole blocks: the levels inside mix.
            touched = sum(np.abs(ops[A]) for A in members) > 0
            reach = allowed @ (allowed.T @ touched @ allowed > 0) @ allowed.T
            rows, columns = np.nonzero(reach)
        share = np.ones(pairs.shape) + np.eye(len(members))
        order = {A: k for k, A in enumerate(members)}
        n = len(members)
        begins = tuple(int(A * n - A * (A - 1) // 2) for A in range(n)) if len(f.blocks) == 1 else None
        out.append(
            _Channel(
                np.array(members), np.array(inside), np.array([order[A] for A in first]),
                np.array([order[D] for D in second]), pairs, share, rows, columns, begins,
            )
        )  # fmt: skip
    return tuple(out)


@lru_cache(maxsize=64)
def _spread(f: Frame) -> tuple[Floats, Floats]:
    """How often each combo counts, and its share in parts (kind, species, species) with both orders of the species."""
    multiplicity = np.where(f.combos[:, 0] == f.combos[:, 1], 1.0, 2.0)
    species = len(f.lower)
    out = np.zeros((len(f.combos), 2, species, species))
    for row, (kind, a, b) in enumerate(f.slot):
        out[row, kind, a, b] += 0.5 * multiplicity[row]
        out[row, kind, b, a] += 0.5 * multiplicity[row]
    return multiplicity, out


def times(beta: Floats, bandwidth: Floats, nodes: int) -> tuple[Floats, Floats]:
    """Nodes and weights on (0, β/2), shape (..., node); see `gutz.ansatz.bond.times`."""
    u, w = _legendre(nodes)
    c = np.arcsinh(1.0 + 0.5 * beta * bandwidth)[..., None]
    scale = 0.5 * beta[..., None] / np.sinh(c)
    return scale * np.sinh(c * u), scale * c * np.cosh(c * u) * w


@lru_cache(maxsize=64)
def _legendre(nodes: int) -> tuple[Floats, Floats]:
    x, w = np.polynomial.legendre.leggauss(nodes)
    return 0.5 * (x + 1.0), 0.5 * w


def second_order(lv: Levels, deviation: Floats, weight: Floats, f: Frame, *, cold: bool, nodes: int) -> Second:
    """Evaluate the bond term and its derivative.

    lv: levels, (point, sublattice, level). deviation: δb_a in levels, (point, sublattice, species, level, level), or
    without the leading two axes where they are the same everywhere. weight: as in `bond.bond`.
    """
    multiplicity, spread = _spread(f)
    factor = multiplicity * weight[:, f.slot[:, 0], f.slot[:, 1], f.slot[:, 2]]
    d = deviation.shape[-1]
    ops = np.empty((*deviation.shape[:-3], 2 * deviation.shape[-3], d, d))
    ops[..., 0::2, :, :] = deviation
    ops[..., 1::2, :, :] = np.swapaxes(deviation, -1, -2)
    if cold:
        per_combo, equal, slope = _cold(lv, ops, factor, f)
    else:
        per_combo, equal, slope = _warm(lv, ops, factor, f, nodes)
    variance = (factor * equal[:, 0] * equal[:, -1][:, f.partner]).sum(-1)
    parts = (per_combo @ spread.reshape(len(f.combos), -1)).reshape(-1, *spread.shape[1:])
    return Second((per_combo * factor).sum(-1), variance, parts, slope)


def _warm(lv: Levels, ops: Floats, factor: Floats, f: Frame, nodes: int) -> tuple[Floats, Floats, Floats]:
    sites = lv.energy.shape[1]
    beta = lv.inverse_temperature[:, 0]
    energy = lv.energy - lv.energy.min(-1, keepdims=True)
    tau, w = times(beta, energy.max((-1, -2)), nodes)
    kept = energy.shape[-1]
    if len(f.blocks) == 1:  # sorted by energy
        kept = int((energy * beta[:, None, None] < NEGLIGIBLE).sum(-1).max())
    minus = -energy[..., None]
    late = np.exp(minus * tau[:, None, None, :])
    total = np.exp(-energy * beta[:, None, None]).sum(-1)
    early = np.exp(minus[..., :kept, :] * (beta[:, None] - tau)[:, None, None, :]) / total[..., None, None]
    kind: type[_Dense] | type[_Blocks] = _Dense if len(f.blocks) == 1 else _Blocks
    passes = [kind(channel, ops, lv.weight, early, late) for channel in _channels(f)]

    C = np.empty((*energy.shape[:2], len(f.combos), nodes))
    equal = np.empty(C.shape[:3])
    for one in passes:
        C[:, :, one.channel.combos], equal[:, :, one.channel.combos] = one.C, one.equal
    other = C[:, ::-1, f.partner]
    per_combo = -(w[:, None, :] * C[:, 0] * other[:, 0]).sum(-1)
    D = (-(2.0 if sites == 1 else 1.0) * factor[:, None, :, None]) * (w[:, None, None, :] * other)
    norm = (beta[:, None] * (D * C).sum((-1, -2)))[..., None] * lv.weight
    slope = _Slope(lv, ops, f, kept, WARM_DEGENERACY / beta[:, None, None, None], norm)
    for one in passes:
        one.back(slope, D[:, :, one.channel.combos], tau[:, None, None, :], beta[:, None, None, None])
    return per_combo, equal, slope.matrix()


class _Dense:
    """C(τ) of operators that connect all levels: late levels are summed before early ones, so that no array has axes
    of pairs and of nodes. C: (point, sublattice, combo, node), equal: C(0)."""

    def __init__(self, channel: _Channel, ops: Floats, weight: Floats, early: Floats, late: Floats) -> None:
        points, sites, kept, nodes = early.shape
        n, d = len(channel.operators), late.shape[2]
        self.channel, self.early, self.late = channel, early, late
        self.at = ops[:, :, :, :kept].reshape(points, sites, n, kept * d)
        X = np.empty((points, sites, len(channel.combos), kept * d))
        assert channel.begins is not None
        for A, begin in enumerate(channel.begins):
            np.multiply(self.at[:, :, A : A + 1], self.at[:, :, A:], out=X[:, :, begin : begin + n - A])
        self.X = X.reshape(points, sites, -1, d)
        self.by_early = (self.X @ late).reshape(points, sites, -1, kept, nodes)
        self.by_early *= early[:, :, None]
        self.C = np.einsum("...cmt->...ct", self.by_early)
        self.equal = (X @ np.repeat(weight[..., :kept], d, axis=-1)[..., None])[..., 0]

    def back(self, slope: "_Slope", D: Floats, tau: Floats, beta: Floats) -> None:
        """Hand on what a change of every C(τ) does to the value, D: (point, sublattice, combo, node)."""
        points, sites, k, nodes = D.shape
        Z = (D[:, :, :, None, :] * self.early[:, :, None]).reshape(points, sites, -1, nodes)
        turned = np.swapaxes(self.late, -1, -2)
        product = (Z @ turned).reshape(points, sites, k, -1)
        of_late = (np.swapaxes(self.X, -1, -2) @ Z) * self.late
        of_early = np.einsum("...ct,...cmt->...mt", D, self.by_early)

        def in_full(some: Index) -> tuple[Floats, Floats]:
            late = ((Z[some] * tau[some]) @ turned[some]).reshape(-1, *product.shape[1:])
            return late, beta[some] * product[some] - late

        slope.levels_move((of_late * tau).sum(-1), (of_early * (beta - tau)).sum(-1))
        slope.operators_change(self.channel, self.at, product, in_full)


class _Blocks:
    """The same for operators that connect few pairs of levels: one early and late factor for each pair."""

    def __init__(self, channel: _Channel, ops: Floats, weight: Floats, early: Floats, late: Floats) -> None:
        self.channel, self.d = channel, late.shape[2]
        self.at = ops[..., channel.operators[:, None], channel.rows, channel.columns]
        self.X = self.at[..., channel.first, :] * self.at[..., channel.second, :]
        self.W = early[:, :, channel.rows]
        self.W *= late[:, :, channel.columns]
        self.C = self.X @ self.W
        self.equal = (self.X @ weight[:, :, channel.rows, None])[..., 0]

    def back(self, slope: "_Slope", D: Floats, tau: Floats, beta: Floats) -> None:
        """As for `_Dense`."""
        k, states = D.shape[2], np.arange(self.d)
        omega = np.concatenate([D, tau * D], axis=-2) @ np.swapaxes(self.W, -1, -2)
        product, late = omega[:, :, :k], omega[:, :, k:]
        early = beta * product - late
        to, fro = ((one[:, None] == states).astype(float) for one in (self.channel.columns, self.channel.rows))
        slope.levels_move((self.X * late).sum(-2) @ to, (self.X * early).sum(-2) @ fro)
        slope.operators_change(self.channel, self.at, product, lambda some: (late[some], early[some]))


def _cold(lv: Levels, ops: Floats, factor: Floats, f: Frame) -> tuple[Floats, Floats, Floats]:
    points, sites, d = lv.energy.shape
    ops = np.broadcast_to(ops, (points, sites, *ops.shape[-3:]))
    ground, excited = lv.weight, 1.0 - lv.weight
    at = ground.argmax(-1)[:, :, None, None, None]
    row = np.take_along_axis(ops, at, -2)[..., 0, :]
    x = row[:, :, f.combos[:, 0]] * row[:, :, f.combos[:, 1]] * excited[:, :, None, :]
    gap = lv.energy - lv.free_energy[..., None]
    total = gap[..., :, None] + gap[:, ::-1, None, :]
    scale = np.maximum(gap.max(-1), 1e-300)[..., None, None]
    K = excited[..., :, None] * excited[:, ::-1, None, :] / np.maximum(total, _TINY * scale)
    other = x[:, ::-1, f.partner]
    reach = other @ np.swapaxes(K, -1, -2)
    per_combo = -(x * reach).sum(-1)[:, 0]
    amount = -(2.0 if sites == 1 else 1.0) * factor[:, None, :, None]
    product = (amount * reach)[..., None, :] * ground[..., None, :, None]
    late = (amount * (other @ np.swapaxes(K * K, -1, -2)))[..., None, :] * ground[..., None, :, None]
    # Levels as close as this, relative to the largest gap, are one; the ground state is one level, never two.
    slope = _Slope(lv, ops, f, d, COLD_DEGENERACY * scale, np.zeros_like(ground))
    slope.excited = excited[..., :, None] * excited[..., None, :] > 0
    flat = (points, sites, -1, d * d)
    channel = _everything(f)
    X = ops[:, :, channel.first] * ops[:, :, channel.second]
    moved = (X * late).sum(2)
    slope.levels_move(moved.sum(-2), -moved.sum(-1))
    late = late.reshape(flat)
    slope.operators_change(channel, ops.reshape(flat), product.reshape(flat), lambda some: (late[some], -late[some]))
    return per_combo, x.sum(-1), slope.matrix()


@lru_cache(maxsize=64)
def _everything(f: Frame) -> _Channel:
    """All operators in one channel; pairs that do not correlate get no share."""
    n = 2 * len(f.lower)
    pairs, share = np.zeros((n, n), int), np.zeros((n, n))
    for c, (A, D) in enumerate(f.combos.tolist()):
        pairs[A, D] = pairs[D, A] = c
        share[A, D] = share[D, A] = 1.0 if A != D else 2.0
    first, second = f.combos.T
    nothing = np.zeros(0, int)
    return _Channel(np.arange(n), np.arange(len(f.combos)), first, second, pairs, share, nothing, nothing, None)


class _Slope:
    """Collects dF_bond/dO and dF_bond/dE of all channels into the symmetric G with dF_bond = sum G dh, in levels.

    Levels apart: the eigenvectors turn by dh_mn/(E_n - E_m). Levels together: exp(-τh) changes as exp(-τE) does.
    """

    def __init__(self, lv: Levels, ops: Floats, f: Frame, kept: int, close: Floats, norm: Floats) -> None:
        points, sites, d = lv.energy.shape
        self.f, self.ops, self.kept = f, ops, kept
        self.excited: NDArray[np.bool_] | None = None
        self.diagonal = norm
        self.threshold = close
        self.energy = lv.energy
        self.shape = (points, sites, ops.shape[-3], kept, d)
        self.turn: Floats | None = None
        self.inside: Floats | None = None
        if not f.diagonal:
            self.turn = np.zeros((points, sites, d, d))

    def _close(self) -> NDArray[np.bool_]:
        """Different levels of one block that count as one."""
        gap = np.abs(self.energy[..., None, :] - self.energy[..., :, None])
        block = np.repeat(np.arange(len(self.f.blocks)), self.f.blocks)
        d = len(block)
        together: NDArray[np.bool_] = gap <= self.threshold
        together &= (block[:, None] == block) & ~np.eye(d, dtype=bool)
        return together if self.excited is None else together & self.excited

    def levels_move(self, late: Floats, early: Floats) -> None:
        """Minus the derivatives in the energies of late and early levels."""
        self.diagonal = self.diagonal - late
        self.diagonal[..., : self.kept] -= early

    def operators_change(
        self, channel: _Channel, at: Floats, product: Floats, in_full: Callable[[Index], tuple[Floats, Floats]]
    ) -> None:
        """at: the operators at these pairs; product: sensitivities of the value to X, (point, sublattice, combo, pair);
        in_full: the same times late and early times, asked for at points where different levels count as one."""
        if self.turn is None:
            return
        everything = slice(None)
        g = self._pull(channel, at, product)
        self.turn += self._left(channel, g, everything)
        self.turn[..., : self.kept, :] -= self._right(channel, g, everything)
        if self.inside is None:
            self.together = self._close()
            self.some = np.flatnonzero(self.together.any((1, 2, 3)))
            self.inside = np.zeros((self.some.size, *self.turn.shape[1:]))
        if self.some.size:
            late, early = in_full(self.some)
            here = at if at.ndim < late.ndim else at[self.some]
            self.inside -= 0.5 * self._left(channel, self._pull(channel, here, late), self.some)
            right = self._right(channel, self._pull(channel, here, early), self.some)
            self.inside[..., : self.kept, :] -= 0.5 * right

    def _pull(self, channel: _Channel, at: Floats, sensitivity: Floats) -> Floats:
        """Derivative in each O of the channel, (point, sublattice, operator, kept, level)."""
        if channel.begins is None:
            shared = sensitivity[:, :, channel.pairs] * channel.share[:, :, None]
            g = np.einsum("...adp,...dp->...ap", shared, at)
        else:
            n = len(channel.operators)
            g = sensitivity[:, :, :n] * at[:, :, :1]
            for A, begin in enumerate(channel.begins):
                row = sensitivity[:, :, begin : begin + n - A]
                if A:
                    g[:, :, A:] += row * at[:, :, A : A + 1]
                g[:, :, A] += np.einsum("...dp,...dp->...p", row, at[:, :, A:])
        out_shape = (*g.shape[:-1], self.kept, self.shape[-1])
        if not channel.rows.size:
            return g.reshape(out_shape)
        out = np.zeros(out_shape)
        out[..., channel.rows, channel.columns] = g
        return out

    def _left(self, channel: _Channel, g: Floats, points: Index) -> Floats:  # sum_A O_A^T G_A
        d = self.shape[-1]
        tall = self.ops[points][..., channel.operators, : self.kept, :]
        return np.swapaxes(tall.reshape(*tall.shape[:-3], -1, d), -1, -2) @ g.reshape(*g.shape[:-3], -1, d)

    def _right(self, channel: _Channel, g: Floats, points: Index) -> Floats:  # sum_A G_A O_A^T
        d = self.shape[-1]
        wide = np.swapaxes(g, -3, -2).reshape(*g.shape[:-3], self.kept, -1)
        tall = np.swapaxes(self.ops[points][..., channel.operators, :, :], -1, -2)
        return wide @ tall.reshape(*tall.shape[:-3], -1, d)

    def matrix(self) -> Floats:
        points, sites, _, _, d = self.shape
        states = np.arange(d)
        if self.turn is None or self.inside is None:
            out = np.zeros((points, sites, d, d))
        else:
            gap = self.energy[..., None, :] - self.energy[..., :, None]
            apart = gap != 0
            out = 0.5 * (self.turn - np.swapaxes(self.turn, -1, -2)) / np.where(apart, gap, np.inf)
            if self.some.size:
                inside = 0.5 * (self.inside + np.swapaxes(self.inside, -1, -2))
                out[self.some] = np.where(self.together[self.some], inside, out[self.some])
        out[..., states, states] = self.diagonal
        return out
