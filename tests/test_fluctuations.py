"""Fluctuations against closed forms (ideal gas, Bogoliubov, Mott quasiparticles), and by two independent routes."""

import dataclasses
from itertools import product as combinations

import numpy as np
import pytest

import gutz
from gutz.fluctuations import GaussianLayer, LocalSites, local_sites, one_loop, spectrum
from gutz.fluctuations.frequencies import nodes

N_MAX = 6


def one_species(ansatz="product", **settings) -> list[LocalSites]:
    settings = {"t": 1.0, "species": 1, "dim": 3, "n_max": N_MAX} | settings
    return local_sites(gutz.solve(gutz.Mixture(**settings), ansatz=ansatz))


def grid(*shape: int) -> np.ndarray:
    return np.array(list(combinations(*(2 * np.pi * np.arange(length) / length for length in shape))))


def band(k: np.ndarray, t: float = 1.0) -> np.ndarray:
    return -2.0 * t * np.cos(k).sum(-1)


@pytest.mark.parametrize("T", [0.0, 1e-4, 0.03, 2.0])
@pytest.mark.parametrize("energy", [1e-3, 0.2, 30.0])
def test_frequency_sums_against_closed_forms(T, energy):
    """Σ_n T/(ω_n² + E²) = coth(E/2T)/2E; textbook (common practice, no source)."""
    found = nodes(np.array([T]), np.array([1e-3]), np.array([30.0]))
    static = found.static[0] / energy**2
    total = static + (found.weight[0] / (found.omega[0] ** 2 + energy**2)).sum()
    exact = 0.5 / energy / (np.tanh(0.5 * energy / T) if T > 0 else 1.0)
    assert total == pytest.approx(exact, rel=2e-9)


@pytest.mark.parametrize("T", [3.0, 8.0])
def test_ideal_gas_is_exact(T):
    """Without interaction the layer is exact: Bose's distribution, and the ideal gas's free energy and entropy."""
    mu, k = -14.0, grid(4, 4, 4)
    (sites,) = one_species(U=0.0, mu=mu, T=T, n_max=20)
    layer = GaussianLayer(sites)
    energy = band(k) - mu
    bose = 1.0 / np.expm1(energy / T)
    assert layer.correlations(k).normal[:, 0, 0] == pytest.approx(bose, rel=1e-6)
    on_site = T * np.log(-np.expm1(mu / T))
    F, S = layer.one_loop(k)
    assert F == pytest.approx((T * np.log(-np.expm1(-energy / T))).mean() - on_site, rel=1e-6)

    def entropy(e):
        return e / T / np.expm1(e / T) - np.log(-np.expm1(-e / T))

    assert S == pytest.approx(entropy(energy).mean() - entropy(-mu), rel=1e-5)


@pytest.mark.parametrize(("ansatz", "T"), [("product", 0.0), ("product", 2.0), ("dressed", 0.0), ("dressed", 2.0)])
def test_a_superfluid_is_gapless_and_an_insulator_is_not(ansatz, T):
    superfluid, insulator = one_species(ansatz, U=np.array([12.0, 60.0]), mu=np.array([5.0, 25.0]), T=T)
    zero = np.zeros((1, 3))
    layer = GaussianLayer(superfluid)
    assert abs(layer.restoring_force(layer.hopping_energy(zero))[0]) < 1e-8
    assert not layer.correlations(zero).finite[0]
    assert spectrum(superfluid, zero).energy[0, 0] < 1e-5
    # Sound: the lowest mode is linear in k.
    k = np.array([[0.02, 0.0, 0.0], [0.04, 0.0, 0.0]])
    low = spectrum(superfluid, k).energy[:, 0]
    assert low[1] / low[0] == pytest.approx(2.0, rel=2e-3)
    assert spectrum(insulator, zero).energy[0, 0] > 1.0
    assert GaussianLayer(insulator).correlations(zero).finite[0]


def test_mott_quasiparticles_of_the_product_state():
    """Particle and hole energies for n = 1: van Oosten, van der Straten, Stoof, PRA 63, 053601 (2001) (from memory)."""
    U, mu = 50.0, 20.0
    (sites,) = one_species(U=U, mu=mu, T=0.0)
    k = grid(3, 4, 2)
    e = band(k)
    root = np.sqrt(e**2 + 6.0 * U * e + U**2)
    particle, hole = -mu + 0.5 * U + 0.5 * (e + root), mu - 0.5 * U + 0.5 * (-e + root)
    found = spectrum(sites, k).energy[:, :2]
    assert found == pytest.approx(np.sort(np.stack([particle, hole], -1), -1), rel=1e-9)
    # The momentum distribution of the same theory: weight of the hole branch.
    exact = 0.5 * ((e + 3.0 * U) / root - 1.0)
    assert GaussianLayer(sites).correlations(k).normal[:, 0, 0] == pytest.approx(exact, rel=1e-8)


@pytest.mark.parametrize("ansatz", ["product", "dressed"])
def test_first_order_momentum_distribution_of_the_insulator(ansatz):
    """n(k) = n + n(n+1)(4t/U) Σ cos k to first order in t/U (strong-coupling perturbation theory, common practice)."""
    U, k = 4e4, grid(4, 4, 4)
    (sites,) = one_species(ansatz, U=U, mu=0.45 * U, T=0.0)
    slope = (GaussianLayer(sites).correlations(k).normal[:, 0, 0] - 1.0) * U / 8.0
    assert slope == pytest.approx(np.cos(k).sum(-1), abs=0.004)


def test_bogoliubov_limit():
    """ω = sqrt(e(e + 2gn)), n(k) = (e + gn)/2ω - ½, F = -gn/2ω (Bogoliubov, J. Phys. USSR 11, 23 (1947)).

    The departure must shrink with U, and so it does: it is of first order in U/zt.
    """
    k = grid(6, 6, 6)[1:]
    e = band(k) + 6.0
    departures = []
    for U in (0.4, 0.1):
        (sites,) = one_species(U=U, filling=1.0, T=0.0, n_max=14)
        found = GaussianLayer(sites).correlations(k)
        omega = np.sqrt(e * (e + 2.0 * U))
        assert spectrum(sites, k[:3]).energy[:, 0] == pytest.approx(omega[:3], rel=0.05 * U)
        normal, anomalous = 0.5 * (e + U) / omega - 0.5, -0.5 * U / omega
        departures.append(np.abs(found.anomalous[:, 0, 0] / anomalous - 1.0).max())
        assert found.normal[:, 0, 0] == pytest.approx(normal, rel=0.15)
    assert departures[1] < 0.05
    assert departures[1] < 0.6 * departures[0]


@pytest.mark.parametrize(("U", "T"), [(10.0, 0.0), (50.0, 0.0), (10.0, 0.4), (50.0, 1.5)])
def test_frequency_sum_against_sum_over_modes(U, T):
    """Averages from Matsubara sums equal those from eigenmodes; two independent routes in one theory."""
    (sites,) = one_species("dressed", U=U, filling=1.0, T=T)
    k = grid(3, 4, 5)[1:]
    modes = spectrum(sites, k)
    f = 1.0 / np.expm1(modes.energy / T) if T > 0 else np.zeros_like(modes.energy)
    total = (modes.removed[:, 0] * (1.0 + f) + modes.added[:, 0] * f).sum(-1)
    # At T > 0 levels scatter elastically in the ordered state; that small part has no mode.
    assert GaussianLayer(sites).correlations(k).normal[:, 0, 0] == pytest.approx(total, rel=1e-6 if T == 0 else 2e-3)


def test_phonon_entropy_is_that_of_the_modes():
    T, k = 1.0, grid(5, 5, 5)[1:]
    (sites,) = one_species(U=10.0, filling=1.0, T=T)

    def entropy(state: LocalSites) -> float:
        x = spectrum(state, k).energy / T
        return (x / np.expm1(x) - np.log(-np.expm1(-x))).sum(-1).mean()

    isolated = dataclasses.replace(sites, hopping=np.zeros_like(sites.hopping))
    # Elastic scattering between equal levels, which has no mode, makes the rest of the difference.
    assert GaussianLayer(sites).one_loop(k)[1] == pytest.approx(entropy(sites) - entropy(isolated), rel=5e-3)


def test_phonon_entropy_follows_debye():
    """S = (2 π²/45) (T/c)³ per site at low T in 3D (Debye), with c the slope of the lowest mode."""
    T = np.array([0.25, 0.5])
    solution = gutz.solve(gutz.Mixture(t=1.0, U=10.0, filling=1.0, T=T, dim=3, species=1, n_max=N_MAX))
    found = one_loop(solution, 48)
    (sites, _) = local_sites(solution)
    c = spectrum(sites, np.array([[0.01, 0.0, 0.0]])).energy[0, 0] / 0.01
    assert found.entropy == pytest.approx(2 * np.pi**2 / 45 * (T / c) ** 3, rel=0.03)
    assert not found.exceeds.any()
    # More than a product of sites has: its own entropy is exponentially small here.
    assert np.all(found.entropy > 10 * np.asarray(solution.entropy))


def test_long_waves_in_one_dimension_are_reported():
    solution = gutz.solve(gutz.Mixture(t=1.0, U=5.0, filling=1.0, T=1.0, dim=1, species=1, n_max=N_MAX))
    assert bool(one_loop(solution, 400).exceeds)
    with pytest.raises(gutz.errors.InputError, match="size is 1"):
        one_loop(solution, 1)


def test_interpolation_agrees_with_direct_evaluation():
    k = grid(40, 40, 40)
    some = np.random.default_rng(1).choice(len(k), 40, replace=False)
    for T in (0.0, 1.0):
        for sites in one_species(U=np.array([10.0, 45.0]), filling=1.0, T=T):
            layer = GaussianLayer(sites)
            whole = layer.correlations(k)
            few = layer.correlations(k[some])
            assert whole.normal[some] == pytest.approx(few.normal, rel=1e-7)
            assert whole.anomalous[some] == pytest.approx(few.anomalous, rel=1e-7, abs=1e-9)


def test_uncoupled_directions_do_not_matter():
    """A cube whose atoms hop along x only is a bundle of chains."""
    (tube,) = one_species(t=((1.0, 0.0, 0.0),), U=5.0, filling=1.0, T=0.0)
    (chain,) = one_species(U=5.0, filling=1.0, T=0.0, dim=1)
    k = grid(8)
    across = np.concatenate([k, np.full((8, 2), 0.7)], 1)
    normal = GaussianLayer(tube).correlations(across).normal
    assert normal[1:] == pytest.approx(GaussianLayer(chain).correlations(k).normal[1:], rel=1e-6)


def test_a_vanishing_superlattice_changes_nothing():
    k = grid(4, 4)
    uniform, split = (one_species(U=30.0, mu=11.0, T=0.0, dim=2, offset=offset)[0] for offset in (0.0, 1e-4))
    assert split.sublattices == 2
    a, b = (GaussianLayer(s) for s in (uniform, split))
    assert b.correlations(k).normal == pytest.approx(a.correlations(k).normal, rel=1e-4)
    assert b.one_loop(k)[0] == pytest.approx(a.one_loop(k)[0], rel=1e-4)
    assert np.abs(b.correlations(k).staggered).max() < 1e-4


def test_a_superlattice_shows_in_the_staggered_part():
    (sites,) = one_species(U=30.0, mu=11.0, T=0.0, dim=2, offset=20.0)
    found = GaussianLayer(sites).correlations(grid(4, 4))
    density = np.diagonal(sites.rho, axis1=-2, axis2=-1) @ sites.space.number[0]
    # Without hopping <b†_k b_k+Q> is half the density difference; hopping reduces it a little.
    assert found.staggered[:, 0, 0] == pytest.approx(0.5 * (density[0] - density[1]), rel=0.2)


def test_tracing_is_refused():
    import jax

    def through(U):
        sol = gutz.solve(gutz.Mixture(t=1.0, U=U, mu=5.0, T=0.0, dim=3, species=1, n_max=N_MAX))
        return local_sites(sol)[0].energy.sum()

    with pytest.raises(gutz.errors.InputError, match="traced"):
        jax.grad(through)(12.0)
