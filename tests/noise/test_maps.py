"""The door `gutz.noise_map`: laws, limits, features, refusals; published far-field facts."""

import numpy as np
import pytest

import gutz
from gutz.errors import InputError, ResourceError
from gutz.noise import Validity, cloud_map, features, maps, order_of
from gutz.noise.grid import Grid
from gutz.noise.uniform import Background, Line, UniformMap

N_MAX = 6


def solved(ansatz="product", **settings):
    settings = {"t": 1.0, "species": 1, "dim": 1, "n_max": N_MAX, "T": 0.0} | settings
    return gutz.solve(gutz.Mixture(**settings), ansatz=ansatz)


def two(ansatz="dressed", **settings):
    return gutz.solve(gutz.Mixture(**({"U": 1.0, "dim": 3, "n_max": 3} | settings)), ansatz=ansatz)


def named(listed):
    return {(f.name, f.species): f for f in listed}


@pytest.fixture(scope="module")
def phases():
    """Counterflow, Mott-like normal, and superfluid points of one mixture, cubic lattice."""
    return two(t=np.array([0.01, 0.01, 0.045]), U12=0.5, mu=0.25, T=np.array([1e-4, 5e-3, 1e-3]))


def test_dataset_of_a_chain_and_its_laws():
    ds = gutz.noise_map(solved(U=np.array([5.0, 50.0]), filling=1.0), 12)
    assert ds["noise"].dims == ("axis_0", "species", "species_", "k", "k_")
    C, n = ds["noise"].values[:, 0, 0], ds["momentum_distribution"].values[:, 0]
    assert n.sum(-1) == pytest.approx(12.0)
    # Fixed atom number: with shot noise every row sums to zero.
    assert (C.sum(-1) + n) == pytest.approx(0.0, abs=1e-9)
    assert C == pytest.approx(np.swapaxes(C, -1, -2), abs=1e-12)
    k = np.arange(12)
    assert ds["difference_line"].values[:, 0, 0] == pytest.approx(C[:, k, k], abs=1e-12)
    assert ds["sum_line"].values[:, 0, 0] == pytest.approx(C[:, k, -k], abs=1e-12)
    for Q in (0, 1, 5):
        assert ds["difference_correlation"].values[:, 0, 0, Q] == pytest.approx(C[:, k, (k + Q) % 12].mean(-1))
        assert ds["sum_correlation"].values[:, 0, 0, Q] == pytest.approx(C[:, k, (Q - k) % 12].mean(-1))
    for name in ds.data_vars:
        assert {"units", "long_name"} <= set(ds[name].attrs)
        assert ds[name].dtype in (np.float64, np.int8, np.int32)


def test_mott_insulator_bunches_and_nothing_else():
    """Peaks of contrast one at k' = k + G, none elsewhere: Foelling et al., Nature 434, 481 (2005) (from memory)."""
    solution = solved("dressed", U=4000.0, filling=1.0, dim=3)
    (made, validity), *_ = maps(solution, 8)
    assert validity is Validity.GOOD
    found = named(features(made, order_of(solution, (0,) * len(solution.shape))))
    assert set(found) == {("bunching", (1, 1))}
    assert found["bunching", (1, 1)].normalised == pytest.approx(1.0, abs=0.01)


def test_unit_filled_insulator_is_the_exact_product_value():
    """C(k, k') = 2 δ - 2/Ns, shot noise included (exact for t = 0)."""
    (made, _), *_ = maps(solved(U=1e6, filling=1.0), 8)
    assert made.with_shot_noise(0, 0) == pytest.approx(2 * np.eye(8) - 2 / 8, abs=1e-4)


def test_features_tell_counterflow_from_superfluid(phases):
    listed = [features(found[0], order_of(phases, (n,))) for n, found in enumerate(maps(phases, 6))]
    counterflow, insulator, superfluid = map(named, listed)
    peak = counterflow["counterflow peak", (1, 2)]
    assert peak.order
    assert peak.where == "k' = k"
    # Half filling each: contrast one relative to n_1 n_2 for every counterflow state deep in the insulator.
    assert peak.normalised == pytest.approx(1.0, abs=0.1)
    assert ("pairing between species", (1, 2)) not in counterflow
    assert ("counterflow peak", (1, 2)) not in insulator
    assert superfluid["condensate peak of n(k)", (1, 1)].height > 10
    assert superfluid["negative lines", (1, 1)].height < 0
    assert superfluid["pairing of one species", (1, 1)].height > 0
    between = superfluid["pairing between species", (1, 2)]
    assert not between.order
    assert "vanishing condensate" in between.meaning


def test_order_peaks_are_lower_in_fewer_dimensions():
    """No long-range order at T > 0 in 1D (Mermin, Wagner, PRL 17, 1133 (1966)): the peak loses height to its width."""
    solution = two(t=0.02, U12=0.5, mu=0.25, T=np.array([1e-4, 2e-3]), dim=1)
    cold, warm = (named(features(found[0], order_of(solution, (n,)))) for n, found in enumerate(maps(solution, 64)))
    peak = cold["counterflow peak", (1, 2)]
    assert peak.normalised < 0.9
    assert peak.width > 4 * 1.3916 / 64
    absent = ("counterflow peak", (1, 2)) not in warm
    assert absent or warm["counterflow peak", (1, 2)].height < peak.height
    line = gutz.noise_map(solution, 64)["difference_correlation"].values[0, 0, 1]
    assert line[0] > line[1] > line[2] > line[8]


def test_paired_state_has_its_peak_at_opposite_momenta():
    U12, t = -0.5, 0.01
    solution = two(t=t, U12=U12, mu=0.5 * U12 - 3 * t * t / abs(U12) * np.array([1.0, 4.0]), T=1e-4)
    paired = np.flatnonzero(np.asarray(solution.phase) == gutz.Phase.PAIRED)
    assert paired.size
    at = int(paired[0])
    made, _ = maps(solution, 6)[at]
    found = named(features(made, order_of(solution, (at,))))
    assert found["pairing between species", (1, 2)].order
    assert ("counterflow peak", (1, 2)) not in found
    n = float(solution.filling[at, 0])
    # Hard-core pairs: |m|²/(n1 n2) = (1 - n)/n.
    assert found["pairing between species", (1, 2)].normalised == pytest.approx((1 - n) / n, rel=0.15)


def test_peak_modulation_is_of_first_order_in_the_hopping(phases):
    """C12(k, k) ∝ f(k)², f = 1 + 2 f1 Σ cos k, f1 = 2t/U12 + 2t/U (strong-coupling perturbation theory)."""
    t, U12 = 5e-4, 0.5
    solution = two(t=t, U12=U12, mu=0.25, T=1e-7)
    (made, _), *_ = maps(solution, 6)
    k = made.grid.momenta()
    wave = np.cos(k).sum(-1)
    line = made.difference_line(0, 1, np.zeros(3, int))
    slope = np.polyfit(wave, line / line.mean(), 1)[0]
    assert slope == pytest.approx(4 * (2 * t / U12 + 2 * t), rel=0.05)


def test_cloud_of_one_phase_equals_the_uniform_product_map():
    even = solved(U=np.full(6, 20.0), mu=8.0)
    cloud = cloud_map(even)
    from gutz.fluctuations import local_sites
    from gutz.noise import ProductMap, local_moments

    site = local_sites(even)[0]
    uniform = ProductMap(local_moments(site.rho[0], site.space), (6,))
    assert cloud.full(0, 0) == pytest.approx(uniform.full(0, 0), abs=1e-10)
    trap = cloud_map(solved(U=30.0, mu=10.0 - 2.0 * (np.arange(8) - 3.5) ** 2))
    assert trap.with_shot_noise(0, 0).sum(1) == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("shape", [(6,), (4, 3)])
def test_averages_over_k_without_the_whole_map(shape):
    rng = np.random.default_rng(2)
    grid = Grid(shape)
    nowhere = np.zeros(grid.dim, int)
    offset = np.arange(1, grid.dim + 1)

    def weights():
        w = rng.random((2, 2, grid.sites))
        return w + np.swapaxes(w, 0, 1)

    lines = [Line(1, nowhere, weights()), Line(-1, nowhere, weights()), Line(1, offset, weights())]
    made = UniformMap(
        grid, rng.random((2, grid.sites)), lines, Background(rng.random((2, grid.sites)), rng.random((2, 2, 2, 2)))
    )
    k = grid.indices()
    for a, b, sign in ((0, 0, 1), (0, 1, 1), (1, 0, -1), (1, 1, -1)):
        whole = made.full(a, b)
        direct = [whole[np.arange(grid.sites), grid.flat(sign * k + Q)].mean() for Q in k]
        assert made.channel(a, b, sign)[1] == pytest.approx(direct, abs=1e-12)


def test_large_lattices_come_without_a_whole_map():
    ds = gutz.noise_map(solved(U=20.0, filling=1.0, dim=3, T=1.0), (48, 40, 30), planes=[(0.0, 0.0, 0.0)])
    assert ds["momentum_distribution"].shape == (1, 48, 40, 30)
    assert float(ds["momentum_distribution"].sum()) == pytest.approx(48 * 40 * 30, rel=1e-6)
    assert "noise" not in ds
    assert ds["planes"].sizes["plane"] == 1


@pytest.mark.parametrize(
    ("settings", "error", "words"),
    [
        ({"size": 1}, InputError, "at least 2"),
        ({"size": (4, 4)}, InputError, "has 2 entries; it needs 1"),
        ({"size": 2.5}, InputError, "whole number"),
        ({"size": 10**9}, ResourceError, "1,000,000,000 sites"),
        ({"size": 20_000, "full": True}, ResourceError, "entries"),
        ({"size": 12, "planes": [(1.0,)]}, InputError, "multiple of 2 pi / L"),
        ({"size": 12, "planes": [(0.0, 0.0)]}, InputError, "has 2 components"),
    ],
)
def test_bad_input_is_one_sentence(settings, error, words):
    solution = solved(U=50.0, filling=1.0)
    with pytest.raises(error, match=words):
        gutz.noise_map(solution, **settings)


def test_a_wrong_species_is_one_sentence():
    (made, _), *_ = maps(solved(U=50.0, filling=1.0), 6)
    for call in (made.full, lambda a, b: made.plane(a, b, np.zeros(1, int)), lambda a, b: made.sum_line(a, b, 0)):
        with pytest.raises(InputError, match="species is 2"):
            call(0, 2)


def test_collapsed_points_stay_empty():
    mixture = gutz.Mixture(t=0.01, U=1.0, U12=np.array([-2.0, 0.5]), mu=0.25, dim=1, n_max=3)
    ds = gutz.noise_map(gutz.solve(mixture), 6)
    assert int(ds["validity"][0]) == -1
    assert np.isnan(ds["noise"][0]).all()
    assert np.isfinite(ds["noise"][1]).all()
