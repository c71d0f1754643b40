"""The dressed functional of many points in numbers: value, gradient, averages, and what follows from them.

In:  `dressed.Sites` and trial fields as numpy arrays.
Out: `dressed.Look`, numpy arrays. Nothing is compiled: points are taken in pieces that fit the processor's cache,
     sorted by the ratio of bandwidth to temperature, so that each piece needs as many time nodes as its own points do.
"""

from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz.ansatz import bond
from gutz.ansatz.bond import Frame
from gutz.ansatz.dressed import Look, Sites, fields_of
from gutz.ansatz.gibbs import Levels
from gutz.ansatz.second import NEGLIGIBLE, Second, second_order

Array = Any
Floats = NDArray[np.float64]

PIECE = 64
"""Points evaluated together: more do not fit the cache, fewer cost overhead (measured)."""

_SERIES_BELOW = 1e-2

_KEPT_MEMORY = 30 << 20


def _keep_memory() -> None:
    """Free one large block, after which glibc holds on to freed memory up to that size.

    Its thresholds follow the largest block freed so far (up to 32 MB). Without this every temporary array is handed
    back to the system and faulted in again, which doubles the time of a look (measured); elsewhere this does nothing.
    """
    block = np.empty(_KEPT_MEMORY, np.uint8)
    del block


_keep_memory()


def numbers(p: Sites) -> Sites:
    """The same sites as numpy arrays."""
    return Sites(*(np.asarray(v, float) for v in p))


def pick(p: Sites, index: Any) -> Sites:
    """Some of the points."""
    return Sites(*(v[index] for v in p))


def look(
    p: Sites, x: Floats, lam: Floats, *, f: Frame, names: tuple[str, ...], cold: bool,
    energies: bool = True, nodes: int = 0,
) -> Look:  # fmt: skip
    """Evaluate functional and gradient.

    p: numpy arrays with one batch axis. x: (point, sublattice, field) for the fields in `names`, which the frame must
    allow. lam: (point,), strength of the bond term. cold: every T is 0, the ground state; otherwise every T must be
    > 0. energies: also the derivatives in the energies (zero otherwise). nodes: least number of time nodes.
    Points that are not finite get nan for F, nothing raises.
    """
    size = x.shape[0]
    finite = np.isfinite(x).all((-1, -2)) & np.isfinite(p.energy).all((-1, -2)) & np.isfinite(p.z_t).all(-1)
    if not finite.all():
        p = Sites(*(np.where(finite.reshape(-1, *[1] * (v.ndim - 1)), v, 1.0) for v in p))
        out = look(p, np.where(finite[:, None, None], x, 0.0), lam, f=f, names=names, cold=cold, nodes=nodes)
        return out._replace(free_energy=np.where(finite, out.free_energy, np.nan))
    if size <= PIECE:
        return _look(p, x, lam, f, names, cold, energies, nodes)
    order = np.arange(size) if cold else np.argsort(_effort(p, x), kind="stable")
    whole_out: Look | None = None
    for begin in range(0, size, PIECE):
        index = order[begin : begin + PIECE]
        part = _look(pick(p, index), x[index], lam[index], f, names, cold, energies, nodes)
        if whole_out is None:
            whole_out = Look(*(np.empty((size, *v.shape[1:])) for v in part))
        for whole, piece in zip(whole_out, part, strict=True):
            whole[index] = piece
    assert whole_out is not None
    return whole_out


def _effort(p: Sites, x: Floats) -> Floats:
    """Roughly time nodes times early levels, for sorting only; each piece measures its own levels."""
    above = p.energy - p.energy.min(-1, keepdims=True)
    nodes = np.log(2.0 + (above.max((-1, -2)) + np.abs(x).sum((-1, -2))) / p.T)
    early: Floats = (above < NEGLIGIBLE * p.T[:, None, None]).sum((-1, -2))
    return nodes * early


@lru_cache(maxsize=64)
def _operators(f: Frame, names: tuple[str, ...]) -> tuple[Floats, Floats, tuple[int, ...]]:
    """Operators Q of the fields; b_a and the Q of everything but J one below the other; positions of the J."""
    Q = fields_of(f, names) if names else np.zeros((0, *f.lower.shape[1:]))
    singles = tuple(i for i, name in enumerate(names) if name.startswith("J"))
    others = [i for i in range(len(names)) if i not in singles]
    stacked = np.concatenate([f.lower, Q[others]])
    return Q, np.ascontiguousarray(stacked.reshape(-1, stacked.shape[-1])), singles


def hamiltonian(p: Sites, x: Floats, f: Frame, names: tuple[str, ...]) -> Floats:
    """Trial Hamiltonian of every sublattice in the frame's basis, (point, sublattice, state, state)."""
    Q = _operators(f, names)[0]
    d = Q.shape[-1]
    h = -(x @ Q.reshape(len(names), -1)).reshape(*x.shape[:-1], d, d)
    states = np.arange(d)
    h[..., states, states] += p.energy[..., f.order]
    return h


def _eigensystem(h: Floats, f: Frame) -> tuple[Floats, Floats]:
    """Energies (in block order, not sorted) and eigenvectors."""
    if len(f.blocks) == 1:
        energy, vectors = np.linalg.eigh(h)
        return energy, vectors
    ends = np.cumsum(f.blocks)
    energy, vectors = np.empty(h.shape[:-1]), np.zeros(h.shape)
    for size in sorted(set(f.blocks)):
        rows = np.array([np.arange(e - size, e) for e, s in zip(ends, f.blocks, strict=True) if s == size])
        if size == 1:
            energy[..., rows[:, 0]] = h[..., rows[:, 0], rows[:, 0]]
            vectors[..., rows[:, 0], rows[:, 0]] = 1.0
        else:
            levels, axes = np.linalg.eigh(h[..., rows[:, :, None], rows[:, None, :]])
            energy[..., rows] = levels
            vectors[..., rows[:, :, None], rows[:, None, :]] = axes
    return energy, vectors


def levels(h: Floats, T: Floats, f: Frame, *, cold: bool) -> Levels:
    """Levels and weights; h: (point, sublattice, state, state), or its diagonal in a diagonal frame. T: (point,)."""
    energy, vectors = (h, np.eye(f.lower.shape[-1])) if f.diagonal else _eigensystem(h, f)
    lowest = energy.min(-1, keepdims=True)
    if cold:
        weight = np.zeros_like(energy)
        np.put_along_axis(weight, energy.argmin(-1)[..., None], 1.0, -1)
        nothing = np.zeros(energy.shape[:-1])
        return Levels(energy, vectors, weight, lowest[..., 0], nothing, nothing)
    beta = np.broadcast_to(1.0 / T[:, None], energy.shape[:-1])
    excitation = energy - lowest
    boltzmann = np.exp(-excitation * beta[..., None])
    total = boltzmann.sum(-1)
    weight = boltzmann / total[..., None]
    entropy = beta * (weight * excitation).sum(-1) + np.log(total)
    return Levels(energy, vectors, weight, lowest[..., 0] - T[:, None] * np.log(total), entropy, beta)


def response_kernel(lv: Levels, *, cold: bool) -> Floats:
    """(P_n - P_m)/(E_m - E_n), for equal energies P/T (0 at T = 0); (point, sublattice, level, level)."""
    gap = lv.energy[..., None, :] - lv.energy[..., :, None]
    change = lv.weight[..., :, None] - lv.weight[..., None, :]
    if cold:
        return np.where(gap == 0, 0.0, change / np.where(gap == 0, 1.0, gap))
    y = gap * lv.inverse_temperature[..., None, None]
    near = np.abs(y) < _SERIES_BELOW
    kernel: Floats = change / np.where(near, np.inf, gap)
    # sqrt(P P') sinh(y/2)/(y/2): no difference of close numbers.
    where = np.nonzero(near)
    square = y[where] ** 2
    mean = np.sqrt(lv.weight[..., :, None] * lv.weight[..., None, :])[where] * lv.inverse_temperature[where[:2]]
    kernel[where] = mean * (1.0 + square / 24.0 + square**2 / 1920.0)
    return kernel


def _look(
    p: Sites, x: Floats, lam: Floats, f: Frame, names: tuple[str, ...], cold: bool, energies: bool, nodes: int
) -> Look:
    Q, lv, deviation, phi = _in_levels(p, x, f, names, cold)
    sublattices, species, k = x.shape[-2], phi.shape[-1], len(names)
    mean = (np.diagonal(Q, axis1=-2, axis2=-1) * lv.weight[:, :, None, :]).sum(-1)
    kernel = response_kernel(lv, cold=cold)
    if f.diagonal:
        values = np.diagonal(Q, axis1=-2, axis2=-1)
        flat = np.broadcast_to(values, (*x.shape[:2], *values.shape[-2:]))
        weighted = np.diagonal(kernel, axis1=-2, axis2=-1)[:, :, None, :] * flat
    else:
        flat = Q.reshape(*x.shape[:2], k, -1)
        weighted = kernel.reshape(*x.shape[:2], 1, -1) * flat
    response = weighted @ np.swapaxes(flat, -1, -2)
    response -= lv.inverse_temperature[..., None, None] * mean[..., :, None] * mean[..., None, :]

    hop = lam[:, None, None, None] * p.hop[:, None]
    weight = np.concatenate([hop, hop], axis=1)
    ratio = 0.0 if cold else float(((lv.energy.max(-1) - lv.energy.min(-1)).max(-1) / p.T).max())
    nodes = max(nodes, bond.enough_nodes(ratio))
    second = second_order(lv, deviation, weight, f, cold=cold, nodes=nodes)
    neighbour = p.z_t[:, None, :] * phi[:, ::-1]
    mismatch = x.copy()
    for i in _operators(f, names)[2]:
        mismatch[..., i] -= neighbour[..., int(names[i][1]) - 1]
    first = (lv.free_energy + (x * mean).sum(-1) - (neighbour * phi).sum(-1)).mean(-1)
    gradient = (response @ mismatch[..., None])[..., 0] / sublattices
    slope = second.slope
    slope_flat = np.diagonal(slope, axis1=-2, axis2=-1) if f.diagonal else slope.reshape(*x.shape[:2], -1)
    gradient -= (flat @ slope_flat[..., None])[..., 0]
    safe = np.where(lam > 0, lam, 1.0)
    derivatives = _in_parameters(p, lv, kernel, Q, mismatch, second, f, cold, energies)
    phi = np.broadcast_to(phi, (*x.shape[:2], species))
    return Look(
        first + second.value, gradient, response, mean, phi, second.value / safe, second.variance / safe,
        second.parts, *derivatives,
    )  # fmt: skip


def _in_levels(
    p: Sites, x: Floats, f: Frame, names: tuple[str, ...], cold: bool
) -> tuple[Floats, Levels, Floats, Floats]:
    """Q in levels, levels, δb_a in levels, <b_a>; Q and δb_a without batch axes in a diagonal frame."""
    Q, stacked, singles = _operators(f, names)
    species, d = f.lower.shape[:2]
    if f.diagonal:
        values = np.diagonal(Q, axis1=-2, axis2=-1)
        lv = levels(p.energy[..., f.order] - x @ values, p.T, f, cold=cold)
        return Q, lv, f.lower, np.zeros((*x.shape[:2], species))
    lv = levels(hamiltonian(p, x, f, names), p.T, f, cold=cold)
    right = (stacked @ lv.vectors).reshape(*x.shape[:2], -1, d, d)
    inside = np.swapaxes(lv.vectors, -1, -2)[:, :, None] @ right
    b = inside[:, :, :species]
    phi = (np.diagonal(b, axis1=-2, axis2=-1) * lv.weight[:, :, None, :]).sum(-1)
    states = np.arange(d)
    deviation = b.copy()
    deviation[..., states, states] -= phi[..., None]
    if not singles:
        return inside[:, :, species:], lv, deviation, phi
    out = np.empty((*x.shape[:2], len(names), d, d))
    others = [i for i in range(len(names)) if i not in singles]
    for i in singles:
        one = b[:, :, int(names[i][1]) - 1]
        out[:, :, i] = one + np.swapaxes(one, -1, -2)
    out[:, :, others] = inside[:, :, species:]
    return out, lv, deviation, phi


def _in_parameters(
    p: Sites, lv: Levels, kernel: Floats, Q: Floats, mismatch: Floats, second: Second, f: Frame, cold: bool,
    energies: bool,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Derivatives of F in the energies of the basis states (0 unless asked for), and in T, at fixed fields."""
    sublattices = mismatch.shape[-2]
    # d<Q>/dh = -K∘Q + <Q> P/T, summed with the mismatch of each field; the state itself is dF_tr/dh.
    values = (mismatch[..., None] * np.diagonal(Q, axis1=-2, axis2=-1)).sum(-2)
    average = (lv.inverse_temperature * (values * lv.weight).sum(-1))[..., None] * lv.weight
    own = average - np.diagonal(kernel, axis1=-2, axis2=-1) * values
    diagonal = own / sublattices + np.diagonal(second.slope, axis1=-2, axis2=-1)
    in_T, in_energy = np.zeros_like(second.value), np.zeros_like(p.energy)
    if not cold:
        # Averages depend on h/T only, and the bond term is homogeneous of degree -1 in (h, T).
        excitation = lv.energy - lv.energy.min(-1, keepdims=True)
        in_T = -lv.entropy.mean(-1) - ((diagonal * excitation).sum((-1, -2)) + second.value) / p.T
    if energies:
        states = np.arange(kernel.shape[-1])
        in_h = second.slope - kernel * (mismatch[..., None, None] * Q).sum(-3) / sublattices
        in_h[..., states, states] = diagonal + lv.weight / sublattices
        in_energy = ((lv.vectors @ in_h) * lv.vectors).sum(-1)[..., np.argsort(f.order)]
    return in_energy, in_T
