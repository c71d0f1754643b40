"""Tips of the unit-filling Mott lobe from the dressed functional against published quantum Monte Carlo."""

import jax.numpy as jnp
import numpy as np
import pytest

from gutz.ansatz import dressed, families
from gutz.model import Mixture

N_MAX = 5


def largest_U_over_t(dim, dressed_too):
    """Tip of the lobe: U/t at which the insulator loses its stability, maximised over mu/U."""
    mu = np.linspace(0.30, 0.46, 33)
    plan = families.Plan("full", dressed.NAMES[1], (1.0,), N_MAX, 1, True, 0)
    low, high = np.full(mu.size, 0.02), np.full(mu.size, 0.12)  # t/U
    low, high = low * 2 / dim, high * 2 / dim
    for _ in range(40):
        t = 0.5 * (low + high)
        mixture = Mixture(t=t, U=1.0, mu=mu, dim=dim, species=1)
        p = dressed.sites(mixture, mixture.mu, mixture.T, N_MAX, 1)
        out = families.onset(p, jnp.zeros((mu.size, 1, 2)), jnp.ones(mu.size), plan=plan)
        stable = np.asarray(out.dressed if dressed_too else out.product) > 0
        low, high = np.where(stable, t, low), np.where(stable, high, t)
    return 1.0 / low.max()


@pytest.mark.parametrize(
    ("dim", "published", "tolerance"),
    [
        # Capogrosso-Sansone, Prokof'ev, Svistunov, PRB 75, 134302 (2007), abstract: 29.34(2).
        (3, 29.34, 0.035),
        # Capogrosso-Sansone, Söyler, Prokof'ev, Svistunov, PRA 77, 015602 (2008): 16.74(1), from memory.
        (2, 16.74, 0.08),
    ],
)
def test_tip_of_the_lobe(dim, published, tolerance):
    """The tolerance is the known size of the error of second order, not that of the reference."""
    assert largest_U_over_t(dim, True) == pytest.approx(published, rel=tolerance)


def test_product_limit_is_the_exact_mean_field_tip():
    """U/(z t) = 3 + 2 sqrt 2: exact algebra; Fisher et al., PRB 40, 546 (1989)."""
    assert largest_U_over_t(3, False) == pytest.approx(6 * (3 + 2 * np.sqrt(2)), rel=1e-3)
