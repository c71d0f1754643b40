"""The mixture: what is loaded into the lattice, as one frozen, batched parameter set (a JAX pytree).

In:  hoppings, interactions, chemical potentials or fillings, temperature or entropy per particle.
Out: `Mixture`, whose arrays all carry one common batch shape, ready for jit, vmap and grad.
Energies are in any one unit, k_B = hbar = 1. Physical sense is checked here (rules in `gutz.limits`).

    H = - sum_<ij>,a t_a (b†_ia b_ja + h.c.) + sum_i,a U_a/2 n_ia (n_ia - 1) + U12 sum_i n_i1 n_i2
        - sum_i,a mu_a n_ia
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields
from typing import Any, Self

import jax
import jax.numpy as jnp
import numpy as np

from gutz import limits, precision
from gutz.errors import InputError

Array = Any
"""A numpy or jax array, or a jax tracer."""

_LEAVES = ("t", "U", "U12", "mu", "filling", "T", "entropy", "offset")
_META = ("dim", "species", "n_max")


@jax.tree_util.register_pytree_with_keys_class
@dataclass(frozen=True, init=False, eq=False)
class Mixture:
    """Parameters of one or many points; arrays broadcast to the common `shape`.

    t: hopping, ≥ 0, shape (..., species, direction).
    U: on-site repulsion of each species, ≥ 0, shape (..., species).
    U12: interaction between the species, shape (...).
    mu: chemical potentials, shape (..., species), or None where the filling is given.
    filling: atoms per site of each species, shape (..., species), or None.
    T: temperature, ≥ 0 (0 is the ground state itself), shape (...), or None where the entropy is given.
    entropy: entropy per particle in k_B, shape (...), or None.
    offset: energy of the sites of sublattice B minus A (a checkerboard superlattice), shape (..., species).
    dim: number of directions, 1 to 3. species: 1 or 2. n_max: largest occupation kept, None = automatic.
    """

    t: Array
    U: Array
    U12: Array
    mu: Array | None
    filling: Array | None
    T: Array | None
    entropy: Array | None
    offset: Array
    dim: int
    species: int
    n_max: int | None

    def __init__(
        self,
        *,
        t: Any,
        U: Any,
        U12: Any = 0.0,
        mu: Any = None,
        filling: Any = None,
        T: Any = None,
        entropy: Any = None,
        offset: Any = 0.0,
        dim: int = 3,
        species: int = 2,
        n_max: int | None = None,
    ) -> None:
        """Check and broadcast. A number serves both species; a tuple (a, b) gives one each; arrays batch.

        `t` may hold a tuple over directions inside the tuple over species: t=((tx, ty, tz), (tx, ty, tz)).
        Exactly one of `mu` and `filling` must be given, and at most one of `T` (default 0) and `entropy`.
        Raises InputError naming the field for anything without physical sense.
        """
        precision.check_double()
        limits.check_dimension(dim)
        limits.check_species(species)
        if n_max is not None:
            limits.check_n_max(n_max, species)
        if (mu is None) == (filling is None):
            given = "both mu and filling are" if mu is not None else "neither mu nor filling is"
            raise InputError(f"{given} given; give exactly one of them")
        if T is not None and entropy is not None:
            raise InputError("both T and entropy are given; give at most one of them")
        if T is None and entropy is None:
            T = 0.0

        leaves: dict[str, Array | None] = {
            "t": _hopping(t, species, dim),
            "U": _per_species("U", U, species, _non_negative),
            "U12": _real("U12", U12),
            "mu": None if mu is None else _per_species("mu", mu, species, _real),
            "filling": None if filling is None else _per_species("filling", filling, species, _non_negative),
            "T": None if T is None else _non_negative("T", T),
            "entropy": None if entropy is None else _non_negative("entropy", entropy),
            "offset": _per_species("offset", offset, species, _real),
        }
        _check_together(leaves, species, n_max)
        self._fill(_broadcast(leaves), dim=dim, species=species, n_max=None if n_max is None else int(n_max))

    def _fill(self, leaves: dict[str, Array | None], **meta: Any) -> None:
        for name in _LEAVES:
            object.__setattr__(self, name, leaves[name])
        for name in _META:
            object.__setattr__(self, name, meta[name])

    @property
    def shape(self) -> tuple[int, ...]:
        """The common batch shape."""
        return tuple(np.shape(self.U12))

    @property
    def z_t(self) -> Array:
        """Hopping summed over all neighbours, z t for an isotropic lattice; shape (..., species)."""
        return 2.0 * self.t.sum(-1)

    @property
    def sublattices(self) -> int:
        """2 where a superlattice offset makes the sites of a checkerboard differ, else 1."""
        return 2 if _is_traced(self.offset) or bool(np.any(np.asarray(self.offset) != 0)) else 1

    def replace(self, **changes: Array) -> Self:
        """Return a copy with some arrays or settings changed, without checks and without re-broadcasting."""
        new = object.__new__(type(self))
        current = {f.name: getattr(self, f.name) for f in fields(self)}
        new._fill(
            {name: changes.get(name, current[name]) for name in _LEAVES},
            **{name: changes.get(name, current[name]) for name in _META},
        )
        return new

    def map(self, function: Callable[[Array], Array]) -> Self:
        """Return a copy with `function` applied to every array that is present."""
        return self.replace(**{n: function(v) for n in _LEAVES if (v := getattr(self, n)) is not None})

    def flat(self) -> Self:
        """Return a copy whose batch is one axis of length prod(shape)."""
        lead = len(self.shape)
        size = int(np.prod(self.shape, dtype=int))
        return self.map(lambda v: v.reshape((size, *v.shape[lead:])))

    def __getitem__(self, index: Any) -> Self:
        """Select points of the batch, as for an array of shape `shape`."""
        return self.map(lambda v: v[index])

    def tree_flatten_with_keys(self) -> tuple[list[tuple[Any, Array]], tuple[Any, ...]]:
        """Split into arrays and settings, as JAX asks of a pytree."""
        keys = [(jax.tree_util.GetAttrKey(n), getattr(self, n)) for n in _LEAVES]
        return keys, tuple(getattr(self, n) for n in _META)

    @classmethod
    def tree_unflatten(cls, meta: tuple[Any, ...], leaves: Sequence[Array]) -> Self:
        """Rebuild from arrays and settings, without checks, as JAX asks of a pytree."""
        new = object.__new__(cls)
        new._fill(dict(zip(_LEAVES, leaves, strict=True)), **dict(zip(_META, meta, strict=True)))
        return new


def _is_traced(value: Any) -> bool:
    return isinstance(value, jax.core.Tracer)


def _real(field: str, value: Any) -> Array:
    """A float64 array; values under differentiation pass unchecked, since they have no number yet."""
    if _is_traced(value):
        return jnp.asarray(value, jnp.float64)
    return limits.check_real(field, value)


def _non_negative(field: str, value: Any) -> Array:
    array = _real(field, value)
    if not _is_traced(array):
        limits.check_at_least(field, array, 0.0)
    return array


def _per_species(field: str, value: Any, species: int, convert: Callable[[str, Any], Array]) -> Array:
    """Stack a number (for every species) or a tuple (one each) into shape (..., species)."""
    if isinstance(value, tuple):
        if len(value) != species:
            raise InputError(f"{field} has {len(value)} entries; it needs {species}, one for each species")
        parts = [convert(f"{field}[{i + 1}]", part) for i, part in enumerate(value)]
    else:
        parts = [convert(field, value)] * species
    return _stack(parts)


def _hopping(value: Any, species: int, dim: int) -> Array:
    """Shape (..., species, direction) from a number, one per species, or one per species and direction."""

    def directions(field: str, part: Any) -> Array:
        if isinstance(part, tuple):
            if len(part) != dim:
                raise InputError(f"{field} has {len(part)} entries; it needs {dim}, one for each direction")
            return _stack([_non_negative(f"{field}[{'xyz'[i]}]", p) for i, p in enumerate(part)])
        return _stack([_non_negative(field, part)] * dim)

    if isinstance(value, tuple):
        if len(value) != species:
            raise InputError(f"t has {len(value)} entries; it needs {species}, one for each species")
        parts = [directions(f"t[{i + 1}]", part) for i, part in enumerate(value)]
    else:
        parts = [directions("t", value)] * species
    module = jnp if any(map(_is_traced, parts)) else np
    return module.stack(_align(parts, 1), axis=-2)


def _stack(parts: list[Array]) -> Array:
    module = jnp if any(map(_is_traced, parts)) else np
    return module.stack(_align(parts, 0), axis=-1)


def _align(parts: list[Array], trailing: int) -> list[Array]:
    """Broadcast the leading axes of arrays that share their last `trailing` axes."""
    try:
        shape = np.broadcast_shapes(*(p.shape for p in parts))
    except ValueError:
        shapes = " and ".join(str(p.shape[: p.ndim - trailing]) for p in parts)
        raise InputError(f"arrays of shapes {shapes} cannot be combined; batch shapes must broadcast") from None
    return [(jnp if _is_traced(p) else np).broadcast_to(p, shape) for p in parts]


def _check_together(leaves: dict[str, Array | None], species: int, n_max: int | None) -> None:
    """Checks that involve more than one field, or that exclude zero."""
    filling, U, U12 = leaves["filling"], leaves["U"], leaves["U12"]
    if filling is not None and not _is_traced(filling):
        limits.check_at_least("filling", filling, 0.0, strict=True)
        if n_max is not None and np.any(filling >= n_max):
            raise InputError(f"filling is {np.max(filling):g}; it must be below n_max = {n_max}")
    if species == 1:
        if not _is_traced(U12) and np.any(np.asarray(U12) != 0):
            raise InputError(f"U12 is {np.asarray(U12).flat[0]:g}; it must be 0 (or left out) for one species")
    elif not _is_traced(U) and not _is_traced(U12):
        assert U is not None and U12 is not None
        limits.check_not_all_collapsed(U, U12, n_max)


def _broadcast(leaves: dict[str, Array | None]) -> dict[str, Array | None]:
    """Give every present array the common batch shape."""
    trailing = {"t": 2, "U": 1, "mu": 1, "filling": 1, "offset": 1}
    batch: dict[str, tuple[int, ...]] = {}
    for name, leaf in leaves.items():
        if leaf is not None:
            batch[name] = leaf.shape[: leaf.ndim - trailing.get(name, 0)]
    try:
        common = np.broadcast_shapes(*batch.values())
    except ValueError:
        shapes = ", ".join(f"{name} {shape}" for name, shape in batch.items() if shape)
        raise InputError(f"batch shapes do not fit together: {shapes}; they must broadcast") from None
    out: dict[str, Array | None] = dict(leaves)
    for name, shape in batch.items():
        leaf = leaves[name]
        assert leaf is not None
        module = jnp if _is_traced(leaf) else np
        out[name] = module.broadcast_to(leaf, common + leaf.shape[len(shape) :])
    return out
