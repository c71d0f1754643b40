"""Clouds against closed forms: atomic limits, Thomas-Fermi, independent species; sum rules; words for bad input."""

import mpmath
import numpy as np
import pytest

from gutz.errors import InputError
from gutz.model import Mixture
from gutz.phases import Phase
from gutz.status import Status
from gutz.trap import profiles
from gutz.trap.cloud import solve_cloud
from gutz.trap.geometry import Trap, line_nodes, plane_nodes
from gutz.trap.local import LocalGas


def round_trap(curvature=0.01, species=1, axes=3):
    return Trap(np.full((species, axes), curvature), np.zeros((species, axes)))


def hard_core(t=0.0):
    return LocalGas(Mixture(t=t, U=0.0, mu=0.0, species=1, n_max=1))


def fermi_totals(mu, T, curvature):
    """N and S of sites that hold at most one atom: filling 1/(1 + exp((V - mu)/T)), integrated over space."""
    volume = mpmath.sqrt(mpmath.pi * T / curvature) ** 3
    z = -mpmath.exp(mu / T)
    half3, half5 = mpmath.polylog(1.5, z).real, mpmath.polylog(2.5, z).real
    return float(-volume * half3), float(volume * (-2.5 * half5 + mu / T * half3))


@pytest.mark.parametrize(("mu", "T"), [(1.0, 0.2), (1.0, 0.03), (-0.5, 0.4)])
def test_hard_cores_without_hopping_are_polylogarithms(mu, T):
    """N = -(pi T/c)^(3/2) Li_3/2(-e^(mu/T)), S from its grand potential; exact, evaluated by mpmath."""
    N, S = fermi_totals(mu, T, 0.002)
    gas, trap = hard_core(), round_trap(0.002)
    given_T = solve_cloud(gas, trap, np.array([N]), T=T)
    assert given_T.mu[0] == pytest.approx(mu, abs=3e-3 * max(T, abs(mu)))
    assert given_T.entropy == pytest.approx(S, rel=3e-3)
    given_S = solve_cloud(gas, trap, np.array([N]), entropy=S / N, phonons=False)
    assert given_S.T == pytest.approx(T, rel=4e-3)
    assert given_S.mu[0] == pytest.approx(mu, abs=4e-3 * max(T, abs(mu)))


def test_wedding_cake_radii():
    """U -> infinity: shells of whole fillings end where V = mu - k U; N is the sum of the spheres' volumes."""
    curvature, mu = 0.002, 1.6
    radii = np.sqrt((mu - np.array([0.0, 1.0])) / curvature)
    N = float((4 * np.pi / 3 * radii**3).sum())
    gas = LocalGas(Mixture(t=1e-5, U=1.0, mu=0.0, species=1, n_max=4))
    cloud = solve_cloud(gas, round_trap(curvature), np.array([N]), T=0.0, tolerance=1e-4)
    assert cloud.mu[0] == pytest.approx(mu, rel=1e-3)
    outer = [s.outer[0] for s in profiles.shells(cloud) if s.phase == Phase.MOTT]
    np.testing.assert_allclose(outer, radii[::-1], rtol=2e-3)


def test_thomas_fermi_limit():
    """U << z t, T -> 0: n = (mu + z t - V)/U, mu + z t = (15 N U c^(3/2)/(8 pi))^(2/5) (common practice, no source)."""
    t, U, N, c = 1.0, 0.2, 1500.0, 0.004
    gas = LocalGas(Mixture(t=t, U=U, mu=0.0, species=1, n_max=9))
    cloud = solve_cloud(gas, round_trap(c), np.array([N]), T=0.0)
    depth = (15 * N * U * c**1.5 / (8 * np.pi)) ** 0.4
    # The coherent state is exact for U -> 0 only: here n is 1 to 2 % above (mu + z t)/U.
    assert cloud.mu[0] + 6 * t == pytest.approx(depth, rel=2e-2)
    assert cloud.average("filling").max() == pytest.approx(depth / U, rel=2e-2)
    assert profiles.shells(cloud)[-1].outer[0] == pytest.approx(np.sqrt(depth / c), rel=2e-2)


@pytest.mark.slow
def test_independent_species_on_a_plane_are_two_clouds_on_lines():
    """U12 = 0: traps of different shape need the plane, each species alone only a line; both must agree."""
    curvature = np.array([[0.004, 0.004, 0.004], [0.004, 0.004, 0.008]])
    pair = LocalGas(Mixture(t=0.03, U=1.0, U12=0.0, mu=0.0, n_max=2))
    both = solve_cloud(pair, Trap(curvature, np.zeros((2, 3))), np.array([2000.0, 1500.0]), T=0.1)
    assert both.nodes.line is None
    for a, N in enumerate((2000.0, 1500.0)):
        alone = LocalGas(Mixture(t=0.03, U=1.0, mu=0.0, species=1, n_max=2))
        single = solve_cloud(alone, Trap(curvature[a : a + 1], np.zeros((1, 3))), np.array([N]), T=0.1)
        assert both.mu[a] == pytest.approx(single.mu[0], abs=3e-3)
        if a == 0:
            first = single.entropy
    assert both.entropy == pytest.approx(first + single.entropy, rel=5e-3)


def test_numbers_and_entropy_are_slopes_of_the_grand_potential():
    """N = -dOmega/dmu, S = -dOmega/dT, by central differences on the cloud's own nodes."""
    gas = LocalGas(Mixture(t=0.02, U=1.0, U12=0.6, mu=0.0, n_max=2))
    cloud = solve_cloud(gas, round_trap(0.004, 2), np.array([1500.0, 1000.0]), T=0.06, phonons=False)

    def omega(mu, T):
        return float(cloud.nodes.weight @ gas(mu - cloud.nodes.potential, T).of("free_energy"))

    step = 1e-4
    for a in range(2):
        up, down = cloud.mu.copy(), cloud.mu.copy()
        up[a] += step
        down[a] -= step
        assert -(omega(up, cloud.T) - omega(down, cloud.T)) / (2 * step) == pytest.approx(cloud.atoms[a], rel=1e-5)
    slope = -(omega(cloud.mu, cloud.T + step) - omega(cloud.mu, cloud.T - step)) / (2 * step)
    assert slope == pytest.approx(cloud.entropy, rel=1e-4)


def test_shells_phases_and_images_hold_all_atoms():
    gas = LocalGas(Mixture(t=0.02, U=1.0, U12=0.6, mu=0.0, n_max=2))
    cloud = solve_cloud(gas, round_trap(0.004, 2), np.array([1500.0, 1000.0]), entropy=0.9)
    assert cloud.atoms == pytest.approx([1500.0, 1000.0], rel=1e-5)
    assert cloud.entropy_per_particle == pytest.approx(0.9, rel=1e-2)
    assert sum(a.sum() for a, _ in cloud.by_phase().values()) == pytest.approx(2500.0, rel=1e-5)
    layers = profiles.shells(cloud)
    assert sum(s.atoms.sum() for s in layers) == pytest.approx(2500.0, rel=1e-5)
    assert all(a.outer[0] == b.inner[0] for a, b in zip(layers, layers[1:], strict=False))
    image = profiles.column_density(cloud)
    pixel = float(np.diff(image.position_x.values[:2])[0] * np.diff(image.position_y.values[:2])[0])
    summed = image.column_density.sum(("position_x", "position_y")).values * pixel
    np.testing.assert_allclose(summed, [1500.0, 1000.0], rtol=1e-2)


def test_collective_modes_cool_the_cloud():
    """With the same entropy a cloud that has phonons to put it in is colder; the total is the one asked for."""
    gas = LocalGas(Mixture(t=0.05, U=1.0, mu=0.0, species=1, n_max=4))
    trap, atoms = round_trap(0.01), np.array([800.0])
    without = solve_cloud(gas, trap, atoms, entropy=0.3, phonons=False)
    full = solve_cloud(gas, trap, atoms, entropy=0.3)
    assert without.phonons is None and full.phonons is not None
    assert full.T < 0.9 * without.T
    assert full.entropy_per_particle == pytest.approx(0.3, rel=1e-2)


@pytest.mark.slow
def test_a_jump_of_the_whole_cloud_is_shared_not_averaged():
    """Species that demix in one trap: equal numbers are met by two sides, each of one kind."""
    gas = LocalGas(Mixture(t=0.03, U=1.0, U12=2.5, mu=0.0, n_max=2))
    cloud = solve_cloud(gas, round_trap(0.02, 2), np.array([200.0, 200.0]), T=0.0)
    assert cloud.coexist and cloud.status & Status.DEMIXING
    assert cloud.atoms == pytest.approx([200.0, 200.0], rel=2e-3)
    assert cloud.shares.sum() == pytest.approx(1.0)
    for side in cloud.sides:
        assert side.of("filling").max(0).min() < 0.02
    assert int(Phase.SEPARATED) in cloud.phases()


def test_entropy_below_that_of_free_spins_is_said():
    gas = LocalGas(Mixture(t=0.002, U=1.0, U12=0.9, mu=0.0, n_max=2))
    cloud = solve_cloud(gas, round_trap(0.004, 2), np.array([800.0, 800.0]), entropy=0.3)
    assert cloud.status & Status.ENTROPY_UNREACHABLE
    assert "k_B per atom" in cloud.notes[0]
    # Nearly all sites hold one atom of either kind.
    assert 0.3 < cloud.entropy_per_particle <= np.log(2) + 1e-6


def test_node_weights_are_the_volume():
    trap = round_trap(0.01)
    v = np.sort(np.append(np.random.default_rng(1).uniform(0.0, 1.0, 30), [0.0, 1.0]))
    nodes = line_nodes(trap, v)
    assert nodes.weight.sum() == pytest.approx(4 * np.pi / 3 * 1000)
    # Exact for linear functions: the integral of V over the ball is 3/5 of volume x V(edge).
    assert nodes.weight @ v == pytest.approx(0.6 * 4 * np.pi / 3 * 1000)
    plane = plane_nodes(Trap(np.full((2, 3), 0.01), np.array([[0, 0, 0], [0, 0, 3.0]])), np.array([1.0, 1.0]), 21)
    # Two balls of radius 10, their middles 3 apart: 2 V - pi (4 R + d) (2 R - d)^2 / 12.
    union = 2 * 4 * np.pi / 3 * 1000 - np.pi * 43 * 17**2 / 12
    assert plane.weight.sum() == pytest.approx(union, rel=2e-3)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"curvature": -0.01}, "the cloud is not bound"),
        ({"curvature": 0.0}, "the cloud is not bound"),
        ({"atoms": 0.0}, "N is 0; it must be greater than 0"),
        ({"curvature": 0.5, "atoms": 5.0}, "the trap is so tight"),
        ({"T": -1.0}, "T is -1; it must be a finite number"),
        ({"T": None}, "give exactly one of T and entropy"),
    ],
)
def test_bad_input_is_said_in_a_sentence(change, words):
    asked = {"curvature": 0.01, "atoms": 300.0, "T": 0.1} | change
    with pytest.raises(InputError, match=words):
        solve_cloud(hard_core(0.1), round_trap(asked["curvature"]), np.array([asked["atoms"]]), T=asked["T"])


def test_a_box_holds_no_more_hard_cores_than_sites():
    box = Trap(np.zeros((1, 3)), np.zeros((1, 3)), np.array([5.0, 5.0, 5.0]))
    with pytest.raises(InputError, match="below 125, the sites of the box"):
        solve_cloud(hard_core(0.1), box, np.array([125.0]), T=0.1)
    cloud = solve_cloud(hard_core(0.1), box, np.array([62.5]), T=0.1)
    assert cloud.mu[0] == pytest.approx(0.0, abs=1e-6)
    assert cloud.atoms[0] == pytest.approx(62.5)


def test_filling_beyond_the_cutoff_is_marked():
    gas = LocalGas(Mixture(t=0.02, U=1.0, mu=0.0, species=1, n_max=2))
    cloud = solve_cloud(gas, round_trap(0.01), np.array([9000.0]), T=0.05)
    assert cloud.status & Status.CUTOFF
    assert any("raise n_max" in words for words in cloud.notes)
