"""Product ansatz site by site: any potential for each species, T = 0 or above, lattices of one to three dimensions.

In:  Hubbard parameters (one `Mixture`), chemical potentials, potentials on every site, a temperature.
Out: `SiteStates`: filling, order, entropy of every site, and the grand potential.

T = 0: E = sum_i <c_i|h0_i|c_i> - sum_<ij>,a 2 t_a phi_ia phi_ja over real amplitudes c_i of every site, minimised with
optax's L-BFGS; no eigenproblem is solved. T > 0: every site is in the Gibbs state of h0_i - sum_a J_ia (b_a + b†_a),
J_ia = t_a sum of phi over its neighbours; iterated with Anderson mixing (Anderson, J. ACM 12, 547 (1965)), because each
iteration costs an eigenproblem per site and mixing takes far fewer of them than a line search.

Axes can be mirrored at their lower edge, for traps centred between two sites: then an eighth of a cloud is the cloud.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import optax
from numpy.typing import NDArray

from gutz import precision
from gutz.errors import InputError
from gutz.fock import LocalSpace, local_space
from gutz.model import Mixture

Array = Any
FloatArray = NDArray[np.float64]

MOST_SITES = 400_000
"""Largest lattice: amplitudes and the memory of the minimiser stay below 1 GB for two species and n_max = 3."""

GRADIENT_TOLERANCE = 1e-6
"""Largest derivative of the energy by an amplitude at T = 0, in units of the largest energy of a site."""

FIELD_TOLERANCE = 1e-7
"""Largest change of an order parameter in one iteration at T > 0."""

_MEMORY = 8
_MOST_STEPS = 1500
_MIXED = 6
_CHUNK = 4096
_SEED = 1e-3
_SOFT = 1.0
"""Energy, in units of the hopping over all neighbours, above which a level counts as stiff: ten times fewer steps than
without, and the best of 0.3, 1 and 3 (measured)."""


@dataclass(frozen=True, eq=False)
class SiteStates:
    """Arrays over the lattice of shape `shape`; species first where there is one value each.

    filling, order_parameter: (species, *shape). entropy, pair_order, antipair_order: (*shape), the latter two 0 for one
    species. grand_potential: of all sites given, in the mixture's energy unit. residual: largest gradient (T = 0) or
    change of an order parameter (T > 0). steps, converged: of the minimisation.
    """

    filling: FloatArray
    order_parameter: FloatArray
    entropy: FloatArray
    pair_order: FloatArray
    antipair_order: FloatArray
    grand_potential: float
    residual: float
    steps: int
    converged: bool


def solve_sites(
    mixture: Mixture,
    potential: FloatArray,
    mu: FloatArray,
    T: float,
    *,
    mirrored: Sequence[bool] | None = None,
) -> SiteStates:
    """Minimise over all sites at given mu (species,) and T.

    mixture: one point with n_max set; hops along as many axes as the potential has, extra axes of it do not hop.
    potential: (species, *shape), energies. mirrored: axes whose first site neighbours its own mirror image.
    Raises InputError for shapes that do not fit, or lattices of more than `MOST_SITES` sites.
    """
    precision.check_double()
    t, mirrored = _checked(mixture, potential, mirrored)
    assert mixture.n_max is not None
    if not (np.isfinite(T) and T >= 0):
        raise InputError(f"T is {T:g}; it must be a finite number, at least 0")
    space = local_space(mixture.n_max, mixture.species)
    number = np.asarray(space.number)
    flat = mixture.flat()
    U, U12 = np.asarray(flat.U)[0], float(np.asarray(flat.U12)[0])
    bare = (U[:, None] / 2 * number * (number - 1)).sum(0)
    if mixture.species == 2:
        bare = bare + U12 * number.prod(0)
    level = potential.reshape(mixture.species, -1) - np.asarray(mu)[:, None]
    energy = bare[:, None] + number.T @ level
    scale = max(float(np.max(np.abs(bare))) / max(mixture.n_max, 1), float(2 * t.sum(-1).max()), 1e-300)
    shape = potential.shape[1:]
    start = _classical(level, U, U12, t, mixture.n_max)
    if T == 0:
        return _cold(energy, t, shape, mirrored, space, start, scale)
    return _warm(energy, t, shape, mirrored, space, start, T)


def _checked(
    mixture: Mixture, potential: FloatArray, mirrored: Sequence[bool] | None
) -> tuple[FloatArray, tuple[bool, ...]]:
    """Hopping along every axis of the potential, (species, axis), and which axes are mirrored."""
    if mixture.flat().shape != (1,) or mixture.n_max is None:
        raise InputError("the mixture must be one point with n_max given")
    axes = potential.ndim - 1
    if potential.shape[0] != mixture.species or not 1 <= axes <= 3:
        raise InputError(
            f"potential has the shape {potential.shape}; it must be one array of 1 to 3 axes for each of "
            f"{mixture.species} species"
        )
    sites = int(np.prod(potential.shape[1:]))
    if not 1 <= sites <= MOST_SITES:
        raise InputError(f"there are {sites:,} sites; at most {MOST_SITES:,} are solved one by one")
    if not np.all(np.isfinite(potential)):
        raise InputError("potential holds nan or infinity; every site needs a finite energy")
    given = np.asarray(mixture.flat().t)[0]
    t = np.zeros((mixture.species, axes))
    count = min(axes, given.shape[-1])
    t[:, :count] = given[:, :count]
    mirror = tuple(bool(m) for m in mirrored) if mirrored is not None else (False,) * axes
    if len(mirror) != axes:
        raise InputError(f"mirrored has {len(mirror)} entries; it must have {axes}, one per axis")
    return t, mirror


def neighbour_sum(phi: Array, t: FloatArray, mirrored: tuple[bool, ...]) -> Array:
    """J_a = t_a times the order parameters of the neighbours; phi (species, *shape), open or mirrored lower edges."""
    module = np if isinstance(phi, np.ndarray) else jnp
    total = module.zeros_like(phi)
    for d, mirror in enumerate(mirrored):
        axis = d + 1
        size = phi.shape[axis]
        pad = [(0, 0)] * phi.ndim
        pad[axis] = (1, 1)
        wide = module.pad(phi, pad)
        index: list[Any] = [slice(None)] * phi.ndim
        index[axis] = slice(0, size)
        below = wide[tuple(index)]
        index[axis] = slice(2, size + 2)
        above = wide[tuple(index)]
        both = below + above
        if mirror:
            index[axis] = slice(0, 1)
            first = phi[tuple(index)]
            pad[axis] = (0, size - 1)
            both = both + module.pad(first, pad)
        total = total + t[:, d].reshape((-1,) + (1,) * (phi.ndim - 1)) * both
    return total


def _classical(level: FloatArray, U: FloatArray, U12: float, t: FloatArray, n_max: int) -> FloatArray:
    """Fillings to start from: species by species without correlations, kept within the cutoff; (species, site)."""
    room = -level + 2 * t.sum(-1)[:, None]
    shared = U + (max(U12, 0.0) if len(U) == 2 else 0.0)
    n = room / np.maximum(shared, 0.05 * np.abs(room).max() + 1e-300)[:, None]
    return np.clip(n, _SEED, 0.7 * n_max)


def _coherent(filling: FloatArray, n_max: int) -> FloatArray:
    """Amplitudes sqrt of Poisson weights of each species, multiplied together: (state, site)."""
    counts = np.arange(n_max + 1)
    factorial = np.cumprod(np.maximum(counts, 1)).astype(float)
    parts = [np.sqrt(n[None, :] ** counts[:, None] / factorial[:, None]) for n in filling]
    made = parts[0] if len(parts) == 1 else (parts[0][:, None] * parts[1][None]).reshape(-1, filling.shape[1])
    return np.asarray(made / np.sqrt((made**2).sum(0)))


def _averages(c: Array, n_max: int, species: int) -> Array:
    """<b_a> of normalised amplitudes (state, site); (species, site)."""
    root = jnp.sqrt(jnp.arange(1, n_max + 1, dtype=float))
    if species == 1:
        return (root[:, None] * c[:-1] * c[1:]).sum(0)[None]
    grid = c.reshape(n_max + 1, n_max + 1, -1)
    first = (root[:, None, None] * grid[:-1] * grid[1:]).sum((0, 1))
    second = (root[None, :, None] * grid[:, :-1] * grid[:, 1:]).sum((0, 1))
    return jnp.stack([first, second])


@partial(jax.jit, static_argnames=("shape", "mirrored", "n_max", "species", "most"))
def _descend(
    x: Array,
    stretch: Array,
    energy: Array,
    t: Array,
    tolerance: Array,
    *,
    shape: tuple[int, ...],
    mirrored: tuple[bool, ...],
    n_max: int,
    species: int,
    most: int,
) -> tuple[Array, Array, Array, Array]:
    """L-BFGS over x, unnormalised amplitudes divided by `stretch`; returns amplitudes, energy, gradient and steps."""

    def amplitudes(x: Array) -> Array:
        c = x * stretch
        return c / jnp.sqrt((c**2).sum(0))

    def total(x: Array) -> Array:
        c = amplitudes(x)
        phi = _averages(c, n_max, species).reshape((species, *shape))
        return (energy * c**2).sum() - (phi * neighbour_sum(phi, t, mirrored)).sum()

    solver = optax.lbfgs(memory_size=_MEMORY)
    with_gradient = optax.value_and_grad_from_state(total)

    def step(carry: Any) -> Any:
        x, state, _, count = carry
        value, slope = with_gradient(x, state=state)
        update, state = solver.update(slope, state, x, value=value, grad=slope, value_fn=total)
        size = jnp.abs(optax.tree.get(state, "grad")).max()
        return optax.apply_updates(x, update), state, size, count + 1

    def unfinished(carry: Any) -> Any:
        return (carry[2] > tolerance) & (carry[3] < most)

    x, _, slope, count = jax.lax.while_loop(unfinished, step, (x, solver.init(x), jnp.inf, jnp.asarray(0)))
    return amplitudes(x), total(x), slope, count


def _cold(
    energy: FloatArray,
    t: FloatArray,
    shape: tuple[int, ...],
    mirrored: tuple[bool, ...],
    space: LocalSpace,
    start: FloatArray,
    scale: float,
) -> SiteStates:
    """The ground state."""
    species, n_max = space.species, space.n_max
    # Each site's energies count from its lowest, so that sums over many sites keep their digits.
    lowest = energy.min(0)
    work = {"shape": shape, "mirrored": mirrored, "n_max": n_max, "species": species, "most": _MOST_STEPS}
    tolerance = GRADIENT_TOLERANCE * scale
    # Stiff directions are those of high levels: measured in units of their energy, all are alike.
    stretch = 1.0 / np.sqrt(1.0 + (energy - lowest) / max(_SOFT * 2 * t.sum(-1).max(), 1e-3 * scale))
    made = _descend(_coherent(start, n_max) / stretch, stretch, energy - lowest, t, tolerance, **work)
    c, value, slope, count = (np.asarray(v) for v in made)
    number = np.asarray(space.number)
    grid = c.reshape((n_max + 1,) * species + (-1,))
    root = np.sqrt(np.arange(1, n_max + 1))
    pair = antipair = np.zeros(shape)
    if species == 2:
        both = root[:, None, None] * root[None, :, None]
        pair = (both * grid[:-1, :-1] * grid[1:, 1:]).sum((0, 1)).reshape(shape)
        antipair = (both * grid[1:, :-1] * grid[:-1, 1:]).sum((0, 1)).reshape(shape)
    return SiteStates(
        filling=(number @ c**2).reshape((species, *shape)),
        order_parameter=np.asarray(_averages(c, n_max, species)).reshape((species, *shape)),
        entropy=np.zeros(shape),
        pair_order=pair,
        antipair_order=antipair,
        grand_potential=float(value + lowest.sum()),
        residual=float(slope),
        steps=int(count),
        converged=bool(slope <= tolerance),
    )


def _warm(
    energy: FloatArray,
    t: FloatArray,
    shape: tuple[int, ...],
    mirrored: tuple[bool, ...],
    space: LocalSpace,
    start: FloatArray,
    T: float,
) -> SiteStates:
    """The Gibbs state of every site, self-consistent with its neighbours."""
    species = space.species
    phi = np.sqrt(start)
    history: list[tuple[FloatArray, FloatArray]] = []
    change, count = np.inf, 0
    while change > FIELD_TOLERANCE and count < _MOST_STEPS:
        J = neighbour_sum(phi.reshape((species, *shape)), t, mirrored).reshape(species, -1)
        new = _thermal(energy, J, T, space)["phi"]
        miss = new - phi
        change = float(np.abs(miss).max())
        history = [*history[-_MIXED:], (phi, miss)]
        phi = np.maximum(_mixed(history), 0.0)
        count += 1
    J = neighbour_sum(phi.reshape((species, *shape)), t, mirrored).reshape(species, -1)
    found = _thermal(energy, J, T, space)
    # F of the trial state: its own free energy with the fields counted once, not twice.
    back = neighbour_sum(found["phi"].reshape((species, *shape)), t, mirrored).reshape(species, -1)
    value = found["free_energy"].sum() + (2 * J * found["phi"]).sum() - (found["phi"] * back).sum()
    return SiteStates(
        filling=found["filling"].reshape((species, *shape)),
        order_parameter=found["phi"].reshape((species, *shape)),
        entropy=found["entropy"].reshape(shape),
        pair_order=found["pair"].reshape(shape),
        antipair_order=found["antipair"].reshape(shape),
        grand_potential=float(value),
        residual=change,
        steps=count,
        converged=change <= FIELD_TOLERANCE,
    )


def _mixed(history: list[tuple[FloatArray, FloatArray]]) -> FloatArray:
    """Anderson's next trial from pairs (phi, miss), the latest last: least squares over the differences."""
    phi, miss = history[-1]
    if len(history) < 2:
        return np.asarray(phi + miss)
    steps = np.stack([(a[0] - phi).ravel() for a in history[:-1]], -1)
    misses = np.stack([(a[1] - miss).ravel() for a in history[:-1]], -1)
    gram = misses.T @ misses
    gram[np.diag_indices_from(gram)] *= 1.0 + 1e-10
    gram[np.diag_indices_from(gram)] += 1e-300
    share = np.linalg.lstsq(gram, -misses.T @ miss.ravel(), rcond=None)[0]
    # A share far beyond one extrapolates noise: plain iteration then.
    if np.abs(share).sum() > 1e4:
        return np.asarray(phi + miss)
    return np.asarray(phi + miss + ((steps + misses) @ share).reshape(phi.shape))


def _thermal(energy: FloatArray, J: FloatArray, T: float, space: LocalSpace) -> dict[str, FloatArray]:
    """Averages of every site's Gibbs state at fields J (species, site); energy (state, site)."""
    field, number = np.asarray(space.field), np.asarray(space.number)
    sites = energy.shape[1]
    found: dict[str, FloatArray] = {name: np.zeros((space.species, sites)) for name in ("phi", "filling")}
    found |= {name: np.zeros(sites) for name in ("free_energy", "entropy", "pair", "antipair")}
    diagonal = np.arange(space.size)
    for begin in range(0, sites, _CHUNK):
        part = slice(begin, min(begin + _CHUNK, sites))
        h = -np.einsum("as,aij->sij", J[:, part], field)
        h[:, diagonal, diagonal] += energy[:, part].T
        level, vector = np.linalg.eigh(h)
        excess = level - level[:, :1]
        boltzmann = np.exp(-excess / T)
        Z = boltzmann.sum(-1)
        weight = boltzmann / Z[:, None]
        scaled = vector * weight[:, None, :]
        found["phi"][:, part] = 0.5 * np.einsum("aij,sjl,sil->as", field, scaled, vector, optimize=True)
        found["filling"][:, part] = number @ (scaled * vector).sum(-1).T
        found["free_energy"][part] = level[:, 0] - T * np.log(Z)
        found["entropy"][part] = (weight * excess).sum(-1) / T + np.log(Z)
        if space.species == 2:
            for name, operator in (("pair", space.pair), ("antipair", space.antipair)):
                found[name][part] = np.einsum("ij,sjl,sil->s", np.asarray(operator), scaled, vector, optimize=True)
    return found
