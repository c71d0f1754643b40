"""Exchange couplings and bond operators against exact two-site spectra (numpy), laws and limits."""

import itertools

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from gutz.errors import InputError
from gutz.exchange import STATES, bond_operator, exchange_couplings
from gutz.model import Mixture

SHAPES = {"soft": None, "hard": 1}


def two_sites(t, U, U12, sector, n_max=None):
    """Full Hubbard Hamiltonian of two sites with fixed atom numbers: basis, matrix. Written anew."""
    N1, N2 = sector
    top = max(N1, N2) if n_max is None else n_max
    one = [(a, b) for a in range(top + 1) for b in range(top + 1)]
    basis = [(x, y) for x, y in itertools.product(one, one) if (x[0] + y[0], x[1] + y[1]) == sector]
    H = np.zeros((len(basis), len(basis)))
    for i, (x, y) in enumerate(basis):
        for n1, n2 in (x, y):
            H[i, i] += U[0] / 2 * n1 * (n1 - 1) + U[1] / 2 * n2 * (n2 - 1) + U12 * n1 * n2
        for a in (0, 1):
            if x[a] > 0 and y[a] < top:
                left, right = list(x), list(y)
                left[a] -= 1
                right[a] += 1
                j = basis.index((tuple(left), tuple(right)))
                H[i, j] = H[j, i] = -t[a] * np.sqrt(x[a] * (y[a] + 1))
    return basis, H


def exact_effective(t, U, U12, states, sector, n_max=None):
    """Levels of the exact spectrum with the most weight in the low-energy states, less their bare energy."""
    basis, H = two_sites(t, U, U12, sector, n_max)
    low = [i for i, pair in enumerate(basis) if all(s in states for s in pair)]
    energy, vectors = np.linalg.eigh(H)
    best = np.argsort(-(vectors[low] ** 2).sum(0))[: len(low)]
    return np.sort(energy[best]) - H[low[0], low[0]]


def model_levels(c, sector_up):
    """Levels of the pseudo-spin bond by number of up spins, from the couplings' definition."""
    up_up = c.constant + c.zz / 4 + c.field
    down_down = c.constant + c.zz / 4 - c.field
    mixed = np.sort([c.constant - c.zz / 4 - c.perp / 2, c.constant - c.zz / 4 + c.perp / 2])
    return {2: [up_up], 1: mixed, 0: [down_down]}[sector_up]


@pytest.mark.parametrize("cores", SHAPES)
@pytest.mark.parametrize(
    "order, U12, sectors",
    [
        ("antipair", 0.7, {2: (2, 0), 1: (1, 1), 0: (0, 2)}),
        ("pair", -0.6, {2: (2, 2), 1: (1, 1), 0: (0, 0)}),
    ],
)
def test_levels_agree_with_two_sites_to_second_order(order, U12, sectors, cores):
    """Exact two-site spectra: the relative error of every level falls as t² (slope 2 within 0.05)."""
    U, n_max = (1.0, 1.3), SHAPES[cores]
    errors = []
    for scale in (0.02, 0.01):
        t = (scale, 0.6 * scale)
        c = exchange_couplings(Mixture(t=t, U=U, U12=U12, mu=0.0, dim=1, n_max=n_max), order)
        c = jax.tree_util.tree_map(lambda x: float(np.ravel(x)[0]), c)
        for ups, sector in sectors.items():
            exact = exact_effective(t, U, U12, STATES[order], sector, n_max)
            ours = np.ravel(model_levels(c, ups))
            errors.append(np.abs(ours - exact).max() / scale**2)
    large, small = np.array(errors[:3]), np.array(errors[3:])
    assert large.max() < 0.02
    moving = large > 1e-9
    assert moving.any()
    np.testing.assert_allclose(np.log2(large[moving] / small[moving]), 2.0, atol=0.05)


def test_published_form_of_the_couplings():
    """Kuklov & Svistunov, PRL 90, 100401 (2003); Duan, Demler & Lukin, PRL 91, 090402 (2003), from memory."""
    t1, t2, U1, U2, U12 = 0.02, 0.03, 1.1, 0.8, 0.5
    c = exchange_couplings(Mixture(t=(t1, t2), U=(U1, U2), U12=U12, mu=0.0, dim=2))
    np.testing.assert_allclose(c.perp, 4 * t1 * t2 / U12, rtol=1e-14)
    np.testing.assert_allclose(c.zz, 2 * (t1**2 + t2**2) / U12 - 4 * t1**2 / U1 - 4 * t2**2 / U2, rtol=1e-13)
    np.testing.assert_allclose(c.field, 2 * t2**2 / U2 - 2 * t1**2 / U1, rtol=1e-13)


@pytest.mark.parametrize("U12, delta", [(1.0, -1.0), (0.5, 0.0), (0.25, 0.5)])
def test_anisotropy_of_equal_species(U12, delta):
    """Delta = 1 - 2 U12/U for equal species: the SU(2) ferromagnet at U12 = U (exact)."""
    c = exchange_couplings(Mixture(t=0.01, U=1.0, U12=U12, mu=0.0))
    assert float(c.anisotropy) == pytest.approx(delta, abs=1e-13)


def test_hard_core_pairs_and_antipairs_are_dual():
    """Particle-hole exchange of species 2 maps U12 -> -U12 for hard cores (exact)."""
    kinds = {"U": 1.0, "mu": 0.0, "t": (0.02, 0.03), "n_max": 1}
    anti = exchange_couplings(Mixture(U12=0.6, **kinds))
    pair = exchange_couplings(Mixture(U12=-0.6, **kinds), "pair")
    np.testing.assert_allclose(anti.perp, pair.perp, rtol=1e-14)
    np.testing.assert_allclose(anti.zz, pair.zz, rtol=1e-14)
    np.testing.assert_allclose(pair.pair_hopping, 2 * 0.02 * 0.03 / 0.6, rtol=1e-14)


@pytest.mark.parametrize("order, U12", [("antipair", 0.7), ("pair", -0.6)])
@pytest.mark.parametrize("cores", SHAPES)
def test_bond_operator_is_the_pseudo_spin_bond(order, U12, cores):
    mix = Mixture(t=((0.02, 0.01), (0.03, 0.005)), U=(1.0, 1.4), U12=U12, mu=0.0, dim=2, n_max=SHAPES[cores])
    c = exchange_couplings(mix, order)
    z = np.diag([0.5, -0.5])
    plus = np.array([[0.0, 1.0], [0.0, 0.0]])
    flip = 0.5 * (np.kron(plus, plus.T) + np.kron(plus.T, plus))
    for d in range(2):
        expected = (
            c.constant[d] * np.eye(4)
            + c.zz[d] * np.kron(z, z)
            - c.perp[d] * flip
            + c.field[d] * (np.kron(z, np.eye(2)) + np.kron(np.eye(2), z))
        )
        np.testing.assert_allclose(bond_operator(mix, STATES[order])[d], expected, atol=1e-17)


def test_bond_operator_with_three_states():
    """Two atoms a site at U1 = U2 = U12, where |2,0>, |1,1>, |0,2> are degenerate: exact two-site spectra."""
    states = ((2, 0), (1, 1), (0, 2))
    errors = []
    for scale in (0.02, 0.01):
        t = (scale, 0.7 * scale)
        B = bond_operator(Mixture(t=t, U=1.0, U12=1.0, mu=0.0, dim=1), states)[0]
        ours = np.sort(np.linalg.eigvalsh(B))
        exact = np.concatenate([exact_effective(t, (1.0, 1.0), 1.0, states, (n, 4 - n)) for n in range(5)])
        errors.append(np.abs(ours - np.sort(exact)).max() / scale**2)
    assert errors[0] < 0.1  # of levels up to 4 t²; the fourth order falls as t², as the next line shows
    assert np.log2(errors[0] / errors[1]) == pytest.approx(2.0, abs=0.1)


def test_bond_operator_keeps_first_order_hopping():
    """Hard-core atoms of one species: states |0,0>, |1,0> hop inside the set, with amplitude -t exactly."""
    B = bond_operator(Mixture(t=0.1, U=1.0, U12=5.0, mu=0.0, dim=1, n_max=1), ((0, 0), (1, 0)))[0]
    expected = np.zeros((4, 4))
    expected[1, 2] = expected[2, 1] = -0.1
    np.testing.assert_allclose(B, expected, atol=1e-16)


def test_batches_and_derivatives():
    U12 = np.linspace(0.2, 0.9, 7)
    mix = Mixture(t=0.02, U=1.0, U12=U12, mu=0.0)
    batch = exchange_couplings(mix)
    assert batch.perp.shape == (7, 3) and batch.gap.shape == (7,) and batch.perp.dtype == jnp.float64
    for i in (0, 6):
        single = exchange_couplings(mix[i])
        np.testing.assert_allclose(batch.zz[i], single.zz, rtol=1e-14)
    assert bond_operator(mix, STATES["antipair"]).shape == (7, 3, 4, 4)
    slope = jax.grad(lambda u: exchange_couplings(Mixture(t=0.02, U=1.0, U12=u, mu=0.0)).perp[0])(0.5)
    assert float(slope) == pytest.approx(-4 * 0.02**2 / 0.5**2, rel=1e-12)


@pytest.mark.parametrize(
    "order, U12, n_max",
    [("antipair", 0.0, None), ("antipair", 1e-9, 1), ("pair", 0.0, 1), ("pair", -1.0, None)],
)
def test_resonances_are_finite_and_flagged(order, U12, n_max):
    """U12 = 0 leaves nothing to bind; at U12 = -U two pairs on one site cost nothing."""
    c = exchange_couplings(Mixture(t=0.02, U=1.0, U12=U12, mu=0.0, n_max=n_max), order)
    assert all(np.isfinite(x).all() for x in c)
    assert float(c.validity) > 0.01
    assert abs(float(c.gap)) < 1e-8
    fine = exchange_couplings(
        Mixture(t=0.02, U=1.0, U12=0.5 if order == "antipair" else -0.5, mu=0.0, n_max=n_max), order
    )
    assert float(fine.validity) < 0.06 and float(fine.gap) >= 0.5 - 1e-12


def test_wrong_sign_of_U12_shows_in_the_gap():
    assert float(exchange_couplings(Mixture(t=0.02, U=1.0, U12=-0.3, mu=0.0)).gap) < 0
    assert float(exchange_couplings(Mixture(t=0.02, U=1.0, U12=0.3, mu=0.0), "pair").gap) < 0


def test_mistakes_are_named():
    mix = Mixture(t=0.02, U=1.0, U12=0.3, mu=0.0, n_max=1)
    with pytest.raises(InputError, match="order is 'trio'"):
        exchange_couplings(mix, "trio")  # type: ignore[arg-type]
    with pytest.raises(InputError, match="species is 1"):
        exchange_couplings(Mixture(t=0.02, U=1.0, mu=0.0, species=1))
    with pytest.raises(InputError, match=r"states contains \(2, 0\)"):
        bond_operator(mix, ((2, 0), (1, 1)))
    with pytest.raises(InputError, match="only once"):
        bond_operator(mix, ((1, 0), (1, 0)))
