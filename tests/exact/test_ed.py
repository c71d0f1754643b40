"""Exact diagonalisation against analytic spectra, published series, and a plain second implementation."""

from itertools import product

import numpy as np
import pytest
from scipy.linalg import eigh, expm

from gutz.errors import InputError, ResourceError
from gutz.exact import Cluster, LatticeModel, box, chain, ed, ring


def single(cluster, t=1.0, U=4.0, mu=0.0, n_max=3):
    return LatticeModel(cluster, t=(t,), U=(U,), mu=(mu,), n_max=n_max)


# --- clusters -----------------------------------------------------------------------------------------------


def test_bond_counts_are_literal():
    assert len(chain(5).bonds) == 4
    assert len(ring(5).bonds) == 5
    assert ring(2).bonds == ((0, 1), (1, 0))
    assert chain(2).bonds == ((0, 1),)
    assert len(box((2, 2)).bonds) == 8
    assert len(box((3, 2), periodic=(True, False)).bonds) == 6 + 3
    assert len(box((2, 2, 2), periodic=False).bonds) == 12


def test_two_site_ring_hops_twice_as_strongly():
    twice = ed.spectrum(single(ring(2)), 3)
    assert twice == pytest.approx(ed.spectrum(single(chain(2), t=2.0), 3), abs=1e-12)


@pytest.mark.parametrize("shape", [(6,), (2, 2), (3, 2), (2, 2, 2)])
def test_one_atom_sees_the_lattice_dispersion(shape):
    cluster = box(shape)
    expected = np.sort(-2 * np.cos(cluster.momenta).sum(axis=1))  # textbook tight binding
    assert ed.spectrum(single(cluster), 1) == pytest.approx(expected, abs=1e-12)


# --- analytic spectra ---------------------------------------------------------------------------------------


def test_two_atoms_on_two_sites():
    U, t = 3.7, 0.8
    root = np.sqrt(U**2 / 4 + 4 * t**2)  # 2x2 even sector; the odd combination keeps energy U
    assert ed.spectrum(single(chain(2), t, U), 2) == pytest.approx(sorted([U / 2 - root, U, U / 2 + root]), abs=1e-12)


def test_one_atom_of_each_species_on_two_sites():
    t1, t2, U12 = 0.7, 0.2, -1.3
    model = LatticeModel(chain(2), t=(t1, t2), U=(5.0, 6.0), U12=U12, n_max=2)
    # Even and odd sectors are 2x2 with couplings t1 + t2 and t1 - t2 (solved by hand).
    expected = [
        U12 / 2 + sign * np.sqrt(U12**2 / 4 + (t1 + parity * t2) ** 2) for sign, parity in product((1, -1), (1, -1))
    ]
    assert ed.spectrum(model, (1, 1)) == pytest.approx(sorted(expected), abs=1e-12)


@pytest.mark.parametrize("atoms", [1, 3, 4])
def test_free_bosons_condense_in_the_lowest_orbital(atoms):
    ring_energy = ed.ground_state(single(ring(6), U=0.0, n_max=atoms), atoms).energy
    chain_energy = ed.ground_state(single(chain(6), U=0.0, n_max=atoms), atoms).energy
    assert ring_energy == pytest.approx(-2 * atoms, abs=1e-11)
    assert chain_energy == pytest.approx(-2 * atoms * np.cos(np.pi / 7), abs=1e-11)


def test_free_bosons_at_fixed_number_follow_the_recursion():
    """Z_N = (1/N) sum_k Z_1(k beta) Z_{N-k}, the textbook recursion of the ideal Bose gas."""
    T, atoms = 0.9, 4
    levels = -2 * np.cos(2 * np.pi * np.arange(5) / 5)
    z = [np.exp(-k * levels / T).sum() for k in range(atoms + 1)]
    total = [1.0]
    for count in range(1, atoms + 1):
        total.append(sum(z[k] * total[count - k] for k in range(1, count + 1)) / count)
    state = ed.thermal(single(ring(5), U=0.0, n_max=atoms), T, atoms)
    assert state.free_energy == pytest.approx(-T * np.log(total[atoms]), abs=1e-11)


@pytest.mark.parametrize("length, atoms", [(6, 3), (8, 3), (9, 5), (11, 5)])
def test_hard_core_ring_is_a_free_fermi_sea(length, atoms):
    """Odd atom number: Jordan-Wigner without a twist, E = -2t sum cos(2 pi m / L) (textbook)."""
    m = np.arange(atoms) - (atoms - 1) // 2
    energy = ed.ground_state(single(ring(length), n_max=1), atoms).energy
    assert energy == pytest.approx(-2 * np.cos(2 * np.pi * m / length).sum(), abs=1e-11)


def test_hard_core_chain_has_the_thermodynamics_of_free_fermions():
    T, mu, length = 0.6, -0.35, 7
    levels = -2 * np.cos(np.pi * np.arange(1, length + 1) / (length + 1)) - mu
    state = ed.thermal(single(chain(length), mu=mu, n_max=1), T)
    occupation = 1 / (np.exp(levels / T) + 1)
    assert state.free_energy == pytest.approx(-T * np.log1p(np.exp(-levels / T)).sum(), abs=1e-11)
    assert state.energy == pytest.approx(levels @ occupation, abs=1e-11)
    assert state.numbers[0] == pytest.approx(occupation.sum(), abs=1e-11)


def test_single_sites_without_hopping():
    T, mu, U = 0.4, 0.9, 1.0
    n = np.arange(5)
    levels = 0.5 * U * n * (n - 1) - mu * n
    state = ed.thermal(single(chain(3), 0.0, U, mu, n_max=4), T)
    weight = np.exp(-levels / T) / np.exp(-levels / T).sum()
    assert state.free_energy == pytest.approx(-3 * T * np.log(np.exp(-levels / T).sum()), abs=1e-12)
    assert state.filling[0] == pytest.approx(np.full(3, weight @ n), abs=1e-12)
    assert state.entropy == pytest.approx(-3 * (weight @ np.log(weight)), abs=1e-12)
    assert np.diag(ed.density_density(state, 0, 0)) == pytest.approx(np.full(3, weight @ n**2), abs=1e-12)


@pytest.mark.parametrize("mu, filling", [(-0.2, 0), (0.3, 1), (1.5, 2)])
def test_zero_temperature_grand_canonical_steps(mu, filling):
    state = ed.ground_state(single(chain(3), 0.01, 1.0, mu, n_max=3))
    assert state.blocks[0].numbers == (3 * filling,)


# --- published and stored values ----------------------------------------------------------------------------


@pytest.mark.parametrize("x", [0.02, 0.03])
def test_mott_energy_series(x):
    """E0/(L U) = -4x^2 + 4x^4 + (272/9) x^6: Damski & Zakrzewski, PRA 74, 043609 (2006), from memory.

    The energy one more site adds to an open chain of 6 sites has no windings and holds all linked clusters
    through x^8; the remainder must be the next term (own computation: -5068/81 x^8) up to order x^10.
    """
    longer = ed.ground_state(single(chain(7), x, 1.0, n_max=5), 7).energy
    shorter = ed.ground_state(single(chain(6), x, 1.0, n_max=5), 6).energy
    remainder = longer - shorter - (-4 * x**2 + 4 * x**4 + 272 / 9 * x**6)
    assert remainder / x**8 == pytest.approx(-5068 / 81, rel=0.05)


@pytest.mark.parametrize("U", [2.0, 4.0, 8.0])
def test_unit_filling_ring_of_8(U):
    """Own computation (independent scratch code), 1e-6."""
    known = {2.0: -1.359000, 4.0: -0.932474, 8.0: -0.494655}
    energy = ed.ground_state(single(ring(8), U=U, n_max=5), 8).energy / 8
    assert energy == pytest.approx(known[U], abs=6e-7)


@pytest.mark.parametrize("length, U, known", [(9, 6, -0.652272), (10, 5, -0.769295), (10, 20, -0.199491)])
def test_unit_filling_larger_rings(length, U, known):
    """Own computation (independent scratch code), 1e-6."""
    energy = ed.ground_state(single(ring(length), U=U, n_max=5), length).energy / length
    assert energy == pytest.approx(known, abs=6e-7)


def test_exchange_levels_of_two_sites():
    """Superexchange levels -4 t1^2/U1, -4 t2^2/U2, -(t1 +- t2)^2/U12: Kuklov & Svistunov, PRL 90, 100401
    (2003); Duan, Demler & Lukin, PRL 91, 090402 (2003), from memory. Corrections: relative order (t/U)^2.
    """
    t1, t2, U1, U2, U12 = 0.01, 0.006, 1.0, 1.4, 0.8
    model = LatticeModel(chain(2), t=(t1, t2), U=(U1, U2), U12=U12, n_max=2)
    assert ed.spectrum(model, (2, 0))[0] == pytest.approx(-4 * t1**2 / U1, rel=1e-3)
    assert ed.spectrum(model, (0, 2))[0] == pytest.approx(-4 * t2**2 / U2, rel=1e-3)
    mixed = ed.spectrum(model, (1, 1))[:2]
    assert mixed == pytest.approx([-((t1 + t2) ** 2) / U12, -((t1 - t2) ** 2) / U12], rel=1e-3)


def test_particle_hole_duality_of_the_hard_core_mixture():
    """b_2 -> b_2+ on a bipartite lattice turns U12 into -U12 and shifts by U12 N1 (exact)."""
    cluster, U12 = box((2, 3), periodic=(False, False)), 1.7
    plus = LatticeModel(cluster, t=(1.0, 0.6), U=(0, 0), U12=U12, n_max=1)
    minus = LatticeModel(cluster, t=(1.0, 0.6), U=(0, 0), U12=-U12, n_max=1)
    a, b = ed.ground_state(plus, (3, 2)), ed.ground_state(minus, (3, 4))
    assert a.energy == pytest.approx(b.energy + 3 * U12, abs=1e-11)
    off = ~np.eye(6, dtype=bool)
    assert ed.antipair(a)[off] == pytest.approx(ed.pair(b)[off], abs=1e-11)


def test_one_bound_pair_spreads_evenly_over_a_ring():
    """At t << |U12| one pair on three sites is |i, i> with equal amplitudes: <P+_i P_j> = 1/3 O(t/U)."""
    model = LatticeModel(ring(3), t=(5e-4, 5e-4), U=(1, 1), U12=-0.98, n_max=2)
    assert ed.pair(ed.ground_state(model, (1, 1))) == pytest.approx(np.full((3, 3), 1 / 3), abs=5e-3)


# --- a plain second implementation --------------------------------------------------------------------------


def full_space(model):
    """H, annihilators and number operators in the full Fock space, by Kronecker products."""
    sites, species = model.cluster.sites, model.species
    modes = [(site, a) for site in range(sites) for a in range(species)]
    lower = {}
    for mode in modes:
        matrix = np.ones((1, 1))
        for site, a in modes:
            d = model.cutoff[a] + 1
            factor = np.diag(np.sqrt(np.arange(1.0, d)), 1) if (site, a) == mode else np.eye(d)
            matrix = np.kron(matrix, factor)
        lower[mode] = matrix
    number = {mode: b.T @ b for mode, b in lower.items()}
    eye = np.eye(len(next(iter(lower.values()))))
    H = np.zeros_like(eye)
    for a in range(species):
        for (i, j), t in zip(model.cluster.bonds, model.hopping[a], strict=True):
            hop = lower[i, a].T @ lower[j, a]
            H -= t * (hop + hop.T)
        for i in range(sites):
            n = number[i, a]
            H += model.interaction[a] / 2 * n @ (n - eye) - model.potential[a, i] * n
    if species == 2:
        H += model.U12 * sum(number[i, 0] @ number[i, 1] for i in range(sites))
    return H, lower, number


TWO = LatticeModel(
    chain(3),
    t=([0.9, 1.2], 0.5),
    U=(1.5, 2.5),
    U12=-0.8,
    mu=([0.3, 0.1, -0.2], 0.4),
    n_max=(2, 1),
)
ONE = LatticeModel(ring(4), t=(1.0,), U=(2.0,), mu=([0.5, 0.1, 0.9, 0.3],), n_max=2)


@pytest.fixture(params=[ONE, TWO], ids=["one species", "two species"], scope="module")
def thermal_pair(request):
    model, T = request.param, 0.7
    H, lower, number = full_space(model)
    rho = expm(-H / T)
    partition = np.trace(rho)
    return ed.thermal(model, T), rho / partition, -T * np.log(partition), H, lower, number


def test_thermodynamics_against_the_full_space(thermal_pair):
    state, rho, omega, H, _, number = thermal_pair
    model = state.model
    levels = np.linalg.eigvalsh(rho)
    assert state.free_energy == pytest.approx(omega, abs=1e-11)
    assert state.energy == pytest.approx(np.trace(rho @ H), abs=1e-11)
    assert state.entropy == pytest.approx(-np.sum(levels * np.log(levels)), abs=1e-9)
    for a in range(model.species):
        expected = [np.trace(rho @ number[i, a]) for i in range(model.cluster.sites)]
        assert state.filling[a] == pytest.approx(expected, abs=1e-12)


def test_correlators_against_the_full_space(thermal_pair):
    state, rho, _, _, lower, number = thermal_pair
    model = state.model
    grid = list(product(range(model.cluster.sites), repeat=2))
    for a in range(model.species):
        for i, j in grid:
            expected = np.trace(rho @ lower[i, a].T @ lower[j, a])
            assert ed.one_body(state, a)[i, j] == pytest.approx(expected, abs=1e-12)
        for b in range(model.species):
            for i, j in grid:
                expected = np.trace(rho @ number[i, a] @ number[j, b])
                assert ed.density_density(state, a, b)[i, j] == pytest.approx(expected, abs=1e-12)
    if model.species == 1:
        return
    pairs = {i: lower[i, 0] @ lower[i, 1] for i in range(model.cluster.sites)}
    antis = {i: lower[i, 1].T @ lower[i, 0] for i in range(model.cluster.sites)}
    for i, j in grid:
        assert ed.pair(state)[i, j] == pytest.approx(np.trace(rho @ pairs[i].T @ pairs[j]), abs=1e-12)
        if i != j:
            expected = np.trace(rho @ antis[i].T @ antis[j])
        else:
            expected = np.trace(rho @ number[i, 0] @ (number[i, 1] + np.eye(len(rho))))
        assert ed.antipair(state)[i, j] == pytest.approx(expected, abs=1e-12)


def test_noise_maps_against_the_full_space(thermal_pair):
    state, rho, _, _, lower, _ = thermal_pair
    model = state.model
    sites = model.cluster.sites
    momenta = np.array([[0.0], [0.7], [-1.9], [np.pi]])

    def field(k, a):
        return sum(np.exp(-1j * k * i) * lower[i, a] for i in range(sites)) / np.sqrt(sites)

    for a, b in product(range(model.species), repeat=2):
        result = ed.noise_map(state, a, b, momenta)
        for p, q in product(range(4), repeat=2):
            ba, bb = field(momenta[p, 0], a), field(momenta[q, 0], b)
            joint = np.trace(rho @ ba.conj().T @ bb.conj().T @ bb @ ba).real
            single_a = np.trace(rho @ ba.conj().T @ ba).real
            single_b = np.trace(rho @ bb.conj().T @ bb).real
            assert result[p, q] == pytest.approx(joint - single_a * single_b, abs=1e-12)


def test_ground_state_against_the_full_space():
    H, _, _ = full_space(TWO)
    energy = eigh(H, eigvals_only=True, subset_by_index=[0, 0])[0]
    state = ed.ground_state(TWO)
    assert state.energy == pytest.approx(energy, abs=1e-12)
    assert state.entropy == 0.0


def test_sparse_and_dense_solvers_agree():
    model = LatticeModel(ring(5), t=(1.0, 0.7), U=(3.0, 4.0), U12=1.0, n_max=2)
    assert ed.count_states(5, 2, 4) ** 2 > 200
    assert ed.ground_state(model, (4, 4)).energy == pytest.approx(ed.spectrum(model, (4, 4))[0], abs=1e-11)


# --- laws ---------------------------------------------------------------------------------------------------


def test_derivatives_of_the_grand_potential():
    """n = -dOmega/dmu and S = -dOmega/dT by central differences, step 1e-4 (error ~ step^2)."""
    T, step = 0.8, 1e-4

    def at(mu1=0.3, temperature=T):
        model = LatticeModel(ring(3), t=(1.0, 0.4), U=(2.0, 3.0), U12=-1.1, mu=([mu1, 0.3, 0.1], -0.2), n_max=2)
        return ed.thermal(model, temperature)

    state = at()
    slope = (at(0.3 + step).free_energy - at(0.3 - step).free_energy) / (2 * step)
    assert state.filling[0, 0] == pytest.approx(-slope, abs=1e-7)
    slope = (at(temperature=T + step).free_energy - at(temperature=T - step).free_energy) / (2 * step)
    assert state.entropy == pytest.approx(-slope, abs=1e-7)


@pytest.mark.parametrize("a, b", [(0, 0), (0, 1), (1, 1)])
def test_fixed_numbers_make_every_noise_row_sum_to_zero(a, b):
    model = LatticeModel(box((2, 2)), t=(1.0, 0.8), U=(3.0, 2.0), U12=1.2, n_max=3)
    for state in (ed.ground_state(model, (2, 3)), ed.thermal(model, 1.1, (2, 3))):
        full = ed.noise_map(state, a, b) + (a == b) * np.diag(ed.momentum_distribution(state, a))
        assert full.sum(axis=1) == pytest.approx(np.zeros(4), abs=1e-11)


def test_cold_thermal_state_tends_to_the_ground_state():
    model = LatticeModel(ring(4), t=(1.0, 1.0), U=(5.0, 5.0), U12=2.0, n_max=2)
    cold, ground = ed.thermal(model, 0.01, (2, 2)), ed.ground_state(model, (2, 2))
    assert cold.free_energy == pytest.approx(ground.energy, abs=1e-10)
    assert ed.antipair(cold) == pytest.approx(ed.antipair(ground), abs=1e-10)


def test_counting_without_building():
    for sites, cutoff, atoms in product((1, 3, 5), (1, 2, 4), range(6)):
        expected = sum(sum(row) == atoms for row in product(range(cutoff + 1), repeat=sites))
        assert ed.count_states(sites, cutoff, atoms) == expected
        if expected:
            basis = ed.one_species_basis(sites, cutoff, atoms)
            assert basis.size == expected
            assert np.all(np.diff(basis.codes) > 0)


# --- refusals -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "call, part",
    [
        (lambda: ring(1), "at least 2 sites"),
        (lambda: box((2, 0)), "at least 1"),
        (lambda: box((2, 2), periodic=(True,)), "1 flags for 2 directions"),
        (lambda: Cluster((2,), ((0,), (1,)), ((0, 2),)), "(0, 2)"),
        (lambda: single(ring(3), t=[1.0, 2.0]), "t: got shape (2,)"),
        (lambda: single(ring(3), mu=float("nan")), "mu: got nan"),
        (lambda: LatticeModel(ring(3), t=(1, 1, 1), U=(1,)), "t: got 3 entries"),
        (lambda: LatticeModel(ring(3), t=(1, 1), U=(1,)), "U: got 1 entries"),
        (lambda: LatticeModel(ring(3), t=(1, 1), U=(1, 1), U12=float("inf")), "U12: got inf"),
        (lambda: single(ring(3), n_max=0), "n_max: got 0"),
        (lambda: ed.ground_state(single(ring(3), n_max=2), 7), "0..6"),
        (lambda: ed.ground_state(single(ring(3)), (1, 1)), "one atom number per species (1)"),
        (lambda: ed.thermal(single(ring(3)), 0.0), "T: got 0.0"),
        (lambda: ed.pair(ed.ground_state(single(ring(3)), 1)), "pair: the model has one species"),
        (lambda: ed.one_body(ed.ground_state(single(ring(3)), 1), 1), "species: got 1"),
        (lambda: ed.noise_map(ed.ground_state(single(ring(3)), 1), 0, 0, np.zeros(4)), "momenta: got shape"),
    ],
)
def test_mistakes_get_one_sentence(call, part):
    with pytest.raises(InputError) as caught:
        call()
    assert part in str(caught.value)
    assert str(caught.value).endswith(".") and "\n" not in str(caught.value)


@pytest.mark.parametrize(
    "call, part",
    [
        (
            lambda: ed.ground_state(single(ring(20), n_max=5), 20),
            "limit for a sparse Hamiltonian is 2000000",
        ),
        (lambda: ed.thermal(single(ring(9), n_max=3), 1.0), "the limit for full diagonalisation is 4000"),
        (lambda: ed.spectrum(single(ring(64), n_max=1), 1), "63-bit"),
        (
            lambda: ed.thermal(LatticeModel(chain(4), t=(1, 1), U=(1, 1), n_max=(3, 4)), 1.0),
            "the limit is 100000000",
        ),
    ],
)
def test_too_large_spaces_are_refused_with_their_size(call, part):
    with pytest.raises(ResourceError) as caught:
        call()
    assert part in str(caught.value)
