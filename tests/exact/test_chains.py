"""Integrable chains against closed forms, published constants, mpmath and exact diagonalisation."""

import mpmath
import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import eigsh
from scipy.special import i0, i1

from gutz.errors import InputError
from gutz.exact import LatticeModel, chain, chains, ed, ring


def hard_core(length, t=1.0, mu=0.0):
    return LatticeModel(chain(length), t=(t,), U=(0.0,), mu=(mu,), n_max=1)


def xxz_ring(length, delta, flipped):
    """Lowest energy of the spin ring with `flipped` spins up; a plain scipy.sparse implementation, J = 1."""
    states = np.array([s for s in range(2**length) if s.bit_count() == flipped])
    rows, columns, diagonal = [], [], np.zeros(len(states))
    for i in range(length):
        j = (i + 1) % length
        up_i, up_j = states >> i & 1, states >> j & 1
        diagonal += delta * np.where(up_i == up_j, 0.25, -0.25)
        differ = np.flatnonzero(up_i != up_j)
        columns.append(differ)
        rows.append(np.searchsorted(states, states[differ] ^ (1 << i) ^ (1 << j)))
    rows, columns = np.concatenate(rows), np.concatenate(columns)
    # The sign of the exchange is immaterial on an even ring; minus makes the start vector overlap.
    matrix = sp.csr_array((np.full(len(rows), -0.5), (rows, columns)), shape=(len(states),) * 2)
    matrix = matrix + sp.diags_array(diagonal)
    return eigsh(matrix, k=1, which="SA", v0=np.ones(len(states)), tol=0)[0][0]


# --- XXZ ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "delta, energy",
    [
        (1.0, 0.25 - np.log(2)),  # Hulthen 1938, textbook
        (0.0, -1 / np.pi),  # free fermions, textbook
        (0.5, -3 / 8),  # Razumov & Stroganov, J. Phys. A 34, 3185 (2001), from memory
    ],
)
def test_xxz_energy_at_closed_points(delta, energy):
    assert chains.xxz_energy(delta) == pytest.approx(energy, abs=1e-12)


def test_xxz_energy_near_the_ends():
    """Continuous at the Heisenberg point; towards the ferromagnet e -> -1/4 (exact)."""
    assert chains.xxz_energy(1 - 1e-9) == pytest.approx(0.25 - np.log(2), abs=1e-8)
    assert chains.xxz_energy(-1 + 1e-7) == pytest.approx(-0.25, abs=1e-6)


def test_xxz_energy_against_thirty_digits():
    g = mpmath.mpf("2.1")
    area = mpmath.quad(
        lambda x: mpmath.sinh((mpmath.pi - g) * x) / (mpmath.sinh(mpmath.pi * x) * mpmath.cosh(g * x)),
        [0, 1, 4, 20],
    )
    expected = mpmath.cos(g) / 4 - mpmath.sin(g) * area
    assert chains.xxz_energy(float(mpmath.cos(g))) == pytest.approx(float(expected), abs=1e-12)


@pytest.mark.parametrize("delta, K", [(1.0, 0.5), (0.5, 0.75), (0.0, 1.0), (-0.5, 1.5)])
def test_xxz_luttinger_parameter(delta, K):
    """T. Giamarchi, Quantum Physics in One Dimension (2003), from memory."""
    assert chains.xxz_luttinger(delta) == pytest.approx(K, abs=1e-14)


@pytest.mark.parametrize("delta", [-0.5, 0.0, 0.5])
def test_xxz_rings_approach_the_infinite_chain(delta):
    """e_L = e_inf - pi v/(6 L^2) + O(L^-4) (Bloete et al. 1986, Affleck 1986) and the charging energy
    E(N+1) + E(N-1) - 2E(N) = pi v/(K L): e, v and K against spin rings of 10 and 14 sites."""
    v, K = chains.xxz_velocity(delta), chains.xxz_luttinger(delta)
    errors = [xxz_ring(n, delta, n // 2) / n - (chains.xxz_energy(delta) - np.pi * v / (6 * n**2)) for n in (10, 14)]
    assert abs(errors[1]) < 3e-4
    assert errors[1] / errors[0] == pytest.approx((10 / 14) ** 4, rel=0.25)
    charging = 2 * (xxz_ring(14, delta, 8) - xxz_ring(14, delta, 7))
    assert charging == pytest.approx(np.pi * v / (K * 14), rel=0.02)


def test_counterflow_parameter_spans_the_exchange_chain():
    assert chains.counterflow_luttinger(1.0, 0.5) == pytest.approx(1.0)
    assert chains.counterflow_luttinger(1.0, 0.0) == pytest.approx(0.5)
    assert chains.counterflow_luttinger(1.0, 1 - 1e-8) > 1e3


# --- hard-core mixture (Lieb-Wu) ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    "U12, energy, gap",
    [
        (1.0, -1.040369, 0.005027),
        (4.0, -0.573729, 1.286727),
        (8.0, -0.327531, 4.679517),
        (12.0, -0.225083, 8.457986),
    ],
)
def test_mixture_at_stored_points(U12, energy, gap):
    """Own computation; -0.573729 at U = 4t is the textbook value (from memory)."""
    assert chains.mixture_energy(1.0, U12) == pytest.approx(energy, abs=6e-7)
    assert chains.mixture_gap(1.0, U12) == pytest.approx(gap, abs=6e-7)


@pytest.mark.parametrize("U12", [1.5, 4.0, 9.0])
def test_both_published_forms_of_the_gap_agree(U12):
    """Lieb & Wu's Bessel form, U - 4t + 8t int J1(w) / (w (1 + exp(w U/2t))), by mpmath."""
    area = mpmath.quad(lambda w: mpmath.besselj(1, w) / (w * (1 + mpmath.exp(w * U12 / 2))), [0, 2, 10, 30, 60, 100])
    assert chains.mixture_gap(1.0, U12) == pytest.approx(float(U12 - 4 + 8 * area), abs=1e-9)


def test_mixture_limits():
    assert chains.mixture_energy(2.0, 0.0) == pytest.approx(-8 / np.pi)
    assert chains.mixture_energy(1.0, 1e-3) == pytest.approx(-4 / np.pi + 1e-3 / 4, abs=1e-6)  # Hartree
    # Strong coupling: Heisenberg chain of 4t^2/U (S.S - 1/4), E/L = -4 ln2 t^2/U (Takahashi 1977).
    assert chains.mixture_energy(1.0, 400.0) * 400 == pytest.approx(-4 * np.log(2), rel=1e-4)
    assert chains.mixture_energy(1.0, -4.0) == pytest.approx(chains.mixture_energy(1.0, 4.0) - 2.0, abs=1e-12)
    assert chains.mixture_gap(0.5, -3.0) == pytest.approx(chains.mixture_gap(0.5, 3.0), abs=1e-14)


def test_mixture_against_rings():
    """Ring of 10, odd N_a (no string twist), gapped charges: e_L - e_inf = -pi v_s/(6 L^2), spin
    velocity 2t I1(2 pi t/U)/I0(2 pi t/U) (Essler et al., The One-Dimensional Hubbard Model, from memory);
    the next correction is of relative order 1/L^2 with logarithms: 4% allowed."""
    U12, length = 12.0, 10
    model = LatticeModel(ring(length), t=(1.0, 1.0), U=(0, 0), U12=U12, n_max=1)
    shift = ed.ground_state(model, (5, 5)).energy / length - chains.mixture_energy(1.0, U12)
    velocity = 2 * i1(2 * np.pi / U12) / i0(2 * np.pi / U12)
    assert shift == pytest.approx(-np.pi * velocity / (6 * length**2), rel=0.04)


# --- hard-core bosons ---------------------------------------------------------------------------------------

UNEVEN = LatticeModel(
    chain(6), t=([1.0, 0.6, 1.3, 0.9, 1.1],), U=(0.0,), mu=([0.2, -0.5, 0.4, 0.1, 0.9, 0.0],), n_max=1
)


@pytest.mark.parametrize("kind", ["thermal", "ground, fixed number", "ground"])
def test_hard_core_chain_against_exact_diagonalisation(kind):
    if kind == "thermal":
        mine, exact = chains.hard_core_chain(UNEVEN, 0.8), ed.thermal(UNEVEN, 0.8)
    elif kind == "ground":
        mine, exact = chains.hard_core_chain(UNEVEN), ed.ground_state(UNEVEN)
    else:
        mine, exact = chains.hard_core_chain(UNEVEN, N=2), ed.ground_state(UNEVEN, 2)
    assert mine.free_energy == pytest.approx(exact.free_energy, abs=1e-12)
    assert mine.energy == pytest.approx(exact.energy, abs=1e-12)
    assert mine.entropy == pytest.approx(exact.entropy, abs=1e-11)
    assert mine.filling == pytest.approx(exact.filling[0], abs=1e-12)
    assert chains.hard_core_one_body(mine.correlation) == pytest.approx(ed.one_body(exact, 0), abs=1e-12)
    densities = chains.hard_core_density_density(mine.correlation)
    assert densities == pytest.approx(ed.density_density(exact, 0, 0), abs=1e-12)


def test_hard_core_bosons_decay_as_the_square_root():
    """Infinite chain at half filling: <b+_0 b_x> -> 0.29418 / sqrt(x), twice the constant 0.14709 of
    the XX chain (B. M. McCoy, Phys. Rev. 173, 531 (1968), from memory); corrections ~ 1/x^2."""
    separation = np.subtract.outer(np.arange(61), np.arange(61))
    correlation = 0.5 * np.sinc(separation / 2)
    G = chains.hard_core_one_body(correlation)[0]
    x = np.arange(30, 61)
    assert G[x] * np.sqrt(x) == pytest.approx(np.full(len(x), 0.29418), abs=5e-4)


@pytest.mark.parametrize(
    "call, part",
    [
        (lambda: chains.xxz_energy(-1.0), "delta: got -1.0"),
        (lambda: chains.xxz_luttinger(1.2), "delta: got 1.2"),
        (lambda: chains.counterflow_luttinger(1.0, 1.0), "U12: got U = 1.0, U12 = 1.0"),
        (lambda: chains.mixture_energy(0.0, 1.0), "t: got 0.0"),
        (lambda: chains.hard_core_chain(LatticeModel(chain(3), t=(1,), U=(1,), n_max=2)), "n_max = (2,)"),
        (lambda: chains.hard_core_chain(LatticeModel(ring(3), t=(1,), U=(1,), n_max=1)), "open chain"),
        (lambda: chains.hard_core_chain(hard_core(3), -1.0), "T = -1.0"),
        (lambda: chains.hard_core_chain(hard_core(3), 1.0, N=1), "N = 1"),
        (lambda: chains.hard_core_chain(hard_core(3), N=4), "0..3"),
    ],
)
def test_mistakes_get_one_sentence(call, part):
    with pytest.raises(InputError) as caught:
        call()
    assert part in str(caught.value)
    assert str(caught.value).endswith(".") and "\n" not in str(caught.value)
