"""Phase boundaries of single-site mean-field theory against its published closed forms.

Lobes: Fisher, Weichman, Grinstein, Fisher, PRB 40, 546 (1989); Sheshadri et al., Europhys. Lett. 22, 257 (1993).
"""

import numpy as np
import pytest

import gutz


def bisect(ordered, low, high, steps=40):
    """Where `ordered(x)` (array of bool) turns from False at low to True at high, for many points at once."""
    low, high = np.array(low, float), np.array(high, float)
    for _ in range(steps):
        middle = 0.5 * (low + high)
        yes = ordered(middle)
        low, high = np.where(yes, low, middle), np.where(yes, middle, high)
    return 0.5 * (low + high)


def has_order(**kind):
    return np.abs(gutz.solve(gutz.Mixture(**kind)).order_parameter[:, 0]) > 1e-6


def lobe(mu, n):
    return (n - mu) * (mu - n + 1) / (1 + mu)


@pytest.mark.parametrize("dim", [1, 2, 3])
def test_mott_lobes(dim):
    """z t / U = (n - mu)(mu - n + 1)/(1 + mu) for the first three lobes, to 1e-8."""
    mu = np.concatenate([n - 1 + np.linspace(0.04, 0.96, 12) for n in (1, 2, 3)])
    n = np.repeat([1, 2, 3], 12)
    edge = bisect(
        lambda zt: has_order(t=zt / (2 * dim), U=1.0, mu=mu, species=1, dim=dim, n_max=6),
        np.zeros(36),
        np.full(36, 0.3),
    )
    np.testing.assert_allclose(edge, lobe(mu, n), atol=1e-8)


def test_tips_of_the_lobes():
    """(U/zt)_c = 2n + 1 + 2 sqrt(n(n+1)) at mu/U = sqrt(n(n+1)) - 1; for n = 1 z t/U = 0.17157."""
    n = np.array([1, 2, 3])
    mu = np.sqrt(n * (n + 1)) - 1
    edge = bisect(lambda zt: has_order(t=zt / 6, U=1.0, mu=mu, species=1, dim=3, n_max=6), np.zeros(3), np.full(3, 0.3))
    np.testing.assert_allclose(1 / edge, 2 * n + 1 + 2 * np.sqrt(n * (n + 1)), rtol=1e-7)
    assert abs(edge[0] - 0.17157) < 5e-6


def test_hard_core_critical_temperature():
    """T_c = z t (1 - 2n)/ln[(1 - n)/n] (mean field of the spin-1/2 XY model), z t/2 at half filling."""
    n = np.array([0.1, 0.25, 0.4, 0.4999999])
    expected = 6 * (1 - 2 * n) / np.log((1 - n) / n)
    mu = expected * np.log(n / (1 - n))  # free spins at T_c
    edge = bisect(
        lambda cold: has_order(t=1.0, U=1.0, mu=mu, T=1 / cold, species=1, dim=3, n_max=1),
        np.full(4, 0.1),
        np.full(4, 2.0),
    )
    np.testing.assert_allclose(1 / edge, expected, rtol=1e-8)
    assert abs(expected[-1] - 3.0) < 1e-6


def test_ideal_gas_condenses_at_the_bottom_of_the_band():
    """U = 0: mean field condenses where mu reaches -z t, at any temperature; <n> there is 1/(e^{zt/T} - 1)."""
    T = np.array([0.1, 0.3, 0.5])
    edge = bisect(
        lambda zt: has_order(t=zt / 6, U=0.0, mu=-1.0, T=T, species=1, dim=3, n_max=30),
        np.full(3, 0.5),
        np.full(3, 1.5),
    )
    np.testing.assert_allclose(edge, 1.0, atol=1e-5)
    normal = gutz.solve(gutz.Mixture(t=0.9 / 6, U=0.0, mu=-1.0, T=T, species=1, dim=3, n_max=30))
    np.testing.assert_allclose(normal.filling[:, 0], 1 / np.expm1(1 / T), rtol=1e-6)


def test_critical_temperatures_at_unit_filling():
    """T_c/t = 8.43, 8.07, 7.15 at U/t = 5, 10, 20 on the simple cubic lattice (own computation, three digits)."""
    U = np.array([5.0, 10.0, 20.0])

    def ordered(cold):
        mix = gutz.Mixture(t=1.0, U=U, filling=1.0, T=1 / cold, species=1, dim=3, n_max=20)
        return np.abs(gutz.solve(mix).order_parameter[:, 0]) > 1e-4

    edge = bisect(ordered, np.full(3, 1 / 12.0), np.full(3, 1 / 5.0), steps=14)
    np.testing.assert_allclose(1 / edge, [8.43, 8.07, 7.15], atol=0.01)


def test_hard_core_mixture_leaves_the_superfluid_at_four_zt():
    """Half filling of each species: U12 = 4 z t, where the insulator is the equal superposition (analytic)."""
    U12 = np.array([23.99, 24.01])
    sol = gutz.solve(gutz.Mixture(t=1.0, U=1.0, U12=U12, mu=U12 / 2, dim=3, n_max=1))
    assert sol.order_parameter[0].min() > 1e-3
    assert np.abs(sol.order_parameter[1]).max() < 1e-6


def test_commensurate_two_species_atomic_limit_has_spin_entropy():
    """Total filling one, deep in the insulator: ln 2 per site from the free choice of species (exact)."""
    sol = gutz.solve(gutz.Mixture(t=0.001, U=1.0, U12=0.5, mu=0.25, T=0.01, dim=3, n_max=3))
    assert abs(float(sol.entropy) - np.log(2)) < 1e-6
