"""Site by site: against a second implementation, the uniform solver, exact limits; and local density against it."""

import sys
from pathlib import Path

import numpy as np
import pytest

import gutz
from gutz.errors import InputError
from gutz.inhomogeneous import neighbour_sum, solve_sites
from gutz.model import Mixture
from gutz.trap import profiles
from gutz.trap.cloud import solve_cloud
from gutz.trap.geometry import Trap
from gutz.trap.local import LocalGas
from gutz.trap.sites import check

sys.path.insert(0, str(Path(__file__).parents[1] / "bench"))
import plain_sites  # noqa: E402

PAIR = {"t": 0.03, "U": 1.0, "U12": 0.6, "mu": 0.0, "n_max": 2}


def bowl(shape, curvature):
    rows = [np.arange(n) - (n - 1) / 2 + 0.1 for n in shape]
    return sum(curvature * r**2 for r in np.meshgrid(*rows, indexing="ij"))


@pytest.mark.parametrize("shape", [(9,), (4, 5), (3, 3, 4)])
@pytest.mark.parametrize("T", [0.0, 0.05])
def test_agrees_with_the_plain_loop(shape, T):
    """Two implementations from the equations: grand potential to 1e-8, fillings to 1e-4 (flat directions)."""
    potential = np.stack([bowl(shape, 0.03), bowl(shape, 0.04)])
    mu = np.array([0.7, 0.5])
    found = solve_sites(Mixture(**PAIR), potential, mu, T)
    _, filling, total = plain_sites.solve(shape, potential, 1.0, 0.6, mu, 0.03, T, 2)
    assert found.converged
    assert found.grand_potential == pytest.approx(total, abs=1e-8 * np.prod(shape))
    np.testing.assert_allclose(found.filling.reshape(2, -1).T, filling, atol=1e-4)


@pytest.mark.parametrize("T", [0.0, 0.05])
def test_the_middle_of_a_large_uniform_lattice_is_the_uniform_gas(T):
    """Far from the open edges, more than ten healing lengths, the uniform solver must come out."""
    found = solve_sites(Mixture(**PAIR, dim=1), np.zeros((2, 60)), np.array([0.4, 0.3]), T, mirrored=(True,))
    uniform = gutz.solve(Mixture(**{**PAIR, "mu": (0.4, 0.3)}, T=T, dim=1))
    np.testing.assert_allclose(found.filling[:, 0], uniform.filling, atol=1e-4)
    np.testing.assert_allclose(found.order_parameter[:, 0], uniform.order_parameter, atol=1e-4)


def test_a_mirrored_half_is_half_of_the_whole():
    row = np.arange(12) - 5.5
    whole = np.stack([0.02 * row**2] * 2)
    mu = np.array([0.6, 0.5])
    both = solve_sites(Mixture(**PAIR), whole, mu, 0.0)
    half = solve_sites(Mixture(**PAIR), whole[:, 6:], mu, 0.0, mirrored=(True,))
    assert 2 * half.grand_potential == pytest.approx(both.grand_potential, abs=1e-8)
    # The last filled site is soft: an energy right to 1e-8 leaves its filling open by the root of that.
    np.testing.assert_allclose(half.filling, both.filling[:, 6:], atol=5e-4)


def test_neighbours_are_counted_once_each():
    phi = np.random.default_rng(3).random((2, 3, 4))
    t = np.array([[1.0, 0.5], [0.3, 0.2]])
    total = neighbour_sum(phi, t, (False, True))
    by_hand = np.zeros_like(phi)
    for a in range(2):
        for i in range(3):
            for j in range(4):
                near = [(i - 1, j, 0), (i + 1, j, 0), (i, j - 1, 1), (i, j + 1, 1)]
                for x, y, d in near:
                    if d == 1 and y == -1:
                        y = 0
                    if 0 <= x < 3 and 0 <= y < 4:
                        by_hand[a, i, j] += t[a, d] * phi[a, x, y]
    np.testing.assert_allclose(total, by_hand)


@pytest.fixture(scope="module")
def cloud():
    gas = LocalGas(Mixture(t=0.02, U=1.0, U12=0.6, mu=0.0, n_max=2))
    return solve_cloud(gas, Trap(np.full((2, 3), 0.01), np.zeros((2, 3))), np.array([700.0, 400.0]), T=0.05)


def test_local_density_is_good_where_the_trap_is_gentle(cloud):
    """Bound for this cloud of radius 10 sites: numbers to 3 %, fillings to 0.03 on average and 0.15 anywhere."""
    both = check(cloud)
    assert both.attrs["converged"]
    np.testing.assert_allclose(both.attrs["atoms"], both.attrs["atoms_local"], rtol=0.03)
    assert both.attrs["mean_difference"] < 0.03
    assert both.attrs["largest_difference"] < 0.15


def test_without_hopping_local_density_is_exact():
    """Sites that do not talk to each other are all there is: differences are those of the nodes, linear in between."""
    gas = LocalGas(Mixture(t=0.0, U=1.0, U12=0.6, mu=0.0, n_max=2))
    trap = Trap(np.full((2, 3), 0.02), np.zeros((2, 3)))
    both = check(solve_cloud(gas, trap, np.array([300.0, 200.0]), T=0.1))
    assert both.attrs["largest_difference"] < 5e-3


def test_a_tight_trap_shows_where_local_density_fails():
    gas = LocalGas(Mixture(t=0.08, U=1.0, U12=0.6, mu=0.0, n_max=2))
    both = check(solve_cloud(gas, Trap(np.full((2, 3), 0.1), np.zeros((2, 3))), np.array([40.0, 30.0]), T=0.05))
    assert both.attrs["largest_difference"] > 0.05
    assert any("local density: superfluid" in words for words in both.attrs["words"])


def test_values_at_sites_are_those_of_the_nodes(cloud):
    """At the potential of a node the interpolation returns the node."""
    pick = np.array([0, 10, 40])
    found = profiles.at_potential(cloud, cloud.nodes.potential[pick])
    np.testing.assert_allclose(found["filling"], cloud.average("filling")[pick], atol=1e-12)
    outside = profiles.at_potential(cloud, cloud.nodes.potential[-1:] * 2)
    assert outside["filling"].max() == 0.0


@pytest.mark.parametrize(
    ("potential", "words"),
    [
        (np.zeros((3, 4)), "it must be one array of 1 to 3 axes for each of 2 species"),
        (np.full((2, 4), np.nan), "every site needs a finite energy"),
        (np.zeros((2, 800, 800)), "at most 400,000 are solved one by one"),
    ],
)
def test_bad_potentials_are_refused(potential, words):
    with pytest.raises(InputError, match=words):
        solve_sites(Mixture(**PAIR), potential, np.array([0.5, 0.5]), 0.0)
