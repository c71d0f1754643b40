"""The dressed functional and the states it gives: exact limits, symmetries, and what must never happen.

Energies in units of U unless stated. Everything two-species runs through one compiled shape where it can.
"""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from gutz import precision  # noqa: F401
from gutz.ansatz import bond, derived, dressed, evaluate, selection
from gutz.ansatz.families import DRESSING_LARGE, Family
from gutz.model import Mixture
from gutz.status import Status

pytestmark = pytest.mark.slow  # compiling, not computing

N_MAX = 2
COLD_T = 1e-4


def solve(mixture, n_max=N_MAX, sublattices=1):
    return selection.minimise(mixture, mixture.mu, mixture.T, n_max, sublattices)


def observe(mixture, state, n_max=N_MAX):
    return derived.observables(mixture, mixture.mu, mixture.T, n_max, 1, state)


def two_site_levels(t, U, U12):
    """Exact energies of two sites with one atom of each species, by diagonalising 4 states (plain numpy)."""
    a = np.kron(np.array([[0, -t], [-t, 0]]), np.eye(2))
    b = np.kron(np.eye(2), np.array([[0, -t], [-t, 0]]))
    return np.linalg.eigvalsh(a + b + np.diag([U12, 0, 0, U12]))


@pytest.fixture(scope="module")
def mixtures():
    """16 points: an anti-pair line, a pair line, resonances, exact degeneracies, exchanged species."""
    t1 = [0.01, 0.018, 0.022, 0.05, 0.01, 0.02, 0.02, 0.03, 0.02, 0.02, 0.02, 0.03, 0.015, 0.02, 0.02, 0.02]
    t2 = [0.01, 0.018, 0.022, 0.05, 0.01, 0.02, 0.02, 0.03, 0.02, 0.02, 0.03, 0.02, 0.015, 0.02, 0.02, 0.02]
    U12 = [0.5, 0.5, 0.5, 0.5, -0.5, 0.0, 1e-6, -0.95, 1.0, 1.2, 0.4, 0.4, 0.5, 0.5, -0.5, 0.3]
    mu1 = [0.25, 0.25, 0.25, 0.25, -0.2512, 0.0, 0.0, -0.5, 0.5, 0.6, 0.3, 0.35, 0.25, 0.5, -0.25, 0.3]
    mu2 = [0.25, 0.25, 0.25, 0.25, -0.2512, 0.0, 0.0, -0.5, 0.5, 0.6, 0.35, 0.3, 0.25, 1.0, -0.25, 0.3]
    T = [COLD_T] * 12 + [0.2, 0.01, 0.003, 1e-4]
    mixture = Mixture(
        t=(np.array(t1), np.array(t2)), U=1.0, U12=np.array(U12), mu=(np.array(mu1), np.array(mu2)), T=np.array(T)
    )
    state = solve(mixture)
    return mixture, state, observe(mixture, state)


def test_nothing_is_nan_and_everything_is_accounted_for(mixtures):
    _, state, seen = mixtures
    everything = (*state._asdict().items(), *state.look._asdict().items(), *seen._asdict().items())
    for name, value in everything:
        if name not in ("energies", "look"):  # inf there means: this family is not acceptable
            assert np.isfinite(value).all(), name
    assert not (state.status & int(Status.NOT_FINITE)).any()
    large = state.dressing > DRESSING_LARGE
    assert (large == ((state.status & int(Status.DRESSING_LARGE)) != 0)).all()


def test_antipair_order_equals_second_order_spin_half(mixtures):
    """F = -(z/2) 2t² (1/U12 + 1/U) - mu in the product state of spins 1/2; levels -2t²/... of two sites are exact."""
    mixture, state, seen = mixtures
    assert state.family[0] == Family.ANTIPAIR
    t, U12, mu = 0.01, 0.5, 0.25
    assert state.free_energy[0] == pytest.approx(-3 * 2 * t**2 * (1 / U12 + 1.0) - mu, abs=2e-6)
    assert state.antipair[0] == pytest.approx(0.5, abs=1e-3)
    # The same exchange energy from exact levels of two sites: -4t²/U12 of the bonding state, to order t⁴.
    assert two_site_levels(t, 1.0, U12)[0] == pytest.approx(-4 * t**2 / U12, rel=2e-3)


def test_antipair_order_gives_way_to_the_superfluid(mixtures):
    """zt/U = 0.12 at U12 = 0.5 U (own computation)."""
    _, state, _ = mixtures
    assert state.family[:4].tolist() == [Family.ANTIPAIR, Family.ANTIPAIR, Family.SINGLE, Family.SINGLE]
    assert state.softness[0] > state.softness[1] > 0
    assert (state.phi[2:4] > 0.1).all()


def test_drag_by_phase(mixtures):
    """Rank one along (1, -1) in the counterflow and along (1, 1) in the paired superfluid (exact)."""
    _, state, seen = mixtures
    counter = seen.stiffness[0, :, :, 0]
    assert counter == pytest.approx(counter[0, 0] * np.array([[1, -1], [-1, 1]]), rel=1e-8)
    assert counter[0, 0] > 0
    assert state.family[4] == Family.PAIR
    paired = seen.stiffness[4, :, :, 0]
    assert paired == pytest.approx(paired[0, 0] * np.ones((2, 2)), rel=1e-8)
    assert paired[0, 0] > 0
    assert seen.stiffness[3, 0, 0, 0] > 0.01  # superfluid
    assert seen.stiffness[5, 0, 1, 0] == pytest.approx(0.0, abs=1e-9)  # U12 = 0: no drag


def test_species_exchange(mixtures):
    _, state, seen = mixtures
    assert state.free_energy[10] == pytest.approx(state.free_energy[11], abs=1e-11)
    assert seen.filling[10] == pytest.approx(seen.filling[11, ::-1], abs=1e-7)
    assert seen.stiffness[10] == pytest.approx(seen.stiffness[11, ::-1, ::-1], abs=1e-7)


def test_responses_agree_with_differences_of_whole_solutions(mixtures):
    """Filling and compressibility from solving again at shifted mu (an independent route to both)."""
    mixture, state, seen = mixtures
    e = 1e-4
    for a in range(2):
        shift = np.array([e, 0.0] if a == 0 else [0.0, e])
        up, down = (solve(mixture.replace(mu=mixture.mu + s * shift)) for s in (1, -1))
        slope = -(up.free_energy - down.free_energy) / (2 * e)
        smooth = [3, 10, 11, 12]
        assert slope[smooth] == pytest.approx(seen.filling[smooth, a], abs=2e-6)
        fillings = (up.filling - down.filling).mean(1) / (2 * e)
        assert fillings[smooth] == pytest.approx(seen.compressibility[smooth, :, a], rel=1e-3, abs=2e-4)


def test_hard_core_duality():
    """Particle-hole exchange of species 2 maps U12 to -U12, mu to (mu1 - U12, -mu2): F shifts by mu2 (exact)."""
    U12, mu, T = 0.7, np.array([0.35, 0.35]), 0.003
    mixture = Mixture(
        t=(0.02, 0.03), U=1.0, U12=np.array([U12, -U12]),
        mu=(np.array([mu[0], mu[0] - U12]), np.array([mu[1], -mu[1]])),
        T=T, n_max=1,
    )  # fmt: skip
    state = solve(mixture, n_max=1)
    assert state.family.tolist() == [Family.ANTIPAIR, Family.PAIR]
    assert state.free_energy[0] == pytest.approx(state.free_energy[1] - mu[1], abs=1e-10)
    assert state.antipair[0] == pytest.approx(state.pair[1], abs=1e-8)
    assert state.dressing[0] == pytest.approx(state.dressing[1], abs=1e-10)


def test_staggered_order_on_two_sublattices():
    """Hard cores, half filling each. z-Néel: F = -mu - (z/2)(t1² + t2²)/U12, up to fourth order in the hopping (exact
    levels of two sites); checkerboard of pairs by duality; for equal species Néel equals counterflow (SU(2))."""
    t1, t2 = np.array([0.03, 0.02, 0.03]), np.array([0.004, 0.02, 0.004])
    U12 = np.array([1.0, 0.5, -1.0])
    mixture = Mixture(t=(t1, t2), U=1.0, U12=U12, mu=0.5 * U12, T=1e-4, n_max=1)
    two, one = solve(mixture, 1, 2), solve(mixture, 1, 1)
    exchange = 3 * (t1**2 + t2**2) / np.abs(U12)
    error = two.free_energy - (-exchange - np.where(U12 > 0, 0.5 * U12, 0.0))
    assert (np.abs(error) < exchange**2 / np.abs(U12)).all()
    assert (two.family == Family.NORMAL).all()
    staggering = 0.5 * (two.filling[:, 0] - two.filling[:, 1])
    assert np.abs(staggering) == pytest.approx(0.5, abs=1e-3)
    assert (staggering[:2].prod(-1) < 0).all()
    assert staggering[2].prod() > 0
    assert one.family.tolist() == [Family.ANTIPAIR, Family.ANTIPAIR, Family.PAIR]
    assert (one.free_energy[[0, 2]] > two.free_energy[[0, 2]]).all()
    assert one.free_energy[1] == pytest.approx(two.free_energy[1], abs=1e-9)


def test_deep_superfluid_is_the_coherent_state():
    """Without interactions the product of coherent states is exact: F -> -(mu + zt)²/(2U) as U -> 0."""
    U = np.array([0.05, 0.5])
    mixture = Mixture(t=1.0, U=U, mu=-5.8, T=0.0, species=1)
    state = solve(mixture, n_max=14)
    assert (state.family == Family.SINGLE).all()
    assert (state.status == 0).all()
    assert state.dressing[0] < 0.03
    # Bogoliubov corrections are of order U^(3/2); the Gross-Pitaevskii energy is the limit.
    assert state.free_energy[0] == pytest.approx(-(0.2**2) / (2 * U[0]), rel=0.05)


def test_fallback_only_where_second_order_makes_no_sense():
    """Hard-core bosons at exact half filling: no dressed state for T well below t; one above."""
    T = np.array([0.05, 0.1, 0.6, 1.5, 2.5])
    state = solve(Mixture(t=1.0, U=0.0, mu=0.0, T=T, species=1, n_max=1), n_max=1)
    fell = (state.status & int(Status.FALLBACK)) != 0
    assert fell.tolist() == [True, True, False, False, False]
    assert state.family.tolist() == [Family.SINGLE] * 4 + [Family.NORMAL]
    assert state.filling[:, 0, 0] == pytest.approx(0.5, abs=1e-9)


def test_zero_hopping_is_the_atomic_limit():
    mixture = Mixture(t=0.0, U=1.0, U12=0.6, mu=0.3, T=np.array([0.0, 0.1]))
    state = solve(mixture)
    f = bond.frame(N_MAX, 2, "full")
    n = f.number
    energy = 0.5 * (n * (n - 1)).sum(0) + 0.6 * n[0] * n[1] - 0.3 * n.sum(0)
    assert state.free_energy[1] == pytest.approx(-0.1 * np.log(np.exp(-energy / 0.1).sum()), abs=1e-12)
    assert state.free_energy[0] == pytest.approx(energy.min(), abs=1e-12)


def test_first_derivatives_by_jax():
    """The gradient that the minimiser uses equals jax's, on two sublattices with every field on."""
    rng = np.random.default_rng(3)
    mixture = Mixture(t=(0.02, 0.03), U=(1.0, 1.1), U12=0.6, mu=(0.3, 0.35), T=np.array([0.05]))
    p = dressed.sites(mixture, jnp.asarray(mixture.mu), jnp.asarray(mixture.T), N_MAX, 2)
    x = jnp.asarray(0.05 * rng.normal(size=(1, 2, 6)))
    f, names = bond.frame(N_MAX, 2, "full"), dressed.NAMES[2]
    at = evaluate.look(evaluate.numbers(p), np.asarray(x), np.ones(1), f=f, names=names, cold=False, nodes=64)

    def F(x, energy, T):
        q = p._replace(energy=energy, T=T)
        return dressed.free_energy(q, x, jnp.ones(1), f=f, names=names, cold=False, nodes=64).sum()

    value, (in_x, in_energy, in_T) = jax.value_and_grad(F, argnums=(0, 1, 2))(x, p.energy, p.T)
    assert value == pytest.approx(float(at.free_energy[0]), abs=1e-14)
    assert np.asarray(in_x) == pytest.approx(np.asarray(at.gradient), abs=1e-12)
    assert np.asarray(in_energy) == pytest.approx(np.asarray(at.in_energy), abs=1e-12)
    assert np.asarray(in_T) == pytest.approx(np.asarray(at.in_T), abs=1e-11)
