"""The thermal state of a site against 60-digit arithmetic (mpmath), exact limits and the laws it must obey."""

import itertools

import jax
import jax.numpy as jnp
import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gutz import precision  # noqa: F401  (64-bit numbers before any array is made)
from gutz.ansatz import gibbs
from gutz.errors import InputError

mpmath.mp.dps = 60
EPS = np.finfo(float).eps
GAPS = (1e-2, 1e-5, 1e-8, 1e-11, 1e-14, 0.0)


def symmetric(rng, n, scale=1.0):
    a = rng.normal(size=(n, n)) * scale
    return (a + a.T) / 2


def catalogue(n, rng):
    """Kinds of matrices that eigensolvers are tried on (the habit of the LAPACK test suite)."""
    q = np.linalg.qr(rng.normal(size=(n, n)))[0]

    def spectrum(values):
        m = q @ np.diag(values) @ q.T
        return (m + m.T) / 2

    ramp = np.arange(n, dtype=float)
    yield "zero", np.zeros((n, n))
    yield "identity", np.eye(n)
    yield "diagonal", np.diag(rng.normal(size=n))
    yield "clustered", spectrum(1.0 + 1e-12 * ramp)
    yield "degenerate blocks", np.kron(np.eye(n), [[1.0]]) * np.where(ramp < n / 2, 1.0, 2.0)
    yield "gap 1e-14", spectrum(np.where(ramp == 0, 1.0, 1.0 + 1e-14 * ramp))
    yield "huge", symmetric(rng, n) * 1e100
    yield "tiny", symmetric(rng, n) * 1e-100
    yield "rank one", np.outer(q[0], q[0])
    yield "random", symmetric(rng, n)
    yield "geometric", spectrum(2.0**-ramp)
    yield (
        "ladder",
        np.diag(ramp * (ramp - 1)) - np.diag(np.sqrt(ramp[1:]), 1) - np.diag(np.sqrt(ramp[1:]), -1),
    )


@pytest.mark.parametrize("n", [1, 2, 9, 16, 25])
def test_eigensystem_residuals_are_of_rounding_size(n):
    """LAPACK's measure: |AZ - ZL| and |Z'Z - 1| in units of rounding stay below 20."""
    rng = np.random.default_rng(n)
    matrices = [m for _ in range(20) for _, m in catalogue(n, rng)]
    lv = gibbs.levels(jnp.asarray(matrices), jnp.ones(len(matrices)))
    for a, e, z in zip(matrices, np.asarray(lv.energy), np.asarray(lv.vectors), strict=True):
        norm = max(np.abs(a).sum(0).max(), 1e-300)
        assert np.abs(a @ z - z * e).sum(0).max() / (norm * n * EPS) <= 20
        assert np.abs(z.T @ z - np.eye(n)).sum(0).max() / (n * EPS) <= 20


def exact_free_energy(h, T):
    e = mpmath.eigsy(mpmath.matrix(h.tolist()), eigvals_only=True)
    low = min(e)
    return low - T * mpmath.log(sum(mpmath.exp(-(x - low) / T) for x in e))


def test_free_energy_against_sixty_digits():
    rng = np.random.default_rng(2)
    for T in np.geomspace(1e-6, 1e3, 20):
        h = symmetric(rng, 4)
        exact = exact_free_energy(h, mpmath.mpf(float(T)))
        found = float(gibbs.free_energy(jnp.asarray(h), float(T)))
        assert abs(found - exact) <= 4 * EPS * max(abs(exact), np.abs(h).sum(0).max())


def near_degenerate(gap, rng):
    e = np.diag([0.0, gap, 1.0, 1.0 + gap, 2.0])
    if gap == 0:
        return e
    q = np.linalg.qr(rng.normal(size=(5, 5)))[0]
    h = q @ e @ q.T
    return (h + h.T) / 2


def F(p, h, a, b):
    return gibbs.free_energy(h + p[0] * a + p[1] * b, T0 + p[2])


T0 = 0.3
FIRST = jax.jit(jax.grad(F))
SECOND = {
    "forward": jax.jit(jax.jacfwd(jax.jacfwd(F))),
    "reverse": jax.jit(jax.jacrev(jax.jacrev(F))),
    "forward over reverse": jax.jit(jax.jacfwd(jax.jacrev(F))),
}
THIRD = {
    "forward": jax.jit(jax.jacfwd(jax.jacfwd(jax.jacfwd(F)))),
    "reverse": jax.jit(jax.jacrev(jax.jacrev(jax.jacrev(F)))),
    "forward over reverse": jax.jit(jax.jacfwd(jax.jacfwd(jax.jacrev(F)))),
}


@pytest.mark.parametrize("gap", GAPS)
def test_derivatives_at_degenerate_levels_against_sixty_digits(gap):
    """First to third derivative of F in two matrix directions and T, in every mode of differentiation."""
    rng = np.random.default_rng(3)
    h, a, b = near_degenerate(gap, rng), symmetric(rng, 5, 0.2), symmetric(rng, 5, 0.2)
    step = mpmath.mpf(10) ** -12

    def exact(index):
        total = mpmath.mpf(0)
        for signs in itertools.product((1, -1), repeat=len(index)):
            x = [mpmath.mpf(0)] * 3
            for i, s in zip(index, signs, strict=True):
                x[i] += s * step
            m = mpmath.matrix(h.tolist()) + x[0] * mpmath.matrix(a.tolist()) + x[1] * mpmath.matrix(b.tolist())
            e = mpmath.eigsy(m, eigvals_only=True)
            T = mpmath.mpf(T0) + x[2]
            sign = int(np.prod(signs))
            total -= sign * T * mpmath.log(sum(mpmath.exp(-v / T) for v in e))
        return float(total / (2 * step) ** len(index))

    zero = jnp.zeros(3)
    first = {i: exact((i,)) for i in range(3)}
    second = {i: exact(i) for i in [(0, 0), (0, 1), (1, 2), (2, 2)]}
    third = {i: exact(i) for i in [(0, 0, 0), (0, 0, 1), (0, 1, 2), (1, 2, 2), (2, 2, 2)]}
    computed = [("gradient", FIRST, first)]
    computed += [(mode, f, second) for mode, f in SECOND.items()]
    computed += [(mode, f, third) for mode, f in THIRD.items()]
    for mode, f, wanted in computed:
        got = f(zero, h, a, b)
        scale = max(abs(v) for v in wanted.values())
        for index, value in wanted.items():
            assert abs(float(got[index]) - value) <= 1e-12 * scale, (mode, index)


def shifted(p, h, a):
    return jnp.asarray(h) + p[0] * a, 0.2 + p[1]


AVERAGES = {
    "F": lambda p, h, a: gibbs.free_energy(*shifted(p, h, a)),
    "S": lambda p, h, a: gibbs.entropy(*shifted(p, h, a)),
    "A": lambda p, h, a: (gibbs.state(*shifted(p, h, a)) * a).sum(),
}
SLOPE = {k: jax.jit(jax.grad(f)) for k, f in AVERAGES.items()}
CURVATURE = {k: jax.jit(jax.hessian(f)) for k, f in AVERAGES.items()}
CUBIC = jax.jit(jax.jacfwd(jax.hessian(AVERAGES["F"])))


@pytest.mark.parametrize("gap", GAPS)
def test_entropy_and_averages_differentiate_consistently(gap):
    """S = -dF/dT and <A> = dF/d lambda must hold between the derivatives too (Maxwell relations)."""
    rng = np.random.default_rng(4)
    h, a = near_degenerate(gap, rng), symmetric(rng, 5, 0.3)

    zero = jnp.zeros(2)
    curvature = CURVATURE["F"](zero, h, a)
    np.testing.assert_allclose(-SLOPE["S"](zero, h, a), curvature[1], rtol=1e-11, atol=1e-11)
    np.testing.assert_allclose(SLOPE["A"](zero, h, a), curvature[0], rtol=1e-11, atol=1e-11)
    third = CUBIC(zero, h, a)
    np.testing.assert_allclose(CURVATURE["A"](zero, h, a), third[0], rtol=1e-10, atol=1e-10)
    np.testing.assert_allclose(-CURVATURE["S"](zero, h, a), third[1], rtol=1e-10, atol=1e-10)


def test_plain_autodiff_is_still_wrong_at_degenerate_levels():
    """Guards the reason for the rules of this module: the day this fails, they may go."""

    def plain(p):
        e = jnp.linalg.eigvalsh(jnp.diag(jnp.array([0.0, 0.0, 1.0])) + p * jnp.ones((3, 3)))
        return -0.3 * jnp.log(jnp.exp(-e / 0.3).sum())

    assert not np.isfinite(jax.grad(jax.grad(plain))(0.0))


def test_ground_state_is_the_limit_of_low_temperature():
    rng = np.random.default_rng(5)
    h, a = symmetric(rng, 6), symmetric(rng, 6)

    def at(T):
        f = lambda p: gibbs.free_energy(jnp.asarray(h) + p * a, T)  # noqa: E731
        return np.array([f(0.0), jax.grad(f)(0.0), jax.grad(jax.grad(f))(0.0)])

    np.testing.assert_allclose(at(0.0), at(1e-4), rtol=1e-12)
    assert gibbs.entropy(jnp.asarray(h), 0.0) == 0


def test_high_temperature_slope_is_the_logarithm_of_the_dimension():
    h = jnp.asarray(symmetric(np.random.default_rng(6), 7))
    assert abs(float(gibbs.entropy(h, 1e9)) - np.log(7)) < 1e-12


def test_degenerate_ground_state_is_mixed_equally_at_zero_temperature():
    rho = gibbs.state(jnp.diag(jnp.array([0.0, 0.0, 1.0])), 0.0)
    np.testing.assert_array_equal(rho, np.diag([0.5, 0.5, 0.0]))


def test_a_third_derivative_of_the_state_is_refused():
    h = jnp.eye(3)
    A = lambda p: gibbs.state(h * (1 + p), 0.5)[0, 0]  # noqa: E731
    with pytest.raises(InputError, match="third derivative of the thermal state"):
        jax.jacfwd(jax.jacfwd(jax.jacfwd(A)))(0.0)


FREE_ENERGY = jax.jit(gibbs.free_energy)
ENTROPY = jax.jit(jax.value_and_grad(gibbs.entropy, argnums=1))
F_SLOPE = jax.jit(jax.grad(gibbs.free_energy, argnums=1))

matrices = st.integers(0, 2**32 - 1).map(lambda s: symmetric(np.random.default_rng(s), 5))
temperatures = st.floats(1e-3, 1e2)


@settings(max_examples=500)
@given(matrices, temperatures, st.floats(-10, 10), st.floats(0.01, 100))
def test_shift_and_scale_of_energies(h, T, shift, scale):
    F = float(FREE_ENERGY(h, T))
    shifted = float(FREE_ENERGY(h + shift * np.eye(5), T))
    scaled = float(FREE_ENERGY(h * scale, T * scale))
    size = 1 + abs(F) + abs(shift) + T
    assert abs(shifted - F - shift) < 1e-13 * size
    assert abs(scaled - scale * F) < 1e-13 * scale * size


@settings(max_examples=500)
@given(matrices, temperatures, st.integers(0, 2**32 - 1))
def test_rotation_changes_nothing_and_heat_capacity_is_a_fluctuation(h, T, seed):
    q = np.linalg.qr(np.random.default_rng(seed).normal(size=(5, 5)))[0]
    rotated = q @ h @ q.T
    turned = FREE_ENERGY((rotated + rotated.T) / 2, T)
    assert abs(float(FREE_ENERGY(h, T) - turned)) < 1e-12 * (1 + T)
    S, dS = ENTROPY(h, T)
    e = np.linalg.eigvalsh(h)
    p = np.exp(-(e - e[0]) / T)
    p /= p.sum()
    variance = p @ (e - p @ e) ** 2
    assert float(S) >= 0
    assert abs(T * float(dS) - variance / T**2) < 1e-11 * (1 + variance / T**2)
    assert abs(float(F_SLOPE(h, T)) + float(S)) < 1e-12


def test_batched_mapped_and_single_calls_agree():
    rng = np.random.default_rng(7)
    h = jnp.asarray(np.stack([symmetric(rng, 4) for _ in range(6)]))
    T = jnp.linspace(0.0, 1.0, 6)
    a = jnp.asarray(symmetric(rng, 4))
    f = lambda m, t: gibbs.response(m, t, a[None])[..., 0, 0]  # noqa: E731
    single = jnp.stack([f(m, t) for m, t in zip(h, T, strict=True)])
    np.testing.assert_allclose(f(h, T), single, rtol=1e-13)
    np.testing.assert_allclose(jax.vmap(f)(h, T), single, rtol=1e-13)
    slope = jax.grad(lambda m: f(m, T).sum())(h)
    np.testing.assert_allclose(jax.vmap(jax.grad(f))(h, T), slope, rtol=1e-12, atol=1e-13)
