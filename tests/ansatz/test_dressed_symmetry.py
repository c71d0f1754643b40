"""The dressed functional against explicit sums over directions, and the symmetries its states must have.

Energies in units of U. Symmetries are exact, so their tolerances are those of the minimiser.
"""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from test_bond import double_sum

from gutz import precision  # noqa: F401
from gutz.ansatz import bond, derived, dressed, evaluate, selection
from gutz.ansatz.families import Family
from gutz.model import Mixture
from gutz.status import Status

ORDERED = ("J1", "J2", "K", "M", "nu1", "nu2")


def looked_at(mixture, x, n_max, kind="full", names=ORDERED):
    """One evaluation of the functional."""
    sublattices = x.shape[1]
    p = evaluate.numbers(dressed.sites(mixture, mixture.mu, mixture.T, n_max, sublattices))
    cold = bool(np.all(mixture.T == 0))
    return evaluate.look(p, x, np.ones(len(x)), f=bond.frame(n_max, 2, kind), names=names, cold=cold)


def brute_force(mixture, x, n_max):
    """F1 + sum over directions of the bond term of two sites with the hoppings of that direction (plain numpy)."""
    f = bond.frame(n_max, 2, "full")
    t, U, mu, T = (np.asarray(v)[0] for v in (mixture.t, mixture.U, mixture.mu, mixture.T))
    n = f.number
    energy = (0.5 * U[:, None] * n * (n - 1) - mu[:, None] * n).sum(0) + float(mixture.U12[0]) * n[0] * n[1]
    hs, local, phis = [], [], []
    for row in x[0]:
        h = np.diag(energy) - sum(v * f.fields[name] for v, name in zip(row, ORDERED, strict=True))
        E, V = np.linalg.eigh(h)
        P = np.exp(-(E - E[0]) / T) if T > 0 else np.eye(len(E))[0]
        rho = (V * (P / P.sum())) @ V.T
        trial = E[0] - T * np.log(P.sum()) if T > 0 else E[0]
        local.append(trial + np.sum(rho * (np.diag(energy) - h)))
        phis.append([np.sum(rho * b) for b in f.lower])
        hs.append(h)
    first = np.mean(local) - sum(2 * t[a].sum() * phis[0][a] * phis[-1][a] for a in range(2))
    return first + sum(double_sum(hs[0], hs[-1], t[:, d], f.lower, T) for d in range(t.shape[1]))


@pytest.mark.parametrize("T", [0.0, 0.03])
@pytest.mark.parametrize("sublattices", [1, 2])
@pytest.mark.parametrize("t", [((0.02, 0.05), (0.03, 0.01)), ((0.05, 0.01, 0.0), (0.02, 0.01, 0.03))])
def test_the_bond_term_is_a_sum_over_directions(t, sublattices, T):
    """Tubes, planes and the cube between them: every direction with its own hoppings, cross terms t_1 t_2 included."""
    mixture = Mixture(
        t=t, U=(1.0, 1.2), U12=np.array([0.6]), mu=(0.4, 0.5), T=np.array([T]), dim=len(t[0]), species=2
    )  # fmt: skip
    x = 0.1 * np.random.default_rng(5).normal(size=(1, sublattices, 6))
    assert looked_at(mixture, x, 2).free_energy[0] == pytest.approx(brute_force(mixture, x, 2), rel=1e-10)


def test_equal_interactions_make_the_pseudo_spin_isotropic():
    """U1 = U2 = U12, equal hoppings: counterflow along x and polarisation along z are one state, turned (SU(2))."""
    mixture = Mixture(t=0.02, U=1.0, U12=1.0, mu=0.4, T=np.array([0.004, 0.004]), dim=3)
    x = np.zeros((2, 1, 6))
    x[0, 0, 3] = 0.01
    x[1, 0, 4:] = 0.01, -0.01
    at = looked_at(mixture, x, 3)
    assert at.free_energy[0] == pytest.approx(at.free_energy[1], abs=1e-12)
    assert at.mean[0, 0, 3] == pytest.approx(at.mean[1, 0, 4] - at.mean[1, 0, 5], rel=1e-9)
    assert at.gradient[0, 0, 3] == pytest.approx(at.gradient[1, 0, 4] - at.gradient[1, 0, 5], abs=1e-11)


def solved(mixture, n_max):
    return selection.minimise(mixture, mixture.mu, mixture.T, n_max, 1)


@pytest.mark.slow
@pytest.mark.parametrize(("U12", "mu"), [(0.5, 0.4), (0.5, 0.25)])
def test_coherence_of_every_direction_is_a_slope(U12, mu):
    """<b†_ia b_ja> = -1/2 dF/dt of that species and direction, from solving again: superfluid and counterflow."""
    t0 = np.array([[0.05, 0.02, 0.04], [0.04, 0.045, 0.02]]) * (1.0 if mu > 0.3 else 0.3)
    e = 1e-4 * t0.max()
    kicks = np.concatenate([[np.zeros((2, 3))], *([s * e * k for s in (1, -1)] for k in np.eye(6).reshape(6, 2, 3))])
    mixture = Mixture(t=0.02, U=1.0, U12=np.full(13, U12), mu=mu, T=5e-4, dim=3).replace(t=t0 + kicks)
    state = solved(mixture, 2)
    assert (state.family == (Family.SINGLE if mu > 0.3 else Family.ANTIPAIR)).all()
    found = derived.observables(mixture, mixture.mu, mixture.T, 2, 1, state)
    slopes = -(state.free_energy[1::2] - state.free_energy[2::2]) / (4 * e)
    assert found.coherence[0].ravel() == pytest.approx(slopes, rel=1e-6, abs=1e-9)


@pytest.mark.slow
def test_antipair_order_gives_way_where_it_did():
    """zt/U = 0.12 at U12 = 0.5 U and 0.18 at 0.9 U, z = 6, T -> 0 (own computation), continuous."""
    zt = np.array([0.11, 0.13, 0.17, 0.19] * 4)
    U12 = np.array([0.5, 0.5, 0.9, 0.9] * 4)
    state = solved(Mixture(t=zt / 6, U=1.0, U12=U12, mu=0.5 * U12, T=1e-4), 2)
    assert state.family[:4].tolist() == [Family.ANTIPAIR, Family.SINGLE] * 2
    assert (np.abs(state.antipair[:4, 0]) > 0.4).all()  # the relative phase stays ordered across the boundary


NUMBERS = st.floats(0.0, 1.0)
EIGHT = st.lists(st.tuples(*[NUMBERS] * 6), min_size=8, max_size=8)
FEW = settings(max_examples=6, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))


def drawn(rows):
    """Eight points over both signs of U12, lobes and superfluid, T from 0.005 to 0.1."""
    t1, t2, U12, mu1, mu2, T = np.array(rows).T
    t = 0.01 + 0.03 * np.stack([t1, t2])
    return t, 1.4 * U12 - 0.6, np.stack([0.7 * mu1 - 0.2, 0.7 * mu2 - 0.2]), 0.005 * 20**T


def alike(state, here, there, shift):
    """Equal free energies wherever both are more than qualitative."""
    fine = ((state.status[here] | state.status[there]) & int(Status.FALLBACK | Status.DRESSING_LARGE)) == 0
    assert state.free_energy[here][fine] == pytest.approx((state.free_energy[there] + shift)[fine], abs=1e-9)
    return fine


@pytest.mark.slow
@FEW
@given(EIGHT)
def test_names_of_the_species_do_not_matter(rows):
    t, U12, mu, T = drawn(rows)
    both = [np.concatenate([v, v[::-1]], -1) for v in (t, mu)]
    mixture = Mixture(t=tuple(both[0]), U=1.0, U12=np.tile(U12, 2), mu=tuple(both[1]), T=np.tile(T, 2))
    state = solved(mixture, 2)
    here, there = slice(0, 8), slice(8, 16)
    fine = alike(state, here, there, 0.0)
    assert (state.family[here] == state.family[there])[fine].all()


@pytest.mark.slow
@FEW
@given(EIGHT)
def test_particles_and_holes_of_hard_cores(rows):
    """Exchanging them in species 2 maps U12 to -U12, pairs to anti-pairs and F to F + mu_2 (exact)."""
    t, U12, mu, T = drawn(rows)
    here, there = slice(0, 8), slice(8, 16)
    mixture = Mixture(
        t=tuple(np.tile(t, 2)), U=1.0, U12=np.concatenate([U12, -U12]),
        mu=(np.concatenate([mu[0], mu[0] - U12]), np.concatenate([mu[1], -mu[1]])), T=np.tile(T, 2), n_max=1,
    )  # fmt: skip
    state = solved(mixture, 1)
    fine = alike(state, here, there, -mu[1])
    turned = np.array([Family.NORMAL, Family.SINGLE, Family.ANTIPAIR, Family.PAIR])
    assert (turned[state.family[here]] == state.family[there])[fine].all()
    assert state.antipair[here][fine] == pytest.approx(state.pair[there][fine], abs=1e-5)
