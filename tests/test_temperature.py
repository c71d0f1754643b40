"""Critical temperatures of pairs and anti-pairs: the functional against sums and exact spins, and laws."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.linalg import eigh, expm
from scipy.optimize import brentq

from gutz import pseudospin
from gutz.errors import InputError
from gutz.model import Mixture
from gutz.phases import Phase
from gutz.status import Status
from gutz.temperature import Reason, critical_temperature

SX = np.array([[0.0, 0.5], [0.5, 0.0]])
SZ = np.diag([0.5, -0.5])
PLUS = np.array([[0.0, 1.0], [0.0, 0.0]])
ONE = np.eye(2)
ONSET = jax.jit(pseudospin.onset)


def xxz(delta, perp=1.0, field=0.0):
    flip = 0.5 * (np.kron(PLUS, PLUS.T) + np.kron(PLUS.T, PLUS))
    return delta * np.kron(SZ, SZ) - perp * flip + field * (np.kron(SZ, ONE) + np.kron(ONE, SZ))


# --- the functional -----------------------------------------------------------------------------------------


def plain_terms(bond, kappa):
    """Entropy, <B> and int <V(s) V> ds of one direction by double sums over levels (numpy, no quadrature)."""
    rho, entropy = [], 0.0
    for k in kappa:
        weight = expm(k[0] * SX + k[1] * SZ)
        rho.append(weight / np.trace(weight))
        p = np.linalg.eigvalsh(rho[-1])
        entropy -= 0.5 * (p * np.log(p)).sum()
    B = bond.reshape(2, 2, 2, 2)
    second = np.einsum("abcd,ca->bd", B, rho[0])
    first = np.einsum("abcd,db->ac", B, rho[1])
    mean = np.trace(first @ rho[0])
    V = bond - np.kron(first, ONE) - np.kron(ONE, second) + mean * np.eye(4)
    P, vectors = np.linalg.eigh(np.kron(*rho))
    total = 0.0
    for i in range(4):
        for j in range(4):
            element = vectors[:, i] @ V @ vectors[:, j]
            x = np.log(P[i] / P[j])
            total += element**2 * (P[i] if abs(x) < 1e-9 else (P[i] - P[j]) / x)
    return entropy, mean, total


@pytest.mark.parametrize("seed", range(4))
def test_terms_against_sums_over_levels(seed):
    rng = np.random.default_rng(seed)
    bond = xxz(rng.uniform(-2, 2), field=rng.normal())
    kappa = rng.normal(size=(2, 2)) * 3.0
    ours = jax.jit(pseudospin.functional)(jnp.asarray(bond)[None], jnp.asarray(kappa))
    np.testing.assert_allclose(ours[:3], plain_terms(bond, kappa), rtol=1e-9, atol=1e-12)


def exact_inverse_susceptibility(bond, beta, m):
    """1/chi_xx of two exact spins over that of free ones, at the field that gives <Sz> = m."""

    def levels(kappa):
        return eigh(beta * bond - kappa * (np.kron(SZ, ONE) + np.kron(ONE, SZ)))

    def imbalance(kappa):
        E, v = levels(kappa)
        P = np.exp(E.min() - E)
        return (P / P.sum()) @ np.einsum("ij,ij->j", v, np.kron(SZ, ONE) @ v) - m

    E, v = levels(brentq(imbalance, -20, 20, xtol=1e-15) if m else 0.0)
    P = np.exp(E.min() - E)
    P /= P.sum()
    X = v.T @ (np.kron(SX, ONE) + np.kron(ONE, SX)) @ v
    gap = E[:, None] - E[None, :]
    close = np.abs(gap) < 1e-10
    kernel = np.where(close, P[:, None], (P[None, :] - P[:, None]) / np.where(close, 1.0, gap))
    free = m / (2 * np.arctanh(2 * m)) if m else 0.25
    return free / (0.5 * (X**2 * kernel).sum())


@pytest.mark.parametrize("delta", [-1.0, -0.5, 0.0, 0.5, 1.0, 2.0])
@pytest.mark.parametrize("m", [0.0, 0.3])
def test_curvature_against_two_exact_spins(delta, m):
    """Half a bond per site: 1 - a beta/2 + b beta²/2 is exact up to beta³ (error ladder, slope 3)."""
    o = ONSET(jnp.asarray(xxz(delta))[None], jnp.asarray(m))
    errors = []
    for beta in (0.2, 0.1):
        ours = 1 - 0.5 * float(o.slope[0]) * beta + 0.5 * float(o.curvature[0]) * beta**2
        errors.append(abs(ours - exact_inverse_susceptibility(xxz(delta), beta, m)))
    # Where the third order vanishes by symmetry, the slope is 4.
    assert errors[0] < 2e-3
    assert np.log2(errors[0] / errors[1]) > 2.8


def test_curvature_against_the_published_series():
    """Ferromagnet, simple cubic: chi = 1 + 3K + 6K² + ..., K = J/2T here (Baker, Gilbert, Eve and Rushbrooke, Phys.
    Rev. 164, 800 (1967), from memory), so 1/chi = 1 - 3K + 3K²."""
    o = ONSET(jnp.stack([jnp.asarray(xxz(-1.0))] * 3), jnp.asarray(0.0))
    assert float(o.slope[0]) == pytest.approx(3 / 2, rel=1e-12)
    assert float(o.curvature[0]) == pytest.approx(3 / 4, rel=1e-10)


def test_entropy_against_two_exact_spins():
    """Half a bond per site: S = S0 - E2/(2T²) + third/(3T³) is exact up to 1/T⁴."""
    o = ONSET(jnp.asarray(xxz(-1.0))[None], jnp.asarray(0.0))
    errors = []
    for T in (20.0, 40.0):
        p = np.exp(-np.linalg.eigvalsh(xxz(-1.0)) / T)
        p /= p.sum()
        exact = -0.5 * (p * np.log(p)).sum()
        ours = float(o.entropy) - 0.25 * float(o.second) / T**2 + float(o.third) / (6 * T**3)
        errors.append(abs(ours - exact))
    assert np.log2(errors[0] / errors[1]) == pytest.approx(4.0, abs=0.2)


# --- extrapolation, spin waves, chains ----------------------------------------------------------------------


@pytest.mark.parametrize("gamma", [1.24, 1.32, 1.75])
@pytest.mark.parametrize("B", [0.0, 0.2, -0.05])
def test_extrapolation_is_exact_for_its_own_form(gamma, B):
    """1/chi = (1 - A x)^gamma / (1 + B x) expanded by hand to x²."""
    A = 0.7
    a = gamma * A + B
    b = gamma * (gamma - 1) / 2 * A**2 + gamma * A * B + B**2
    assert float(pseudospin.extrapolated(jnp.asarray(a), jnp.asarray(b), jnp.asarray(gamma))) == pytest.approx(A)
    assert float(pseudospin.extrapolated(jnp.asarray(-a), jnp.asarray(b), jnp.asarray(gamma))) == 0.0


def test_plain_root_or_grazing():
    a, b = jnp.array([1.5, 1.0, 0.0]), jnp.array([0.5, 0.5, 0.1])
    np.testing.assert_allclose(pseudospin.plain_root(a, b), [1.0, 1.0, 0.0], rtol=1e-14)


def test_ground_state_stiffness_of_the_square_lattice():
    """rho_s = 0.26974(5) J: Sandvik and Hamer, PRB 60, 6588 (1999), from memory; spin waves miss 0.5 %."""
    w = pseudospin.waves(jnp.ones(2), jnp.zeros(2), jnp.asarray(0.0), jnp.asarray(1e-3))
    np.testing.assert_allclose(w.stiffness, 0.26974, rtol=0.01)
    assert float(w.entropy) < 1e-5


def test_spin_waves_against_a_plain_lattice_sum():
    perp, zz, T, m, L = np.array([1.0, 0.6]), np.array([0.3, -0.2]), 0.3, 0.1, 400
    k = 2 * np.pi * (np.arange(L) + 0.5) / L
    cx, cy = np.meshgrid(np.cos(k), np.cos(k), indexing="ij")

    def free_energy(J):
        """Spin-wave part; J may differ from `perp` by a twist."""
        s = 4 * m**2
        P = J[0] * (1 - cx) + J[1] * (1 - cy)
        Q = J.sum() + (zz[0] * (1 - s) - J[0] * s) * cx + (zz[1] * (1 - s) - J[1] * s) * cy
        w = np.sqrt(P * Q)
        return (0.5 * w + T * np.log(-np.expm1(-w / T))).mean() - 0.5 * J.sum() - J.sum() * (0.25 - m**2)

    step = 1e-4
    expected = [
        -perp[d] * (free_energy(perp + step * np.eye(2)[d]) - free_energy(perp - step * np.eye(2)[d])) / (2 * step)
        for d in (0, 1)
    ]
    w = pseudospin.waves(jnp.asarray(perp), jnp.asarray(zz), jnp.asarray(m), jnp.asarray(T))
    np.testing.assert_allclose(w.stiffness, expected, rtol=2e-4)


def test_vortex_screening_against_the_villain_model():
    """The same flow puts the Villain model's transition at K = 2/(pi u); Monte Carlo gives 0.7515 (Janke and Nather,
    PRB 48, 7419 (1993), from memory)."""
    assert 2 / (np.pi * pseudospin.VORTEX_SCREENING) == pytest.approx(0.7515, rel=0.01)


def test_coherence_of_the_xx_chain():
    """1/xi = -(1/2 pi) int dk log|tanh(J cos k/2T)|, exact (Its, Izergin, Korepin and Slavnov, PRL 70, 1704 (1993))."""
    T = 0.02
    area = quad(lambda k: -np.log(np.abs(np.tanh(np.cos(k) / (2 * T)))), 0, np.pi / 2, limit=400)[0]
    exact = 2 * np.pi / (4 * area)
    scale = float(pseudospin.chain_scale(jnp.asarray(1.0), jnp.asarray(0.0), jnp.asarray(0.0)))
    assert scale / T == pytest.approx(exact, rel=1e-3)


# --- the public function ------------------------------------------------------------------------------------


def test_pairs_and_antipairs_of_hard_cores_are_dual():
    """Particle-hole exchange of species 2 (exact): same T_c and entropy; z-Néel becomes a density wave."""
    for t, phases in (((0.01, 0.01), None), ((0.01, 0.004), (Phase.NEEL, Phase.DENSITY_WAVE))):
        anti = critical_temperature(Mixture(t=t, U=1.0, U12=0.5, filling=0.5, n_max=1))
        pair = critical_temperature(Mixture(t=t, U=1.0, U12=-0.5, filling=0.5, n_max=1), "pair")
        assert float(anti.T_c) == pytest.approx(float(pair.T_c), rel=1e-12)
        assert float(anti.entropy_per_particle) == pytest.approx(float(pair.entropy_per_particle), rel=1e-12)
        if phases:
            assert (int(anti.phase), int(pair.phase)) == phases


@pytest.mark.slow
def test_laws():
    """Units scale out, species may be swapped, and a direction without hopping lowers the dimension."""
    base = critical_temperature(Mixture(t=(0.01, 0.012), U=(1.0, 1.2), U12=0.5, filling=(0.6, 0.4)))
    scaled = critical_temperature(Mixture(t=(0.03, 0.036), U=(3.0, 3.6), U12=1.5, filling=(0.6, 0.4)))
    swapped = critical_temperature(Mixture(t=(0.012, 0.01), U=(1.2, 1.0), U12=0.5, filling=(0.4, 0.6)))
    assert float(scaled.T_c) == pytest.approx(3 * float(base.T_c), rel=1e-12)
    assert float(swapped.T_c) == pytest.approx(float(base.T_c), rel=1e-12)
    flat = critical_temperature(Mixture(t=((0.01, 0.0, 0.01),) * 2, U=1.0, U12=0.5, filling=0.5))
    plane = critical_temperature(Mixture(t=0.01, U=1.0, U12=0.5, filling=0.5, dim=2))
    assert float(flat.T_c) == pytest.approx(float(plane.T_c), rel=1e-12)
    assert int(flat.dimension) == 2


def test_batch_equals_single_points_across_slices():
    U12 = np.linspace(0.2, 0.9, 300)
    mix = Mixture(t=0.01, U=1.0, U12=U12, filling=0.5)
    batch = critical_temperature(mix)
    assert batch.T_c.shape == (300,) and batch.T_c.dtype == jnp.float64
    for i in (0, 255, 299):
        single = critical_temperature(mix[i])
        assert float(batch.T_c[i]) == pytest.approx(float(single.T_c), rel=1e-12)


@pytest.mark.slow
@pytest.mark.parametrize("dim", [2, 3])
def test_derivative_against_differences(dim):
    def T_c(U12):
        return critical_temperature(Mixture(t=0.01, U=1.0, U12=U12, filling=(0.55, 0.45), dim=dim)).T_c

    step = 1e-4
    differences = (float(T_c(0.4 + step)) - float(T_c(0.4 - step))) / (2 * step)
    assert float(jax.grad(T_c)(0.4)) == pytest.approx(differences, rel=1e-5)


def test_mu_and_filling_agree_where_symmetry_fixes_them():
    given = critical_temperature(Mixture(t=0.01, U=1.0, U12=0.5, filling=0.5))
    solved = critical_temperature(Mixture(t=0.01, U=1.0, U12=0.5, mu=0.25))
    assert float(given.T_c) == pytest.approx(float(solved.T_c), rel=1e-12)
    tilted = critical_temperature(Mixture(t=0.01, U=1.0, U12=0.5, mu=(0.2505, 0.2495)))
    assert 0 < float(tilted.T_c) < float(given.T_c)


@pytest.mark.parametrize(
    "order, parameters, reason",
    [
        ("antipair", {"U12": 0.5, "filling": (0.5, 0.4)}, Reason.FILLING),
        ("antipair", {"U12": 0.5, "mu": -0.1}, Reason.FILLING),
        ("pair", {"U12": -0.5, "filling": (0.5, 0.4)}, Reason.FILLING),
        ("pair", {"U12": 0.5, "filling": 0.5}, Reason.UNBOUND),
        ("antipair", {"U12": -0.5, "filling": 0.5}, Reason.UNBOUND),
        ("antipair", {"U12": 0.5, "mu": (0.26, 0.24)}, Reason.POLARISED),
        ("antipair", {"U12": 0.5, "filling": 0.5, "t": 0.0}, Reason.POLARISED),
        ("antipair", {"U12": 0.5, "filling": 0.5, "dim": 1}, Reason.ONE_DIMENSION),
    ],
)
def test_no_order_has_a_reason(order, parameters, reason):
    r = critical_temperature(Mixture(**{"t": 0.01, "U": 1.0, **parameters}), order)
    assert (float(r.T_c), float(r.entropy_per_particle), int(r.reason)) == (0.0, 0.0, reason)
    assert len(r.notes) == 1
    assert all(np.isfinite(np.asarray(x, float)).all() for x in jax.tree_util.tree_leaves(r))


@pytest.mark.slow
def test_statuses():
    U12 = np.array([0.5, 0.05, 1.2])
    r = critical_temperature(Mixture(t=0.01, U=1.0, U12=U12, filling=0.5))
    assert r.status.tolist() == [0, Status.DRESSING_LARGE, Status.DEMIXING]
    assert int(r.phase[2]) == Phase.SEPARATED
    pair = critical_temperature(Mixture(t=0.01, U=1.0, U12=np.array([-0.5, -1.2]), filling=0.5), "pair")
    assert pair.status.tolist() == [0, Status.COLLAPSE]
    assert pair.reason.tolist() == [Reason.ORDERED, Reason.COLLAPSE]
    dilute = critical_temperature(Mixture(t=0.01, U=1.0, U12=-0.5, filling=0.01, n_max=1), "pair")
    assert int(dilute.status) == Status.DRESSING_LARGE


def test_mistakes_are_named():
    with pytest.raises(InputError, match="order is 'triple'"):
        critical_temperature(Mixture(t=0.01, U=1.0, U12=0.5, mu=0.2), "triple")  # type: ignore[arg-type]
    with pytest.raises(InputError, match="outside jax.jit and jax.grad"):
        jax.grad(lambda t: critical_temperature(Mixture(t=t, U=1.0, U12=0.5, mu=0.2), "single").T_c)(0.01)
    with pytest.raises(InputError, match="species is 1"):
        critical_temperature(Mixture(t=0.01, U=1.0, mu=0.2, species=1))
