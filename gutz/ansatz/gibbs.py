"""Thermal state of one lattice site, with derivatives that are right at degenerate levels.

In:  real symmetric matrices h, shape (..., state, state), and temperatures T ≥ 0, shape (...); k_B = 1.
Out: free energy -T log tr exp(-h/T), entropy, density matrix and static responses; T = 0 is the ground state.

Automatic differentiation through an eigensolver has poles at degenerate levels, so the derivatives are given
here as divided differences of exp (Daleckii and Krein), which have none. The free energy can be differentiated
three times and the state twice; a further derivative is refused, never wrong.
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp

from gutz.errors import InputError

Array = Any

DEGENERACY = 1e-12
"""Levels closer than this, relative to the largest matrix element, are one level at T = 0."""

_SERIES_RANGE = 0.3
_SERIES_TERMS = 14


class Levels(NamedTuple):
    """Eigensystem and occupation. energy, weight: (..., state); vectors: (..., state, level); entropy etc.: (...)."""

    energy: Array
    vectors: Array
    weight: Array
    free_energy: Array
    entropy: Array
    inverse_temperature: Array


def levels(h: Array, T: Array) -> Levels:
    """Eigensystem, Boltzmann weights, free energy and entropy; for values only, not to be differentiated."""
    energy, vectors = jnp.linalg.eigh(h, symmetrize_input=False)[:2]
    warm = T > 0
    beta = jnp.where(warm, 1.0 / jnp.where(warm, T, 1.0), 0.0)
    excitation = energy - energy[..., :1]
    scale = jnp.maximum(jnp.abs(h).max((-1, -2)), 1e-300)
    ground = excitation <= (DEGENERACY * scale)[..., None]
    boltzmann = jnp.where(warm[..., None], jnp.exp(-excitation * beta[..., None]), ground)
    total = boltzmann.sum(-1)
    weight = boltzmann / total[..., None]
    free_energy = energy[..., 0] - T * jnp.log(total)
    # beta <E - E0> + log Z has no cancellation: both terms are positive.
    entropy = jnp.where(warm, beta * (weight * excitation).sum(-1) + jnp.log(total), 0.0)
    return Levels(energy, vectors, weight, free_energy, entropy, beta)


def response_kernel(lv: Levels) -> Array:
    """K_mn = (P_n - P_m)/(E_m - E_n) ≥ 0, for equal energies P/T (0 at T = 0); shape (..., level, level).

    The change of the state under h -> h + A is -K∘A in the basis of levels, up to normalisation.
    """
    beta = lv.inverse_temperature[..., None, None]
    gap = jnp.abs(lv.energy[..., :, None] - lv.energy[..., None, :])
    lower = jnp.maximum(lv.weight[..., :, None], lv.weight[..., None, :])
    upper = jnp.minimum(lv.weight[..., :, None], lv.weight[..., None, :])
    apart = gap > 0
    safe_gap = jnp.where(apart, gap, 1.0)
    warm = jnp.where(apart, -lower * jnp.expm1(-gap * beta) / safe_gap, lower * beta)
    # Levels of one degenerate ground manifold have equal weights, so the difference quotient is 0 for them.
    cold = jnp.where(apart, (lower - upper) / safe_gap, 0.0)
    return jnp.where(beta > 0, warm, cold)


def _to_levels(lv: Levels, A: Array) -> Array:
    return jnp.swapaxes(lv.vectors, -1, -2) @ A @ lv.vectors


def _from_levels(lv: Levels, A: Array) -> Array:
    return lv.vectors @ A @ jnp.swapaxes(lv.vectors, -1, -2)


def _trace(A: Array) -> Array:
    return jnp.trace(A, axis1=-2, axis2=-1)


def _diagonal_matrix(d: Array) -> Array:
    return d[..., :, None] * jnp.eye(d.shape[-1])


def _effective_change(h: Array, T: Array, dh: Array, dT: Array) -> Array:
    """Fold a change of T into one of h: the state depends on h/T only, and not on a shift of h."""
    beta = jnp.where(T > 0, 1.0 / jnp.where(T > 0, T, 1.0), 0.0)
    shift = jax.lax.stop_gradient(jnp.diagonal(h, axis1=-2, axis2=-1).min(-1))
    shifted = h - shift[..., None, None] * jnp.eye(h.shape[-1])
    return dh - shifted * (dT * beta)[..., None, None]


@jax.custom_jvp
def free_energy(h: Array, T: Array) -> Array:
    """F = -T log tr exp(-h/T), at T = 0 the lowest eigenvalue; shape (...)."""
    return levels(h, T).free_energy


@free_energy.defjvp
def _free_energy_jvp(primals: Any, tangents: Any) -> Any:
    (h, T), (dh, dT) = primals, tangents
    change = (state(h, T) * dh).sum((-1, -2)) - entropy(h, T) * dT
    return free_energy(h, T), change


@jax.custom_jvp
def entropy(h: Array, T: Array) -> Array:
    """S = -dF/dT in k_B, 0 at T = 0 (also for a degenerate ground state); shape (...)."""
    return levels(h, T).entropy


@entropy.defjvp
def _entropy_jvp(primals: Any, tangents: Any) -> Any:
    (h, T), (dh, dT) = primals, tangents
    beta = jnp.where(T > 0, 1.0 / jnp.where(T > 0, T, 1.0), 0.0)
    # tr(drho) = 0, so the mean of h may be taken out; this keeps the digits at low T.
    mean = jax.lax.stop_gradient((state(h, T) * h).sum((-1, -2)))
    centred = h - mean[..., None, None] * jnp.eye(h.shape[-1])
    change = state_change(h, T, _effective_change(h, T, dh, dT))
    return entropy(h, T), beta * (centred * change).sum((-1, -2))


@jax.custom_jvp
def state(h: Array, T: Array) -> Array:
    """Density matrix exp(-h/T)/Z, at T = 0 the (equally mixed) ground state; shape (..., state, state)."""
    lv = levels(h, T)
    return _from_levels(lv, _diagonal_matrix(lv.weight))


@state.defjvp
def _state_jvp(primals: Any, tangents: Any) -> Any:
    (h, T), (dh, dT) = primals, tangents
    return state(h, T), state_change(h, T, _effective_change(h, T, dh, dT))


@jax.custom_jvp
def state_change(h: Array, T: Array, A: Array) -> Array:
    """First-order change of the state under h -> h + A at fixed T; linear in A, shape (..., state, state)."""
    lv = levels(h, T)
    inner = -response_kernel(lv) * _to_levels(lv, A)
    normalised = inner - _diagonal_matrix(lv.weight * _trace(inner)[..., None])
    return _from_levels(lv, normalised)


@state_change.defjvp
def _state_change_jvp(primals: Any, tangents: Any) -> Any:
    (h, T, A), (dh, dT, dA) = primals, tangents
    beta = jnp.where(T > 0, 1.0 / jnp.where(T > 0, T, 1.0), 0.0)
    value = state_change(h, T, A)
    change = (
        state_change(h, T, dA)
        + _state_second_change(h, T, A, _effective_change(h, T, dh, dT))
        - value * (dT * beta)[..., None, None]
    )
    return value, change


@jax.custom_jvp
def _state_second_change(h: Array, T: Array, A: Array, B: Array) -> Array:
    """Second-order change of the state, bilinear and symmetric in A and B."""
    lv = levels(h, T)
    kernel = -response_kernel(lv)
    a, b = _to_levels(lv, A), _to_levels(lv, B)
    first_a, first_b = kernel * a, kernel * b
    third = _second_divided_difference(lv, kernel)
    second = jnp.einsum("...ijk,...ij,...jk->...ik", third, a, b) + jnp.einsum(
        "...ijk,...ij,...jk->...ik", third, b, a
    )
    trace_a, trace_b, trace_ab = _trace(first_a), _trace(first_b), _trace(second)
    weights = _diagonal_matrix(lv.weight)
    inner = (
        second
        - first_a * trace_b[..., None, None]
        - first_b * trace_a[..., None, None]
        + weights * (2 * trace_a * trace_b - trace_ab)[..., None, None]
    )
    return _from_levels(lv, inner)


@_state_second_change.defjvp
def _refuse_third_derivative(primals: Any, tangents: Any) -> Any:
    raise InputError(
        "a third derivative of the thermal state was asked for; the free energy can be differentiated three "
        "times, fillings and order parameters twice, and responses such as the compressibility once"
    )


def _second_divided_difference(lv: Levels, first: Array) -> Array:
    """f[E_i, E_j, E_k] for f = exp(-E/T)/Z (a step at T = 0), from f[E_i, E_j]; shape (..., i, j, k)."""
    E, beta = lv.energy, lv.inverse_temperature[..., None, None, None]
    n = E.shape[-1]
    i, j, k = jnp.meshgrid(*([jnp.arange(n)] * 3), indexing="ij")
    # Levels come sorted, so sorting the indices sorts the energies.
    low, high = jnp.minimum(jnp.minimum(i, j), k), jnp.maximum(jnp.maximum(i, j), k)
    mid = i + j + k - low - high
    width = E[..., high] - E[..., low]
    apart = width > 0
    quotient = jnp.where(
        apart, (first[..., mid, high] - first[..., low, mid]) / jnp.where(apart, width, 1.0), 0.0
    )
    u, v = (E[..., mid] - E[..., low]) * beta, width * beta
    # Close levels: expand about the lowest; h_n(0, u, v) are complete homogeneous polynomials.
    power, homogeneous, coefficient, series = jnp.ones_like(u), jnp.ones_like(u), 0.5, 0.5 * jnp.ones_like(u)
    for order in range(1, _SERIES_TERMS):
        power = power * v
        homogeneous = homogeneous * u + power
        coefficient = -coefficient / (order + 2)
        series = series + coefficient * homogeneous
    close = (beta > 0) & (v < _SERIES_RANGE)
    return jnp.where(close, lv.weight[..., low] * beta**2 * series, quotient)


def response(h: Array, T: Array, operators: Array) -> Array:
    """Static responses chi_AB = -d<A>/d lambda_B for h -> h + lambda_B B.

    operators: real matrices, shape (operator, state, state), symmetrised here; returns (..., operator, operator).
    """
    symmetric = 0.5 * (operators + jnp.swapaxes(operators, -1, -2))
    changes = jnp.stack(
        [state_change(h, T, jnp.broadcast_to(B, h.shape)) for B in symmetric], axis=-3
    )
    return -jnp.einsum("aij,...bij->...ab", symmetric, changes)
