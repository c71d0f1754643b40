"""Matrix-product solver against exact diagonalisation, integrable chains, published series, plain vectors."""

from itertools import product

import numpy as np
import pytest

from gutz.errors import InputError, ResourceError
from gutz.exact import Cluster, LatticeModel, chain, chains, ed, mps, mps_thermal, ring
from gutz.exact import mps_correlators as correlators

ONE = LatticeModel(chain(5), t=(1.0,), U=(3.0,), mu=([0.1, 0.2, -0.3, 0.4, 0.0],), n_max=3)
TWO = LatticeModel(
    chain(4),
    t=([1.0, 0.8, 0.9], 0.6),
    U=(3.0, 4.0),
    U12=-1.5,
    mu=([0.1, 0.2, -0.3, 0.4], 0.2),
    n_max=(2, 2),
)
MIXED = LatticeModel(chain(5), t=(1.0, 0.4), U=(2.0, 0.0), U12=1.1, n_max=(2, 1))
PAIR = LatticeModel(chain(2), t=(0.7, 0.3), U=(2.0, 3.0), U12=0.5, n_max=2)
CASES = [(ONE, 4), (ONE, 15), (TWO, (3, 2)), (TWO, (0, 2)), (MIXED, (3, 2)), (MIXED, (4, 5)), (PAIR, (1, 2))]
NAMES = ["one", "full", "two", "one absent", "mixed cutoffs", "one frozen", "two sites"]


@pytest.fixture(params=CASES, ids=NAMES, scope="module")
def solved(request):
    model, N = request.param
    return mps.ground_state(model, N, cutoff=0.0, tolerance=1e-13), ed.ground_state(model, N)


def assert_same_observables(mine, exact, tolerance):
    species = range(exact.model.species)
    assert correlators.filling(mine) == pytest.approx(exact.filling, abs=tolerance)
    for a in species:
        assert correlators.one_body(mine, a) == pytest.approx(ed.one_body(exact, a), abs=tolerance)
    for a, b in product(species, repeat=2):
        expected = ed.density_density(exact, a, b)
        assert correlators.density_density(mine, a, b) == pytest.approx(expected, abs=tolerance)
        assert correlators.four_body(mine, a, b) == pytest.approx(ed.four_body(exact, a, b), abs=tolerance)
        assert correlators.noise_map(mine, a, b) == pytest.approx(ed.noise_map(exact, a, b), abs=tolerance)
    if len(species) == 2:
        assert correlators.pair(mine) == pytest.approx(ed.pair(exact), abs=tolerance)
        assert correlators.antipair(mine) == pytest.approx(ed.antipair(exact), abs=tolerance)


# --- ground states ------------------------------------------------------------------------------------------


def test_energy_is_exact_on_small_chains(solved):
    mine, exact = solved
    assert mine.converged
    assert mine.energy == pytest.approx(exact.energy, abs=1e-11)
    assert mine.variance == pytest.approx(0.0, abs=1e-10)


def test_observables_are_exact_on_small_chains(solved):
    assert_same_observables(*solved, tolerance=1e-9)


def test_free_momenta(solved):
    mine, exact = solved
    k = np.array([0.0, 0.4, -2.0])
    expected = ed.noise_map(exact, 0, 0, k[:, None])
    assert correlators.noise_map(mine, 0, 0, k) == pytest.approx(expected, abs=1e-9)


def full_vector(state):
    """Amplitude of every configuration, by plain multiplication of the stored blocks."""
    amplitudes = {((), (0,) * state.space.species): np.ones((1, 1))}
    for tensor in state.tensors:
        longer = {}
        for (word, q), row in amplitudes.items():
            for s, charge in enumerate(state.space.charges):
                target = tuple(x + y for x, y in zip(q, charge, strict=True))
                rows = tensor.fusion.get(target, {}).get((s, q))
                if rows is not None and target in tensor.blocks:
                    longer[(*word, s), target] = row @ tensor.blocks[target][rows]
        amplitudes = longer
    return {word: row.item() for (word, _), row in amplitudes.items()}


def test_truncated_state_reports_its_own_energy_and_variance():
    """Three states per bond: not an eigenstate; compared with the plain vector and the ED matrix."""
    state = mps.ground_state(TWO, (3, 2), max_bond=3)
    words = full_vector(state)
    matrix = ed.hamiltonian(TWO, (3, 2)).toarray()
    bases = [ed.one_species_basis(4, 2, atoms) for atoms in (3, 2)]
    vector = np.zeros((bases[0].size, bases[1].size))
    for word, amplitude in words.items():
        occupation = np.array([state.space.physical[s] for s in word])
        place = [np.flatnonzero((bases[a].occupations == occupation[:, a]).all(axis=1)).item() for a in range(2)]
        vector[tuple(place)] = amplitude
    flat = vector.ravel()
    assert np.linalg.norm(flat) == pytest.approx(1.0, abs=1e-12)
    residual = matrix @ flat - state.energy * flat
    assert state.variance == pytest.approx(residual @ residual, rel=1e-9)
    assert state.variance > 1e-4
    assert state.discarded > 1e-5
    assert flat @ matrix @ flat > ed.ground_state(TWO, (3, 2)).energy  # variational


def test_bonds_may_be_listed_in_any_order():
    shuffled = Cluster((4,), chain(4).positions, ((2, 3), (0, 1), (1, 2)))
    model = LatticeModel(shuffled, t=([0.5, 1.0, 2.0],), U=(1.0,), n_max=2)
    energy = mps.ground_state(model, 3, cutoff=0.0).energy
    assert energy == pytest.approx(ed.ground_state(model, 3).energy, abs=1e-11)


def test_hard_core_chain_of_24():
    """Free fermions (Jordan-Wigner) in a slope: energy and every <b+_i b_j>."""
    mu = 0.05 * np.arange(24)
    model = LatticeModel(chain(24), t=(1.0,), U=(0.0,), mu=(mu,), n_max=1)
    exact = chains.hard_core_chain(model, N=9)
    state = mps.ground_state(model, 9, cutoff=1e-16, tolerance=1e-13)
    assert state.energy == pytest.approx(exact.energy, abs=1e-11)
    G = correlators.one_body(state, 0)
    assert pytest.approx(chains.hard_core_one_body(exact.correlation), abs=1e-8) == G


def test_mott_energy_series_on_long_chains():
    """Energy per site that 4 more sites add: -4x^2 + 4x^4 + (272/9)x^6, Damski & Zakrzewski, PRA 74, 043609
    (2006), from memory, and -5068/81 x^8 (own computation). The remainder must be of order x^10: its
    coefficient came out as 114 (own run), 300 allowed; the x^8 term alone is 80 times that bound."""
    x = 0.05
    energies = [
        mps.ground_state(LatticeModel(chain(L), t=(x,), U=(1.0,), n_max=5), L, cutoff=1e-16).energy for L in (12, 16)
    ]
    bulk = (energies[1] - energies[0]) / 4
    series = -4 * x**2 + 4 * x**4 + 272 / 9 * x**6 - 5068 / 81 * x**8
    assert bulk == pytest.approx(series, abs=300 * x**10)


@pytest.mark.slow
def test_hard_core_mixture_approaches_lieb_and_wu():
    """Energy per site that 12 more sites add (open ends cancel up to 1/L^2) against the infinite chain.
    Own runs: the difference is 1.1e-4 here and falls with length; 2e-4 allowed."""
    energies = [
        mps.ground_state(
            LatticeModel(chain(L), t=(1.0, 1.0), U=(0.0, 0.0), U12=8.0, n_max=1),
            (L // 2, L // 2),
            max_bond=120,
        ).energy
        for L in (20, 32)
    ]
    assert (energies[1] - energies[0]) / 12 == pytest.approx(chains.mixture_energy(1.0, 8.0), abs=2e-4)


def test_duality_of_the_hard_core_mixture():
    """Particle-hole exchange of species 2 (exact): U12 -> -U12, pair <-> anti-pair correlators."""
    cluster = chain(10)
    plus = LatticeModel(cluster, t=(1.0, 0.7), U=(0, 0), U12=3.0, n_max=1)
    minus = LatticeModel(cluster, t=(1.0, 0.7), U=(0, 0), U12=-3.0, n_max=1)
    a = mps.ground_state(plus, (5, 4), cutoff=1e-15, tolerance=1e-13)
    b = mps.ground_state(minus, (5, 6), cutoff=1e-15, tolerance=1e-13)
    assert a.energy == pytest.approx(b.energy + 15.0, abs=1e-9)
    off = ~np.eye(10, dtype=bool)
    assert correlators.antipair(a)[off] == pytest.approx(correlators.pair(b)[off], abs=1e-6)


def test_fixed_numbers_make_every_noise_row_sum_to_zero():
    model = LatticeModel(chain(8), t=(0.2, 0.2), U=(1.0, 1.0), U12=-0.6, n_max=2)
    state = mps.ground_state(model, (4, 4), max_bond=20, max_sweeps=3)
    for a, b in product(range(2), repeat=2):
        full = correlators.noise_map(state, a, b)
        full += (a == b) * np.diag(correlators.momentum_distribution(state, a))
        assert full.sum(axis=1) == pytest.approx(np.zeros(8), abs=1e-10)


def test_atoms_that_cannot_hop_find_their_places():
    """Species 2 frozen in a trap: exact diagonalisation takes the best of all its arrangements."""
    trap = 0.08 * (np.arange(8) - 3.5) ** 2
    model = LatticeModel(chain(8), t=(0.1, 0.0), U=(1.0, 1.0), U12=2.5, mu=(-trap, -2 * trap), n_max=2)
    expected = ed.ground_state(model, (3, 3)).energy
    assert mps.ground_state(model, (3, 3)).energy == pytest.approx(expected, abs=1e-9)


def test_another_seed_finds_the_same_state():
    energies = [mps.ground_state(TWO, (3, 2), seed=seed).energy for seed in range(3)]
    assert energies == pytest.approx([energies[0]] * 3, abs=1e-10)


def test_unsettled_runs_say_so():
    state = mps.ground_state(TWO, (3, 2), max_sweeps=2)
    assert not state.converged
    assert state.sweeps == 2


# --- thermal states -----------------------------------------------------------------------------------------

WARM = [
    (LatticeModel(chain(4), t=(1.0,), U=(3.0,), mu=([0.6, 0.2, -0.3, 0.4],), n_max=2), 0.7),
    (
        LatticeModel(chain(3), t=([1.0, 0.8], 0.6), U=(3.0, 4.0), U12=-1.5, mu=([0.1, 0.2, -0.3], 0.2), n_max=1),
        0.5,
    ),
    (LatticeModel(chain(2), t=(0.5, 0.3), U=(1.0, 2.0), U12=0.4, mu=(0.3, 0.1), n_max=2), 0.9),
]


@pytest.mark.parametrize("model, T", WARM, ids=["one species", "hard-core mixture", "two sites"])
def test_thermal_state_against_exact_diagonalisation(model, T):
    """Nothing truncated; what is left is the Trotter error (16 steps: below 1e-6, see the order test)."""
    mine = mps_thermal.thermal_state(model, T, steps=16, max_bond=400, cutoff=1e-16)
    exact = ed.thermal(model, T)
    assert mine.free_energy == pytest.approx(exact.free_energy, abs=1e-6)
    assert mine.energy == pytest.approx(exact.energy, abs=1e-6)
    assert mine.entropy == pytest.approx(exact.entropy, abs=2e-6)
    assert_same_observables(mine, exact, tolerance=1e-6)


def test_trotter_error_is_of_fourth_order():
    model, T = WARM[1]
    exact = ed.thermal(model, T).free_energy
    errors = [
        mps_thermal.thermal_state(model, T, steps=steps, max_bond=400, cutoff=1e-17).free_energy - exact
        for steps in (4, 8)
    ]
    assert np.log2(errors[0] / errors[1]) == pytest.approx(4.0, abs=0.2)


def test_no_hopping_is_exact_in_one_step():
    T, U, mu, n = 0.4, 1.0, 0.9, np.arange(4)
    weight = np.exp(-(0.5 * U * n * (n - 1) - mu * n) / T)
    state = mps_thermal.thermal_state(LatticeModel(chain(5), t=(0.0,), U=(U,), mu=(mu,), n_max=3), T, steps=1)
    assert state.free_energy == pytest.approx(-5 * T * np.log(weight.sum()), abs=1e-11)
    assert correlators.filling(state)[0] == pytest.approx(np.full(5, weight @ n / weight.sum()), abs=1e-11)
    assert state.bond_dimensions == pytest.approx(np.ones(4))


def test_warm_hard_core_chain_of_20():
    """Free fermions (Jordan-Wigner): thermodynamics and every <b+_i b_j>, default settings."""
    model = LatticeModel(chain(20), t=(1.0,), U=(0.0,), mu=(-0.4,), n_max=1)
    exact = chains.hard_core_chain(model, 0.8)
    state = mps_thermal.thermal_state(model, 0.8)
    assert state.free_energy == pytest.approx(exact.free_energy, abs=5e-6)
    assert state.energy == pytest.approx(exact.energy, abs=5e-6)
    G = correlators.one_body(state, 0)
    assert pytest.approx(chains.hard_core_one_body(exact.correlation), abs=1e-6) == G
    assert state.discarded < 1e-10


# --- refusals -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "call, part",
    [
        (lambda: mps.ground_state(LatticeModel(ring(4), t=(1,), U=(1,)), 4), "open chain"),
        (lambda: mps.ground_state(LatticeModel(chain(1), t=(1,), U=(1,)), 1), "at least 2 sites"),
        (lambda: mps.ground_state(ONE, 16), "N: got 16"),
        (lambda: mps.ground_state(TWO, 2), "one atom number per species"),
        (lambda: mps.ground_state(ONE, 3, max_bond=0), "max_bond, max_sweeps: got 0"),
        (lambda: mps_thermal.thermal_state(ONE, 0.0), "T: got 0.0"),
        (lambda: mps_thermal.thermal_state(ONE, 1.0, steps=0), "max_bond, steps: got 100, 0"),
        (lambda: correlators.pair(mps.ground_state(ONE, 1)), "pair: the model has one species"),
        (lambda: correlators.one_body(mps.ground_state(ONE, 1), 2), "species: got 2"),
    ],
)
def test_mistakes_get_one_sentence(call, part):
    with pytest.raises(InputError) as caught:
        call()
    assert part in str(caught.value)
    assert str(caught.value).endswith(".") and "\n" not in str(caught.value)


def test_noise_maps_of_long_chains_are_refused(monkeypatch):
    monkeypatch.setattr(correlators, "FOUR_BODY_LIMIT", 4)
    with pytest.raises(ResourceError, match="5 sites need 5\\^4 four-operator terms, the limit is 4\\^4"):
        correlators.noise_map(mps.ground_state(ONE, 1), 0, 0)
