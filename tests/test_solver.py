"""The product solver against a second implementation, brute force, exact diagonalisation and its own derivatives."""

import sys
import threading
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import gutz
from gutz.errors import InputError
from gutz.exact import ed
from gutz.exact.lattice import LatticeModel, box, ring
from gutz.status import Status
from gutz.variables import VARIABLES

sys.path.insert(0, str(Path(__file__).parent / "bench"))
import plain_loop  # noqa: E402  (the plain numpy loop the benchmarks compare with)

N_MAX = 3
Z = 6.0


def random_points(size, seed, warm=True):
    """Hubbard parameters from superfluid to insulator, repulsive and attractive, equal and unequal species."""
    rng = np.random.default_rng(seed)
    U = rng.uniform(0.6, 1.4, (size, 2))
    return {
        "t": rng.uniform(0.0, 0.08, (size, 2)),
        "U": U,
        "U12": rng.uniform(-0.9, 1.3, size) * np.sqrt(U.prod(-1)),
        "mu": rng.uniform(-0.4, 1.8, (size, 2)),
        "T": np.exp(rng.uniform(np.log(0.01), np.log(0.5), size)) if warm else np.zeros(size),
    }


def mixture(points, **changes):
    pair = {k: (points[k][:, 0], points[k][:, 1]) for k in ("t", "U", "mu")}
    return gutz.Mixture(**(pair | {"U12": points["U12"], "T": points["T"], "n_max": N_MAX} | changes))


@pytest.fixture(scope="module", params=[True, False], ids=["warm", "cold"])
def solved(request):
    points = random_points(256, 11, warm=request.param)
    return points, gutz.solve(mixture(points))


def plain_minimum(points, starts=((1.0, 0.9), (1.2, 0.05), (0.05, 1.2), (0.1, 0.1))):
    """Lowest result of the plain loop over several starts, one temperature at a time."""
    best = np.full(len(points["T"]), np.inf)
    energy = plain_loop.site_energies(points["U"], points["U12"], points["mu"], N_MAX)
    for start in starts:
        for i, T in enumerate(points["T"]):
            _, F, _ = plain_loop.loop(energy[i : i + 1], Z * points["t"][i : i + 1], float(T), N_MAX, 1e-9, 4000, start)
            best[i] = min(best[i], F[0])
    return best


def test_minimum_agrees_with_the_plain_loop(solved):
    """Independent numpy implementation, four starts each; the solver may be lower, never higher."""
    points, sol = solved
    some = {k: v[:60] for k, v in points.items()}
    plain = plain_minimum(some)
    excess = sol.free_energy[:60] - plain
    assert excess.max() < 1e-10
    assert (np.abs(excess) < 1e-10).mean() > 0.9
    assert np.all((sol.status[:60] & int(Status.NOT_CONVERGED)) == 0)


def test_no_field_on_a_grid_gives_a_lower_free_energy(solved):
    """Global minimum by brute force: the functional on a 17 x 17 grid of trial fields, evaluated in numpy."""
    points, sol = solved
    b1, b2, n1, n2 = plain_loop.PlainSite(N_MAX).operators
    fields = np.stack([b1 + b1.T, b2 + b2.T])
    grid = np.stack(np.meshgrid(*[np.linspace(0, 1.6, 17)] * 2, indexing="ij"), -1).reshape(-1, 2)
    energy = plain_loop.site_energies(points["U"], points["U12"], points["mu"], N_MAX)
    for i in range(0, 256, 8):
        zt = Z * points["t"][i]
        h = np.diag(energy[i]) - np.einsum("pa,aij->pij", zt * grid, fields)
        E, V = np.linalg.eigh(h)
        weight, trial = plain_loop._thermal(E, float(points["T"][i]))
        phi = np.stack([0.5 * ((V * (f @ V)).sum(1) * weight).sum(1) for f in fields], 1)
        F = trial + 2 * (zt * grid * phi).sum(1) - (zt * phi**2).sum(1)
        assert sol.free_energy[i] <= F.min() + 1e-12


def test_converged_is_true_when_looked_at_from_outside(solved):
    """phi = x and the free energy, evaluated in numpy at the fields returned."""
    points, sol = solved
    b1, b2, *_ = plain_loop.PlainSite(N_MAX).operators
    fields = np.stack([b1 + b1.T, b2 + b2.T])
    energy = plain_loop.site_energies(points["U"], points["U12"], points["mu"], N_MAX)
    for i in np.flatnonzero((sol.status & int(Status.NOT_CONVERGED | Status.DEGENERATE)) == 0):
        x = sol.fields[i, 0]
        E, V = np.linalg.eigh(np.diag(energy[i]) - np.einsum("a,aij->ij", Z * points["t"][i] * x, fields))
        weight, trial = plain_loop._thermal(E, float(points["T"][i]))
        phi = np.array([0.5 * ((V * (f @ V)).sum(0) @ weight) for f in fields])
        assert np.abs(np.abs(phi) - x).max() < 2e-10
        F = trial + (Z * points["t"][i] * (2 * x * np.abs(phi) - phi**2)).sum()
        assert abs(F - sol.free_energy[i]) < 1e-12 * (1 + abs(F))


def test_transition_at_finite_temperature_can_be_first_order():
    """U12 = U/2, T = 0.02 U: the normal state is still a local minimum where an ordered one lies lower."""
    mix = gutz.Mixture(t=np.linspace(0.026, 0.033, 64), U=1.0, U12=0.5, mu=0.25, T=0.02, dim=3, n_max=N_MAX)
    sol = gutz.solve(mix)
    phi = sol.order_parameter[:, 0]
    first = int(np.argmax(phi > 0))
    assert phi[first] > 0.3  # a jump, not an onset
    energy = plain_loop.site_energies(np.ones((1, 2)), np.array([0.5]), np.full((1, 2), 0.25), N_MAX)
    zt = np.full((1, 2), Z * float(np.asarray(mix.t)[first, 0, 0]))
    near_zero, F_normal, _ = plain_loop.loop(energy, zt, 0.02, N_MAX, 1e-10, 20000, (0.02, 0.02))
    assert np.abs(near_zero).max() < 1e-4  # a loop started near phi = 0 stays in the wrong phase
    assert sol.free_energy[first] < F_normal[0] - 1e-5


@pytest.mark.parametrize("T", [0.0, 0.05, 0.5])
def test_free_energy_is_an_upper_bound_of_the_exact_one(T):
    """Gibbs and Bogoliubov: not below exact diagonalisation of periodic clusters with the same bonds."""
    rng = np.random.default_rng(12)
    size = 24
    t, mu, U12 = rng.uniform(0.01, 0.3, size), rng.uniform(-0.3, 1.2, size), rng.uniform(-0.9, 2.0, size)
    single = gutz.solve(gutz.Mixture(t=t, U=1.0, mu=mu, T=T, dim=1, species=1, n_max=2))
    hard = gutz.solve(gutz.Mixture(t=(t, 0.5 * t), U=1.0, U12=U12, mu=mu, T=T, dim=1, n_max=1))
    square = gutz.solve(gutz.Mixture(t=t, U=1.0, mu=mu, T=T, dim=2, species=1, n_max=2))

    def exact(model):
        state = ed.ground_state(model) if T == 0 else ed.thermal(model, T)
        return state.free_energy / model.cluster.sites

    gaps = []
    for i in range(size):
        cases = [
            (single, LatticeModel(ring(4), t=(t[i],), U=(1.0,), U12=0.0, mu=(mu[i],), n_max=2)),
            (hard, LatticeModel(ring(3), t=(t[i], t[i] / 2), U=(1.0, 1.0), U12=U12[i], mu=(mu[i],) * 2, n_max=1)),
            (square, LatticeModel(box((2, 2)), t=(t[i],), U=(1.0,), U12=0.0, mu=(mu[i],), n_max=2)),
        ]
        gaps += [float(sol.free_energy[i]) - exact(model) for sol, model in cases]
    assert min(gaps) > -1e-12
    assert max(gaps) > 1e-3  # the comparison is not of a thing with itself


@settings(max_examples=60)
@given(
    t=st.tuples(st.floats(0.0, 0.5), st.floats(0.0, 0.5)),
    U12=st.floats(-1.5, 3.0),
    mu=st.tuples(st.floats(-1.0, 2.0), st.floats(-1.0, 2.0)),
    T=st.floats(0.0, 1.0),
)
def test_bound_and_first_derivatives_for_any_hard_core_mixture(t, U12, mu, T):
    """F is above exact diagonalisation of a ring, and the filling is its slope."""
    h = 1e-4
    first = mu[0] + np.array([0, h, -h])
    sol = gutz.solve(gutz.Mixture(t=t, U=1.0, U12=U12, mu=(first, mu[1]), T=T, dim=1, n_max=1))
    model = LatticeModel(ring(3), t=t, U=(1.0, 1.0), U12=U12, mu=mu, n_max=1)
    state = ed.ground_state(model) if T == 0 else ed.thermal(model, T)
    assert float(sol.free_energy[0]) >= state.free_energy / 3 - 1e-12
    # F is concave in mu, so the difference quotient lies between the fillings at the ends.
    quotient = -(sol.free_energy[1] - sol.free_energy[2]) / (2 * h)
    n = sol.filling[:, 0]
    assert n[2] - 1e-8 <= quotient <= n[1] + 1e-8


def test_outputs_are_the_derivatives_they_claim_to_be(solved):
    points, sol = solved
    if np.all(points["T"] == 0):
        pytest.skip("at T = 0 the warm set covers the same code")
    some = slice(0, 8)
    base = {k: jnp.asarray(v[some]) for k, v in points.items()}

    def total(p, name="free_energy"):
        out = getattr(gutz.solve(mixture(p)), name)
        return out.sum()

    slope = jax.grad(total)(base)
    small = jax.tree.map(np.asarray, slope)
    np.testing.assert_allclose(-small["mu"], sol.filling[some], atol=1e-10)
    np.testing.assert_allclose(-small["T"], sol.entropy[some], atol=1e-9)
    np.testing.assert_allclose(-small["t"] / 2, sol.coherence[some].sum(-1), atol=1e-10)
    pairs = 0.5 * (np.diagonal(sol.number_variance[some], axis1=-2, axis2=-1) + sol.filling[some] ** 2)
    np.testing.assert_allclose(small["U"], pairs - sol.filling[some] / 2, atol=1e-10)
    cross = sol.number_variance[some, 0, 1] + sol.filling[some].prod(-1)
    np.testing.assert_allclose(small["U12"], cross, atol=1e-10)
    dn = jax.grad(lambda p: gutz.solve(mixture(p)).filling[:, 0].sum())(base)
    np.testing.assert_allclose(dn["mu"], sol.compressibility[some, 0], rtol=1e-7, atol=1e-9)
    dS = jax.grad(lambda p: total(p, "entropy"))(base)
    np.testing.assert_allclose(dS["T"] * base["T"], sol.heat_capacity[some], rtol=1e-7, atol=1e-9)


OUTPUTS = ("free_energy", "filling", "entropy", "condensate", "compressibility", "stiffness", "energy")


def five_point(f, p, i, h):
    e = np.zeros(len(p))
    e[i] = h
    a, b = f(p + e) - f(p - e), f(p + 2 * e) - f(p - 2 * e)
    return (8 * a - b) / (12 * h)


@pytest.mark.parametrize("setting", ["mu and T", "filling and T", "filling and entropy", "mu and entropy"])
def test_sensitivities_against_differences_of_new_solutions(setting):
    """Every output to every input, through the solved-for mu and T as well.

    With mu and T given 1e-8 relative to the largest of a row; else 3e-6, since the differences see the tolerance
    of the targets (1e-10) over the step (1e-4).
    """
    by_filling, by_entropy = "filling" in setting, "entropy" in setting

    def values(p):
        t, U, U12, y, w = p[0], p[1], p[2], p[3], p[4]
        where = {"filling": (y, 0.4)} if by_filling else {"mu": (y, y + 0.02)}
        heat = {"entropy": 0.4 + w} if by_entropy else {"T": 0.06 + w}
        mix = gutz.Mixture(t=(t, 1.2 * t), U=(U, 1.1 * U), U12=U12, n_max=N_MAX, dim=3, **where, **heat)
        sol = gutz.solve(mix)
        return jnp.concatenate([jnp.ravel(getattr(sol, name)) for name in (*OUTPUTS, "T", "mu")])

    p0 = np.array([0.05, 1.0, 0.5, 0.5, 0.0])
    steps = np.array([1e-4, 1e-3, 1e-3, 1e-3, 3e-4])
    exact = np.asarray(jax.jacfwd(values)(jnp.asarray(p0)))
    differences = np.stack([five_point(lambda p: np.asarray(values(p)), p0, i, steps[i]) for i in range(5)], -1)
    assert np.isfinite(exact).all()
    scale = np.abs(differences).max(-1, keepdims=True) + 1e-3
    bound = 1e-8 if setting == "mu and T" else 3e-6
    assert (np.abs(exact - differences) / scale).max() < bound


def test_second_derivatives_of_the_free_energy_at_generic_and_symmetric_points():
    def F(p):
        mix = gutz.Mixture(t=(p[0], p[1]), U=1.0, U12=p[2], mu=(p[3], p[4]), T=p[5], n_max=N_MAX)
        return gutz.solve(mix).free_energy

    generic = jnp.array([0.03, 0.04, 0.5, 0.4, 0.5, 0.06])
    symmetric = jnp.array([0.03, 0.03, 1.0, 0.5, 0.5, 0.06])
    normal = jnp.array([0.005, 0.005, 0.5, 0.25, 0.25, 0.05])
    for p in (generic, symmetric, normal):
        H = np.asarray(jax.hessian(F)(p))
        assert np.isfinite(H).all()
        np.testing.assert_allclose(H, H.T, atol=1e-9 * np.abs(H).max())
        for i in (0, 3, 5):
            column = five_point(lambda q: np.asarray(jax.grad(F)(jnp.asarray(q))), np.asarray(p), i, 1e-4)
            np.testing.assert_allclose(H[i], column, atol=2e-7 * np.abs(H).max())


def test_works_inside_jit_and_says_what_it_needs_there():
    f = jax.jit(lambda t: gutz.solve(gutz.Mixture(t=t, U=1.0, U12=0.5, mu=0.3, T=0.05, n_max=N_MAX)).free_energy)
    outside = gutz.solve(gutz.Mixture(t=0.04, U=1.0, U12=0.5, mu=0.3, T=0.05, n_max=N_MAX)).free_energy
    assert abs(float(f(0.04)) - float(outside)) < 1e-12
    with pytest.raises(InputError, match="n_max, mu and T must be given inside jax.jit"):
        jax.jit(lambda t: gutz.solve(gutz.Mixture(t=t, U=1.0, mu=0.3)).free_energy)(0.04)


def test_species_can_be_exchanged(solved):
    points, sol = solved
    some = {k: v[:8] for k, v in points.items()}
    swapped = some | {k: some[k][:, ::-1] for k in ("t", "U", "mu")}
    other = gutz.solve(mixture(swapped))
    np.testing.assert_allclose(other.free_energy, sol.free_energy[:8], atol=1e-12)
    np.testing.assert_allclose(other.filling[:, ::-1], sol.filling[:8], atol=1e-7)


def test_species_without_coupling_are_two_single_species():
    t, mu, T = np.linspace(0.0, 0.06, 8), np.linspace(-0.1, 1.3, 8), np.linspace(0.0, 0.2, 8)
    both = gutz.solve(gutz.Mixture(t=(t, t), U=(1.0, 0.8), U12=0.0, mu=(mu, mu[::-1]), T=T, n_max=N_MAX))
    alone = [
        gutz.solve(gutz.Mixture(t=t, U=U, mu=m, T=T, species=1, n_max=N_MAX)) for U, m in ((1.0, mu), (0.8, mu[::-1]))
    ]
    np.testing.assert_allclose(both.free_energy, alone[0].free_energy + alone[1].free_energy, atol=1e-12)
    ordered = np.abs(alone[0].order_parameter[:, 0]) > 1e-3
    np.testing.assert_allclose(both.order_parameter[ordered, 0], alone[0].order_parameter[ordered, 0], atol=1e-8)


def test_hard_core_particle_hole_symmetry():
    """n -> 1 - n of both species maps mu_a to U12 - mu_a and shifts F by U12 - mu_1 - mu_2."""
    t, U12, mu = np.linspace(0.01, 0.2, 8), np.linspace(-1, 1, 8), np.linspace(-0.5, 0.7, 8)
    a = gutz.solve(gutz.Mixture(t=t, U=1.0, U12=U12, mu=(mu, 0.3), T=0.1, n_max=1))
    b = gutz.solve(gutz.Mixture(t=t, U=1.0, U12=U12, mu=(U12 - mu, U12 - 0.3), T=0.1, n_max=1))
    np.testing.assert_allclose(a.free_energy, b.free_energy + U12 - mu - 0.3, atol=1e-12)
    np.testing.assert_allclose(a.filling, 1 - b.filling, atol=1e-8)


def test_free_energy_is_concave_in_temperature_and_chemical_potential():
    T = np.linspace(0.01, 0.5, 128)
    F = gutz.solve(gutz.Mixture(t=0.03, U=1.0, U12=0.5, mu=0.3, T=T, n_max=N_MAX)).free_energy
    assert np.diff(F, 2).max() < 1e-12
    mu = np.linspace(-0.5, 2.0, 128)
    F = gutz.solve(gutz.Mixture(t=0.03, U=1.0, U12=0.5, mu=mu, T=0.1, n_max=N_MAX)).free_energy
    assert np.diff(F, 2).max() < 1e-12


def test_atomic_limit_is_the_single_site_partition_function():
    mu, T, U12 = 0.7, 0.3, 0.4
    sol = gutz.solve(gutz.Mixture(t=0.0, U=(1.0, 1.2), U12=U12, mu=mu, T=T, n_max=N_MAX))
    n = np.arange(N_MAX + 1)
    a, b = np.meshgrid(n, n, indexing="ij")
    E = a * (a - 1) / 2 + 0.6 * b * (b - 1) + U12 * a * b - mu * (a + b)
    Z_site = np.exp(-E / T).sum()
    assert abs(float(sol.free_energy) + T * np.log(Z_site)) < 1e-14
    assert abs(float(sol.filling[0]) - (a * np.exp(-E / T)).sum() / Z_site) < 1e-14


def test_batches_of_any_size_and_order_agree(solved):
    points, sol = solved
    order = np.random.default_rng(0).permutation(256)
    shuffled = gutz.solve(mixture({k: v[order] for k, v in points.items()}))
    np.testing.assert_array_equal(shuffled.free_energy, sol.free_energy[order])
    again = gutz.solve(mixture(points))
    for name in VARIABLES:
        if name in sol.outputs:
            np.testing.assert_array_equal(again.outputs[name], sol.outputs[name])
    single = gutz.solve(mixture({k: v[:1] for k, v in points.items()}))
    assert abs(float(single.free_energy[0]) - float(sol.free_energy[0])) <= 1e-13 * (1 + abs(sol.free_energy[0]))


def test_every_output_is_double_precision(solved):
    _, sol = solved
    for name, value in sol.outputs.items():
        assert value.dtype == np.dtype(VARIABLES[name].dtype), name


def test_thread_started_elsewhere_computes_in_double_precision():
    found = []
    mix = gutz.Mixture(t=0.04, U=1.0, U12=0.5, mu=0.3, T=0.05, n_max=N_MAX)
    worker = threading.Thread(target=lambda: found.append(gutz.solve(mix).free_energy.dtype))
    worker.start()
    worker.join()
    assert found == [np.float64]


def test_single_precision_is_refused():
    mix = gutz.Mixture(t=0.04, U=1.0, U12=0.5, mu=0.3, T=0.05, n_max=N_MAX)
    with jax.enable_x64(False), pytest.raises(InputError, match="64-bit"):
        gutz.solve(mix)


def test_a_scan_compiles_once(caplog):
    # Which stages run depends on the points (one more descent only where a species orders alone), so a few batches
    # go first; five more must then find everything compiled.
    for seed in range(13, 19):
        gutz.solve(mixture(random_points(256, seed)))
    with jax.log_compiles(), caplog.at_level("WARNING", logger="jax"):
        for seed in range(19, 24):
            gutz.solve(mixture(random_points(256, seed)))
    assert [record.message for record in caplog.records if "compil" in record.message.lower()] == []


def test_fillings_are_met_and_plateaus_centred():
    t = np.array([0.01, 0.02, 0.04])
    sol = gutz.solve(gutz.Mixture(t=t, U=1.0, filling=1.0, species=1, dim=3, n_max=6))
    np.testing.assert_allclose(sol.filling[:, 0], 1.0, atol=1e-9)
    # Mean-field lobe of z t: mu± = (1 - zt ± sqrt(1 - 6 zt + zt²))/2, so its middle is (1 - zt)/2.
    np.testing.assert_allclose(sol.mu[:2, 0], (1 - 6 * t[:2]) / 2, atol=1e-6)
    assert list((sol.status & int(Status.PLATEAU)) > 0) == [True, True, False]
    two = gutz.solve(gutz.Mixture(t=t, U=1.0, U12=0.5, filling=(0.5, 0.3), T=0.05, dim=3, n_max=N_MAX))
    np.testing.assert_allclose(two.filling, [[0.5, 0.3]] * 3, atol=1e-9)
    np.testing.assert_allclose(two.T, 0.05, rtol=0)


def test_entropy_is_met_by_the_temperature():
    kind = {"U": 1.0, "U12": 0.5, "dim": 3, "n_max": N_MAX}
    by_mu = gutz.solve(gutz.Mixture(t=0.04, mu=0.3, entropy=0.4, **kind))
    by_filling = gutz.solve(gutz.Mixture(t=0.04, filling=(0.5, 0.3), entropy=0.4, **kind))
    for sol in (by_mu, by_filling):
        assert abs(float(sol.entropy_per_particle) - 0.4) < 1e-9
        assert int(sol.status) & ~int(Status.CUTOFF) == 0
    direct = gutz.solve(gutz.Mixture(t=0.04, mu=0.3, T=float(by_mu.T), **kind))
    assert abs(float(direct.entropy_per_particle) - 0.4) < 1e-9
    cold = gutz.solve(gutz.Mixture(t=0.04, mu=0.3, entropy=0.0, **kind))
    assert float(cold.T) == 0


def test_an_entropy_below_that_of_free_spins_cannot_be_met_by_the_product_ansatz():
    """Deep in the insulator the two species are free spins: k_B ln 2 per site down to T = 0."""
    sol = gutz.solve(gutz.Mixture(t=0.002, U=1.0, U12=0.5, mu=0.25, entropy=0.4, dim=3, n_max=N_MAX))
    assert int(sol.status) & int(Status.ENTROPY_UNREACHABLE)


def test_a_filling_inside_a_jump_is_reported():
    """U12 > U in the superfluid: equal fillings do not exist, the species separate."""
    mix = gutz.Mixture(t=0.06, U=1.0, U12=1.5, filling=(0.6, 0.6), T=0.02, dim=3, n_max=N_MAX)
    sol = gutz.solve(mix)
    assert int(sol.status) & int(Status.FILLING_GAP)
    assert sol.phase == gutz.Phase.SEPARATED
    assert not sol.trusted


def test_remarks_for_collapse_cutoff_degeneracy_and_demixing():
    mix = gutz.Mixture(t=0.002, U=1.0, U12=np.array([-1.5, 0.5, 1.5]), mu=0.2, T=0.0, n_max=N_MAX)
    sol = gutz.solve(mix)
    assert sol.status[0] == Status.COLLAPSE
    assert sol.phase[0] == gutz.Phase.COLLAPSE
    assert np.isnan(sol.free_energy[0])
    assert sol.status[1] & Status.DEGENERATE
    assert sol.status[2] & Status.DEMIXING
    assert any("collapses" in line for line in sol.remarks())
    crowded = gutz.solve(gutz.Mixture(t=0.2, U=1.0, U12=0.5, mu=2.0, T=0.5, n_max=N_MAX))
    assert crowded.status & Status.CUTOFF
    with pytest.raises(InputError, match="U12 is -2; it must be at least"):
        gutz.Mixture(t=0.02, U=1.0, U12=-2.0, mu=0.2)


def test_automatic_cutoff_removes_the_cutoff_error():
    """T ~ U: with n_max = 3 the filling is a per cent off, and the automatic cutoff says what it used."""
    kind = {"t": 0.02, "U": 1.0, "mu": 0.5, "T": 1.0, "species": 1, "dim": 3}
    few, enough = gutz.solve(gutz.Mixture(n_max=3, **kind)), gutz.solve(gutz.Mixture(**kind))
    many = gutz.solve(gutz.Mixture(n_max=20, **kind))
    assert few.status & Status.CUTOFF
    assert enough.status == 0
    assert enough.n_max > 3
    assert abs(float(few.filling[0] - many.filling[0])) > 0.01
    assert abs(float(enough.filling[0] - many.filling[0])) < 1e-5


def test_checkerboard_superlattice():
    """Atomic limit per sublattice at t = 0; with hopping the bound and the densities of both kinds of site."""
    kind = {"U": 1.0, "mu": 0.4, "T": 0.1, "species": 1, "n_max": 2, "dim": 1}
    offset = np.array([0.3, 0.6])
    atoms = gutz.solve(gutz.Mixture(t=0.0, offset=offset, **kind))
    n = np.arange(3)

    def site(mu):
        return -0.1 * np.log(np.exp(-(n * (n - 1) / 2 - mu * n) / 0.1).sum())

    expected = [(site(0.4 + d / 2) + site(0.4 - d / 2)) / 2 for d in offset]
    np.testing.assert_allclose(atoms.free_energy, expected, atol=1e-14)
    moving = gutz.solve(gutz.Mixture(t=0.3, offset=offset, **kind))
    assert np.all(moving.staggering[:, 0] > 0.01)
    assert np.all(moving.condensate[:, 0] > 0.01)
    for i, d in enumerate(offset):
        slope = np.array([0.4 + d / 2, 0.4 - d / 2] * 2)
        model = LatticeModel(ring(4), t=(0.3,), U=(1.0,), U12=0.0, mu=(slope,), n_max=2)
        assert moving.free_energy[i] >= ed.thermal(model, 0.1).free_energy / 4 - 1e-12
    tiny = gutz.solve(gutz.Mixture(t=0.3, offset=1e-9, **kind))
    uniform = gutz.solve(gutz.Mixture(t=0.3, **kind))
    assert abs(float(tiny.free_energy) - float(uniform.free_energy)) < 1e-12
    np.testing.assert_allclose(tiny.condensate, uniform.condensate, atol=1e-7)
