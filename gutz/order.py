"""What order means in one, two and three dimensions.

In:  outputs of solved points (numpy arrays), hoppings.
Out: labels that respect the dimension, the range of the superfluid order, decay exponents and coherence lengths.

Mean field knows no dimension. The phases it finds have a stiffness matrix rho and a compressibility kappa (one row per
species), and what they mean in fewer than three dimensions is known (hydrodynamics, L = (kappa theta_t² + rho
theta_x²)/2 per site, hbar = k_B = 1; textbook: Giamarchi, Quantum Physics in One Dimension, OUP 2004):

- 3D, and 2D at T = 0: long-range order.
- 2D at T > 0: <e^{iv.theta}> decays as r^-eta, eta = T v.rho^-1.v / 2 pi, as long as no vortex unbinds. A vortex with
  windings w (whole numbers, one per species) does where T > (pi/2) w.rho.w (Nelson, Kosterlitz, PRL 39, 1201 (1977)).
- 1D at T = 0: eta = v.G^-1.v / 2 pi with G the geometric mean of kappa and rho; for one species eta = 1/(2K), K = pi
  sqrt(rho kappa). At commensurate filling w.n the lattice locks the density w where pi w.G.w < 2.
- 1D at T > 0: exponential decay over xi = 2 / (T v.rho^-1.v) sites.

v picks what is correlated: (1,0), (0,1) atoms of a species, (1,1) pairs, (1,-1) anti-pairs. Directions with different
hopping enter by the geometric mean of their stiffnesses.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz.phases import EMPTY_THRESHOLD, ORDER_THRESHOLD, PAIR_THRESHOLD, Phase, Range, label

Array = NDArray[np.float64]

COMMENSURATE = 1e-6
"""How far a filling may be from a whole number for the lattice to lock it in one dimension."""

_CHANNELS: dict[int, dict[str, tuple[float, ...]]] = {
    1: {"1": (1.0,)},
    2: {"1": (1.0, 0.0), "2": (0.0, 1.0), "pair": (1.0, 1.0), "antipair": (1.0, -1.0)},
}
_FLOOR = 1e-12


def by_dimension(outputs: Mapping[str, Array], t: Array) -> dict[str, NDArray[Any]]:
    """Labels, range of order, exponents and lengths of a flat batch.

    outputs: as in `gutz.variables`, leading axis the point. t: (point, species, direction). Returns `phase`,
    `order_range`, `exponent` and `coherence_length` (point, species), and the latter two with `_pair` and `_antipair`
    at the end. An exponent is 0 for long-range order and
    inf without power law; a length is inf for (quasi-)long-range order and 0 where mean field has no order.
    """
    species = t.shape[-2]
    hops = np.asarray((t > 0).any(-2))
    dimension = hops.sum(-1)
    T = outputs["T"]
    channels: dict[str, Array] = {name: np.array(v) for name, v in _CHANNELS[species].items()}
    ordered = _ordered(outputs, species)
    rho = _across(outputs["stiffness"], hops)
    plane, chain = (dimension == 2) & (T > 0), dimension <= 1
    cold, warm = chain & (T == 0), chain & (T > 0)
    stiff, sound = _modes(rho, outputs["compressibility"], channels, ordered)

    kept = dict(ordered)
    locked = np.zeros(T.shape, bool)
    for w in channels.values():
        unbound = plane & (T >= 0.5 * np.pi * _form(rho, w))
        filling = outputs["filling"] @ w
        whole = (np.abs(filling - np.round(filling)) < COMMENSURATE) & (np.round(filling) != 0)
        stuck = cold & whole & (np.pi * _form(sound, w) < 2.0)
        locked |= stuck & any_of(ordered)
        for other, v in channels.items():
            # A vortex w, or a locked density w, scrambles every e^{iv.theta} it winds.
            kept[other] = kept[other] & ~((unbound | stuck) & (v @ w != 0))
    phase = _relabel(outputs, label(outputs), ordered, kept, locked)

    survives = any_of(kept)
    reach = np.full(T.shape, Range.NONE, np.int8)
    reach[survives] = Range.LONG
    reach[survives & (plane | cold)] = Range.QUASI
    reach[survives & warm] = Range.SHORT
    found: dict[str, NDArray[Any]] = {"phase": phase, "order_range": reach}
    stiff, sound = _modes(rho, outputs["compressibility"], channels, kept)
    for name, v in channels.items():
        eta = np.where(kept[name] & ~warm, 0.0, np.inf)
        length = np.where(kept[name], np.inf, 0.0)
        for here, matrix, factor in ((plane, stiff, T), (cold, sound, np.ones_like(T))):
            at = np.flatnonzero(kept[name] & here)
            eta[at] = factor[at] * _inverse_form(matrix[at], v) / (2 * np.pi)
        at = np.flatnonzero(kept[name] & warm)
        length[at] = 2.0 / (T[at] * _inverse_form(stiff[at], v))
        found[f"exponent_{name}"], found[f"coherence_length_{name}"] = eta, length
    if species == 1:
        for name in ("pair", "antipair"):
            found[f"exponent_{name}"], found[f"coherence_length_{name}"] = np.full(T.shape, np.inf), np.zeros(T.shape)
    for name in ("exponent", "coherence_length"):
        per_species = [found.pop(f"{name}_{a + 1}") for a in range(species)]
        found[name] = np.stack(per_species, axis=-1)
    return found


def any_of(channels: Mapping[str, NDArray[np.bool_]]) -> NDArray[np.bool_]:
    """True where some channel is ordered."""
    found: NDArray[np.bool_] = np.any(list(channels.values()), axis=0)
    return found


def _ordered(outputs: Mapping[str, Array], species: int) -> dict[str, NDArray[np.bool_]]:
    """Which averages mean field has."""
    atoms = np.abs(outputs["order_parameter"]) > ORDER_THRESHOLD
    found = {str(a + 1): atoms[:, a] for a in range(species)}
    if species == 2:
        both = atoms.all(-1)
        found["pair"] = both | (~atoms.any(-1) & (outputs["pair_order"] > PAIR_THRESHOLD))
        found["antipair"] = both | (~atoms.any(-1) & (outputs["antipair_order"] > PAIR_THRESHOLD))
    return found


def _relabel(
    outputs: Mapping[str, Array],
    mean_field: NDArray[np.int8],
    before: Mapping[str, NDArray[np.bool_]],
    kept: Mapping[str, NDArray[np.bool_]],
    locked: NDArray[np.bool_],
) -> NDArray[np.int8]:
    """Label again without the order that does not survive."""
    changed = np.any([before[name] != kept[name] for name in before], axis=0)
    if not changed.any():
        return mean_field
    species = outputs["order_parameter"].shape[-1]
    atoms = np.stack([kept[str(a + 1)] for a in range(species)], -1)
    reduced = dict(outputs)
    reduced["order_parameter"] = np.where(atoms, outputs["order_parameter"], 0.0)
    if species == 2:
        for name in ("pair", "antipair"):
            reduced[f"{name}_order"] = np.where(kept[name], outputs[f"{name}_order"], 0.0)
    phase = np.where(changed, label(reduced), mean_field)
    # Mean field puts large number fluctuations into the insulator it takes for a superfluid.
    insulating = changed & locked & (phase == Phase.NORMAL) & (outputs["filling"].sum(-1) > EMPTY_THRESHOLD)
    return np.where(insulating, Phase.MOTT, phase).astype(np.int8)


def _across(stiffness: Array, hops: NDArray[np.bool_]) -> Array:
    """One stiffness matrix for all directions with hopping: their geometric mean; (point, species, species_)."""
    along = np.moveaxis(stiffness, -1, 0)
    out = np.zeros(along.shape[1:])
    count = hops.sum(-1)
    one = count == 1
    for i in range(len(along)):
        out = np.where((one & hops[:, i])[:, None, None], along[i], out)
    if len(along) > 1:
        two = count == 2
        for i in range(len(along)):
            for j in range(i):
                pair = two & hops[:, i] & hops[:, j]
                if pair.any():
                    out[pair] = _geometric_mean(_positive(along[i][pair]), _positive(along[j][pair]))
        out = np.where((count == 3)[:, None, None], along.mean(0), out)
    return out


def _modes(
    rho: Array, kappa: Array, channels: Mapping[str, Array], ordered: Mapping[str, NDArray[np.bool_]]
) -> tuple[Array, Array]:
    """Stiffness, and its geometric mean with the compressibility, of the phases that are ordered.

    Where only one channel is (pairs, say), the matrices have rank one, g v v^T: only that phase exists.
    """
    stiff, sound = np.zeros_like(rho), np.zeros_like(rho)
    count = np.sum([k.astype(int) for k in ordered.values()], axis=0)
    for name, v in channels.items():
        at = np.flatnonzero(ordered[name] & (count == 1))
        size = (v @ v) ** 2
        along = _form(rho[at], v) / size
        both = np.sqrt(np.maximum(along * _form(kappa[at], v) / size, 0.0))
        for target, value in ((stiff, along), (sound, both)):
            target[at] = value[:, None, None] * np.outer(v, v)
    at = np.flatnonzero(count > 1)
    stiff[at] = _positive(rho[at])
    sound[at] = _geometric_mean(stiff[at], _positive(kappa[at]))
    return stiff, sound


def _positive(matrix: Array) -> Array:
    """The symmetric part, moved to just above singular where rounding took it below."""
    even = 0.5 * (matrix + np.swapaxes(matrix, -1, -2))
    values, vectors = np.linalg.eigh(even)
    floor = _FLOOR * np.abs(values).max(-1, keepdims=True, initial=0.0) + 1e-150
    clipped: Array = (vectors * np.maximum(values, floor)[..., None, :]) @ np.swapaxes(vectors, -1, -2)
    return clipped


def _geometric_mean(a: Array, b: Array) -> Array:
    """Matrix geometric mean of positive 1x1 or 2x2 matrices (closed form of Cayley and Hamilton)."""
    if a.shape[-1] == 1:
        return np.sqrt(a * b)
    alpha, beta = (np.sqrt(np.maximum(np.linalg.det(m), 1e-300))[..., None, None] for m in (a, b))
    total = a / alpha + b / beta
    return np.sqrt(alpha * beta) * total / np.sqrt(np.maximum(np.linalg.det(total), 1e-300))[..., None, None]


def _form(matrix: Array, v: Array) -> Array:
    """v.matrix.v of every point."""
    form: Array = np.einsum("a,...ab,b->...", v, matrix, v)
    return form


def _inverse_form(matrix: Array, v: Array) -> Array:
    """v.matrix^+.v of every point."""
    if not matrix.size:
        return np.zeros(matrix.shape[:-2])
    inverse = np.asarray(np.linalg.pinv(matrix, rcond=0.1 * _FLOOR, hermitian=True), np.float64)
    return _form(inverse, v)
