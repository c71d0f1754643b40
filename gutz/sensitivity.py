"""First derivatives of a dressed solution in every parameter, from neighbouring solutions.

In:  a flat `Mixture` under differentiation by jax, the numbers behind it, outputs, and a function that solves.
Out: the outputs as functions of the traced parameters, to first order.

The dressed minimum is found among families and by tests with thresholds, so its derivative is taken where it makes
sense: between solutions, by differences of fourth order. Points within a thousandth of the energy scale of a boundary
mix both of its sides.
"""

from collections.abc import Callable, Iterator
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from gutz.errors import InputError
from gutz.model import Mixture

Array = Any
Outputs = dict[str, np.ndarray]

STEP = 1e-3
"""Step relative to the energy scale of a point (to the value itself for fillings, entropies and temperatures)."""

_STENCIL = ((-2.0, 1.0 / 12.0), (-1.0, -2.0 / 3.0), (1.0, 2.0 / 3.0), (2.0, -1.0 / 12.0))
_RELATIVE = ("filling", "entropy", "T")
_LEAVES = ("t", "U", "U12", "mu", "filling", "T", "entropy", "offset")


def check_first_order(mixture: Mixture) -> None:
    """Refuse what would come out wrong in silence: second derivatives, and tracers of jit and vmap.

    Raises InputError.
    """
    for leaf in jax.tree.leaves(mixture):
        behind = getattr(leaf, "primal", None)
        if isinstance(leaf, jax.core.Tracer) and (behind is None or isinstance(behind, jax.core.Tracer)):
            raise InputError(
                "ansatz is 'dressed', which jax can differentiate once and outside jax.jit and jax.vmap; "
                "for more, use ansatz='product'"
            )


def attach(
    mixture: Mixture, values: Mixture, outputs: Outputs, solve: Callable[[Mixture], Outputs]
) -> dict[str, Array]:
    """Outputs plus their differentials: sum over parameters of d(output)/d(parameter) x (traced - value)."""
    found: dict[str, Array] = dict(outputs)
    names = [name for name, v in outputs.items() if v.dtype == np.float64]
    for leaf, index in _components(mixture):
        step = _step(values, leaf, index)
        slope = _slopes(values, leaf, index, step, names, solve)
        traced = getattr(mixture, leaf)[_component(index)]
        change = traced - jax.lax.stop_gradient(traced)
        for name in names:
            shape = (-1,) + (1,) * (outputs[name].ndim - 1)
            found[name] = found[name] + jnp.asarray(slope[name]) * change.reshape(shape)
    return found


def _components(mixture: Mixture) -> Iterator[tuple[str, tuple[int, ...]]]:
    """Every number per point that is being differentiated."""
    for leaf in _LEAVES:
        value = getattr(mixture, leaf)
        if value is not None and isinstance(value, jax.core.Tracer):
            yield from ((leaf, index) for index in np.ndindex(value.shape[1:]))


def _component(index: tuple[int, ...]) -> Any:
    """One number of every point."""
    return (slice(None), *index)


def _step(values: Mixture, leaf: str, index: tuple[int, ...]) -> np.ndarray:
    own = np.asarray(getattr(values, leaf), float)[_component(index)]
    if leaf in _RELATIVE:
        return STEP * own
    scale = np.maximum(np.asarray(values.U).max(-1), np.asarray(values.z_t).max(-1))
    step = STEP * scale
    # Hopping and repulsion stay positive; a hopping of zero has no slope (only its square matters).
    return np.minimum(step, 0.1 * own) if leaf in ("t", "U") else step


def _slopes(
    values: Mixture,
    leaf: str,
    index: tuple[int, ...],
    step: np.ndarray,
    names: list[str],
    solve: Callable[[Mixture], Outputs],
) -> Outputs:
    """d(output)/d(component), arrays like the outputs; zero where the step is."""
    own = np.asarray(getattr(values, leaf))
    where = np.flatnonzero(step > 0)
    total: dict[str, Any] = dict.fromkeys(names, 0.0)
    size = own.shape[0]
    found: Outputs = {}
    for offset, weight in _STENCIL if where.size else ():
        moved = own[where].copy()
        moved[_component(index)] += offset * step[where]
        near = solve(values[where].replace(**{leaf: moved}))
        with np.errstate(invalid="ignore"):  # inf - inf, see below
            for name in names:
                total[name] = total[name] + weight * near[name]
    for name in names:
        part = np.asarray(total[name])
        whole = np.zeros((size, *part.shape[1:])) if where.size else np.zeros((size,))
        if where.size:
            # Infinite exponents and lengths stay infinite: their difference is no number, and means no change.
            slope = part / step[where].reshape((-1,) + (1,) * (part.ndim - 1))
            whole[where] = np.where(np.isfinite(slope), slope, 0.0)
        found[name] = whole
    return found
