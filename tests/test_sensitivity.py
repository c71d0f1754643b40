"""First derivatives through the dressed state: thermodynamic identities and differences; what is refused."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

import gutz
from gutz.errors import InputError

POINT = {"t": 0.02, "U": 1.0, "U12": 0.5, "mu": 0.3, "T": 0.02, "n_max": 3}


def solve(**changes):
    return gutz.solve(gutz.Mixture(**(POINT | changes)), "dressed")


def test_first_derivatives_of_the_free_energy_are_the_averages():
    sol = solve()
    slopes = jax.grad(lambda mu, T: solve(mu=mu, T=T).free_energy, argnums=(0, 1))(0.3, 0.02)
    np.testing.assert_allclose(slopes, [-sol.filling.sum(), -sol.entropy], rtol=1e-6)


def test_response_to_mu_is_the_compressibility():
    found = jax.jacobian(lambda a, b: solve(t=0.035, mu=(a, b)).filling, argnums=(0, 1))(0.3, 0.3)
    np.testing.assert_allclose(np.stack(found, -1), solve(t=0.035).compressibility, rtol=1e-4)


def test_forward_and_reverse_agree_with_differences_for_a_batch():
    t = jnp.array([0.02, 0.035, 0.04])

    def order(t):
        return solve(t=t).order_parameter[:, 0]

    out, forward = jax.jvp(order, (t,), (jnp.ones(3),))
    reverse = jnp.diagonal(jax.jacrev(order)(t))
    step = 1e-4
    central = (order(t + step) - order(t - step)) / (2 * step)
    np.testing.assert_allclose(out, order(t), rtol=0)
    np.testing.assert_allclose(forward, reverse, rtol=1e-12)
    np.testing.assert_allclose(forward, central, rtol=1e-3, atol=1e-6)


def test_derivative_at_fixed_filling_follows_mu():
    def energy(U12):
        return solve(U12=U12, mu=None, filling=(0.5, 0.4), t=0.03, T=0.05).energy

    step = 1e-3
    slope = (energy(0.4 + step) - energy(0.4 - step)) / (2 * step)
    np.testing.assert_allclose(jax.grad(energy)(0.4), slope, rtol=1e-4)


def test_exponents_that_stay_infinite_have_slope_zero():
    slope = jax.grad(lambda t: solve(t=t, dim=2, T=0.2).exponent_pair)(0.01)
    assert slope == 0.0


@pytest.mark.parametrize(
    "wrong",
    [
        lambda f: jax.hessian(f)(0.3),
        lambda f: jax.grad(jax.grad(f))(0.3),
        lambda f: jax.jit(f)(0.3),
        lambda f: jax.vmap(f)(jnp.array([0.3, 0.4])),
    ],
)
def test_what_would_be_wrong_in_silence_is_refused(wrong):
    with pytest.raises(InputError, match="'dressed', which jax can differentiate once"):
        wrong(lambda mu: solve(mu=mu).free_energy)
