"""Thermal state of one lattice site, with derivatives that are right at degenerate levels.

In:  real symmetric matrices h, shape (..., state, state), and temperatures T ≥ 0, shape (...); k_B = 1.
Out: free energy -T log tr exp(-h/T), entropy, density matrix and static responses; T = 0 is the ground state.

Automatic differentiation through an eigensolver has poles at degenerate levels, so the derivatives are given
here as divided differences of exp (Daleckii and Krein), which have none. The free energy can be differentiated
three times and the state twice; a further derivative is refused, never wrong.
"""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jax.extend.core import Primitive
from jax.interpreters import ad, batching, mlir

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


def inverse(T: Array) -> Array:
    """1/T, and 0 at T = 0, where the ground-state branch takes over; safe to differentiate."""
    warm = T > 0
    return jnp.where(warm, 1.0 / jnp.where(warm, T, 1.0), 0.0)


def levels(h: Array, T: Array, *, one_by_one: bool = False) -> Levels:
    """Eigensystem, Boltzmann weights, free energy and entropy; for values only, not to be differentiated.

    one_by_one: solve the matrices of a batch in turn. A compiled program with several independent batched
    eigenproblems can lock up for ever, since each waits for the threads the others hold (jax 0.10 on CPU); programs
    made by differentiation contain many.
    """
    lv = block_levels(h[..., None, :, :], T, one_by_one=one_by_one)
    return lv._replace(energy=lv.energy[..., 0, :], vectors=lv.vectors[..., 0, :, :], weight=lv.weight[..., 0, :])


def _eigh(h: Array, one_by_one: bool) -> tuple[Array, Array]:
    if not one_by_one:
        energy, vectors = jnp.linalg.eigh(h, symmetrize_input=False)[:2]
        return energy, vectors
    flat = h.reshape((-1, *h.shape[-2:]))
    energy, vectors = jax.lax.map(lambda m: tuple(jnp.linalg.eigh(m, symmetrize_input=False)), flat)
    return energy.reshape(h.shape[:-1]), vectors.reshape(h.shape)


def block_levels(h: Array, T: Array, *, one_by_one: bool = False) -> Levels:
    """As `levels`, for block-diagonal matrices given as (..., block, state, state), sharing one T per site.

    energy, weight: (..., block, level); the weights of all blocks together sum to 1.
    """
    T = jnp.asarray(T)
    energy, vectors = _eigh(h, one_by_one)
    warm = T > 0
    beta = inverse(T)
    lowest = energy[..., 0].min(-1)
    excitation = energy - lowest[..., None, None]
    scale = jnp.maximum(jnp.abs(h).max((-1, -2, -3)), 1e-300)
    ground = excitation <= (DEGENERACY * scale)[..., None, None]
    boltzmann = jnp.where(warm[..., None, None], jnp.exp(-excitation * beta[..., None, None]), ground)
    total = boltzmann.sum((-1, -2))
    weight = boltzmann / total[..., None, None]
    free_energy = lowest - T * jnp.log(total)
    # beta <E - E0> + log Z has no cancellation: both terms are positive.
    entropy = jnp.where(warm, beta * (weight * excitation).sum((-1, -2)) + jnp.log(total), 0.0)
    return Levels(energy, vectors, weight, free_energy, entropy, beta)


def response_kernel(lv: Levels) -> Array:
    """K_mn = (P_n - P_m)/(E_m - E_n) ≥ 0, for equal energies P/T (0 at T = 0); shape (..., level, level).

    The change of the state under h -> h + A is -K∘A in the basis of levels, up to normalisation.
    """
    beta = lv.inverse_temperature
    beta = beta.reshape(beta.shape + (1,) * (lv.energy.ndim - beta.ndim + 1))
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
    beta = inverse(T)
    shift = jax.lax.stop_gradient(jnp.diagonal(h, axis1=-2, axis2=-1).min(-1))
    shifted = h - shift[..., None, None] * jnp.eye(h.shape[-1])
    return dh - shifted * (dT * beta)[..., None, None]


@jax.custom_jvp
def free_energy(h: Array, T: Array) -> Array:
    """F = -T log tr exp(-h/T), at T = 0 the lowest eigenvalue; shape (...)."""
    return levels(h, T, one_by_one=True).free_energy


@free_energy.defjvp
def _free_energy_jvp(primals: Any, tangents: Any) -> Any:
    (h, T), (dh, dT) = primals, tangents
    change = (state(h, T) * dh).sum((-1, -2)) - entropy(h, T) * dT
    return free_energy(h, T), change


@jax.custom_jvp
def entropy(h: Array, T: Array) -> Array:
    """S = -dF/dT in k_B, 0 at T = 0 (also for a degenerate ground state); shape (...)."""
    return levels(h, T, one_by_one=True).entropy


@entropy.defjvp
def _entropy_jvp(primals: Any, tangents: Any) -> Any:
    (h, T), (dh, dT) = primals, tangents
    beta = inverse(T)
    # tr(drho) = 0, so the mean of h may be taken out; this keeps the digits at low T.
    mean = jax.lax.stop_gradient((state(h, T) * h).sum((-1, -2)))
    centred = h - mean[..., None, None] * jnp.eye(h.shape[-1])
    change = state_change(h, T, _effective_change(h, T, dh, dT))
    return entropy(h, T), beta * (centred * change).sum((-1, -2))


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
    quotient = jnp.where(apart, (first[..., mid, high] - first[..., low, mid]) / jnp.where(apart, width, 1.0), 0.0)
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


def state(h: Array, T: Array) -> Array:
    """Density matrix exp(-h/T)/Z, at T = 0 the (equally mixed) ground state; shape (..., state, state)."""
    return _state_p.bind(*_same_rank(h, T))


def state_change(h: Array, T: Array, A: Array) -> Array:
    """First-order change of the state under h -> h + A at fixed T; linear in A, shape (..., state, state)."""
    return _first_p.bind(*_same_rank(h, T, A))


def _state(h: Array, T: Array) -> Array:
    lv = levels(h, T, one_by_one=True)
    return _from_levels(lv, _diagonal_matrix(lv.weight))


def _first(h: Array, T: Array, A: Array) -> Array:
    lv = levels(h, T, one_by_one=True)
    inner = -response_kernel(lv) * _to_levels(lv, A)
    return _from_levels(lv, inner - _diagonal_matrix(lv.weight * _trace(inner)[..., None]))


def _second(h: Array, T: Array, A: Array, B: Array) -> Array:
    """Second-order change of the state, bilinear and symmetric in A and B."""
    lv = levels(h, T, one_by_one=True)
    kernel = -response_kernel(lv)
    a, b = _to_levels(lv, A), _to_levels(lv, B)
    first_a, first_b = kernel * a, kernel * b
    third = _second_divided_difference(lv, kernel)
    second = jnp.einsum("...ijk,...ij,...jk->...ik", third, a, b) + jnp.einsum("...ijk,...ij,...jk->...ik", third, b, a)
    trace_a, trace_b, trace_ab = _trace(first_a), _trace(first_b), _trace(second)
    weights = _diagonal_matrix(lv.weight)
    inner = (
        second
        - first_a * trace_b[..., None, None]
        - first_b * trace_a[..., None, None]
        + weights * (2 * trace_a * trace_b - trace_ab)[..., None, None]
    )
    return _from_levels(lv, inner)


def _same_rank(h: Array, T: Array, *changes: Array) -> tuple[Array, ...]:
    """Pad batch shapes with leading ones to equal rank, and give the changes the full batch shape."""
    T = jnp.asarray(T)
    batch = jnp.broadcast_shapes(h.shape[:-2], T.shape, *(A.shape[:-2] for A in changes))

    def pad(x: Array, trailing: int) -> Array:
        return x.reshape((1,) * (len(batch) + trailing - x.ndim) + x.shape)

    full = [jnp.broadcast_to(A, batch + A.shape[-2:]) for A in changes]
    return (pad(h, 2), pad(T, 0), *full)


def _primitive(name: str, function: Callable[..., Array]) -> Any:
    """Make `function` an operation of its own, so that jax never differentiates its insides.

    A custom_jvp rule does not suffice: jax drops it from the linear part it transposes, and a reverse derivative
    of a reverse derivative would go through the eigensolver after all.
    """
    primitive = Primitive(name)
    primitive.def_impl(jax.jit(function))

    def shape(*args: Any) -> Any:
        out = jax.eval_shape(function, *(jax.ShapeDtypeStruct(a.shape, a.dtype) for a in args))
        return jax.core.ShapedArray(out.shape, out.dtype)

    def batch(args: Any, axes: Any) -> Any:
        lead = [
            jnp.expand_dims(x, 0) if axis is None else jnp.moveaxis(x, axis, 0)
            for x, axis in zip(args, axes, strict=True)
        ]
        return primitive.bind(*lead), 0

    primitive.def_abstract_eval(shape)
    mlir.register_lowering(primitive, mlir.lower_fun(function, multiple_results=False))
    batching.primitive_batchers[primitive] = batch
    return primitive


_state_p = _primitive("thermal_state", _state)
_first_p = _primitive("thermal_state_change", _first)
_second_p = _primitive("thermal_state_second_change", _second)


def _tangent(tangent: Any, primal: Array) -> Array:
    return jnp.zeros(primal.shape) if isinstance(tangent, ad.Zero) else tangent


def _state_jvp(primals: Any, tangents: Any) -> Any:
    h, T = primals
    dh, dT = map(_tangent, tangents, primals)
    return _state_p.bind(h, T), state_change(h, T, _effective_change(h, T, dh, dT))


def _first_jvp(primals: Any, tangents: Any) -> Any:
    (h, T, A), (dh, dT, dA) = primals, tangents
    value = _first_p.bind(h, T, A)
    change = jnp.zeros(value.shape) if isinstance(dA, ad.Zero) else _first_p.bind(h, T, dA)
    if not (isinstance(dh, ad.Zero) and isinstance(dT, ad.Zero)):
        dh, dT = _tangent(dh, h), _tangent(dT, T)
        beta = inverse(T)
        other = jnp.broadcast_to(_effective_change(h, T, dh, dT), value.shape)
        full = jnp.broadcast_to(A, value.shape)
        change = change + _second_p.bind(h, T, full, other) - value * (dT * beta)[..., None, None]
    return value, change


def _second_jvp(primals: Any, tangents: Any) -> Any:
    (h, T, A, B), (dh, dT, dA, dB) = primals, tangents
    if not (isinstance(dh, ad.Zero) and isinstance(dT, ad.Zero)):
        raise InputError(
            "a third derivative of the thermal state was asked for; the free energy can be differentiated three "
            "times, fillings and order parameters twice, and responses such as the compressibility once"
        )
    value = _second_p.bind(h, T, A, B)
    change = jnp.zeros(value.shape)
    if not isinstance(dA, ad.Zero):
        change = change + _second_p.bind(h, T, dA, B)
    if not isinstance(dB, ad.Zero):
        change = change + _second_p.bind(h, T, A, dB)
    return value, change


def _unbroadcast(x: Array, shape: tuple[int, ...]) -> Array:
    axes = tuple(i for i, (have, want) in enumerate(zip(x.shape, shape, strict=True)) if want == 1 != have)
    return x.sum(axes, keepdims=True) if axes else x


def _flip(x: Array) -> Array:
    return jnp.swapaxes(x, -1, -2)


def _first_transpose(cotangent: Any, h: Array, T: Array, A: Any) -> Any:
    """tr(C† S[A]) is symmetric in A and C."""
    if isinstance(cotangent, ad.Zero):
        return [None, None, ad.Zero(A.aval)]
    return [None, None, _unbroadcast(_first_p.bind(h, T, cotangent), A.aval.shape)]


def _second_transpose(cotangent: Any, h: Array, T: Array, A: Any, B: Any) -> Any:
    """tr(C† S[A, B]) is symmetric in A, B and C†."""
    first = ad.is_undefined_primal(A)
    linear, other = (A, B) if first else (B, A)
    if isinstance(cotangent, ad.Zero):
        out: Any = ad.Zero(linear.aval)
    else:
        out = _unbroadcast(_flip(_second_p.bind(h, T, other, _flip(cotangent))), linear.aval.shape)
    return [None, None, out, None] if first else [None, None, None, out]


ad.primitive_jvps[_state_p] = _state_jvp
ad.primitive_jvps[_first_p] = _first_jvp
ad.primitive_jvps[_second_p] = _second_jvp
ad.primitive_transposes[_first_p] = _first_transpose
ad.primitive_transposes[_second_p] = _second_transpose


def response(h: Array, T: Array, operators: Array) -> Array:
    """Static responses chi_AB = d<A>/dy_B for h -> h - y_B B, differentiable.

    operators: symmetric matrices, shape (..., operator, state, state); returns (..., operator, operator).
    """
    changes = state_change(h[..., None, :, :], jnp.asarray(T)[..., None], operators)
    return -jnp.einsum("...aij,...bij->...ab", operators, changes)


def response_from_levels(lv: Levels, in_levels: Array) -> Array:
    """As `response`, for operators given in the basis of levels, (..., operator, level, level); values only."""
    weighted = response_kernel(lv)[..., None, :, :] * in_levels
    chi = (weighted[..., :, None, :, :] * in_levels[..., None, :, :, :]).sum((-1, -2))
    mean = jnp.einsum("...aii,...i->...a", in_levels, lv.weight)
    return chi - lv.inverse_temperature[..., None, None] * mean[..., :, None] * mean[..., None, :]
