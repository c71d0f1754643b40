"""Line shapes, envelope and blur against closed forms; Luttinger parameters from exact hard-core chains."""

import mpmath
import numpy as np
import pytest

import gutz
from gutz.errors import InputError
from gutz.exact.chains import hard_core_one_body, xxz_luttinger
from gutz.noise import luttinger, shapes
from gutz.noise.shapes import Decay, Reach


def test_a_uniform_box_gives_the_squared_sinc():
    """|Σ_j e^{iqj}|² / L² (geometric series, common practice)."""
    q, P = shapes.line_shape(Decay(Reach.LONG, 0.0), np.ones(20), refine=5)
    inside = np.where(q == 0.0, 1.0, (np.sin(10 * q) / np.where(q == 0.0, 1.0, 20 * np.sin(q / 2))) ** 2)
    assert P == pytest.approx(inside, abs=1e-12)
    # Half maximum of sinc² at 1.3916 (root of sin x = x/sqrt 2), up to 1/L².
    assert shapes.width(q, P) == pytest.approx(4 * 1.39156 / 20, rel=0.02)


def test_exponential_decay_gives_a_lorentzian():
    """Σ_r e^{iqr - |r|/ξ} = sinh(1/ξ)/(cosh(1/ξ) - cos q), for a cloud much longer than ξ."""
    xi, L = 5.0, 800
    q, P = shapes.line_shape(Decay(Reach.EXPONENTIAL, xi), np.ones(L), refine=1)
    exact = np.sinh(1 / xi) / (np.cosh(1 / xi) - np.cos(q)) / L
    assert P == pytest.approx(exact, rel=2e-2, abs=1e-2 * exact.max())


def test_power_law_peak_grows_with_its_exponent():
    """P(0) = (1/L)(1 + 2 Σ (1 - r/L) r^-η): for large L, 2 L^-η/((1-η)(2-η)) + (1 + 2 ζ(η))/L (Euler and Maclaurin)."""
    eta, L = 0.3, 2000
    _, P = shapes.line_shape(Decay(Reach.POWER, eta), np.ones(L), refine=1)
    assert P.max() == pytest.approx(
        2 * L**-eta / ((1 - eta) * (2 - eta)) + (1 + 2 * float(mpmath.zeta(eta))) / L, rel=1e-4
    )


def test_order_peak_weight_does_not_depend_on_decay():
    for decay in (Decay(Reach.LONG, 0.0), Decay(Reach.POWER, 0.2), Decay(Reach.EXPONENTIAL, 3.0)):
        _, P = shapes.line_shape(decay, np.ones(32), refine=2)
        assert P.sum() / 2 == pytest.approx(1.0, abs=1e-12)


def test_envelope_sums_to_one_and_has_the_width_of_the_wells():
    k = np.linspace(-3.0, 3.0, 13)
    copies = k[:, None] + 2 * np.pi * np.arange(-8, 9)
    assert shapes.envelope(copies, 15.0).sum(1) == pytest.approx(1.0, abs=1e-12)
    # rms of |w|² is π depth^(1/4)/sqrt 2 in 1/lattice constant.
    wide = np.linspace(-60, 60, 4001)
    weight = shapes.envelope(wide, 400.0)
    rms = np.sqrt((weight * wide**2).sum() / weight.sum())
    assert rms == pytest.approx(np.pi * 400**0.25 / np.sqrt(2), rel=0.01)


def test_blur_of_a_single_line_is_a_gaussian():
    length, spread = 400, 0.1
    line = np.zeros(length)
    line[200] = 1.0
    out = shapes.blurred(line, 0, spread)
    q = 2 * np.pi * (np.arange(length) - 200) / length
    assert out.sum() == pytest.approx(1.0)
    assert out == pytest.approx(
        np.exp(-0.5 * (q / spread) ** 2) / (spread * np.sqrt(2 * np.pi)) * 2 * np.pi / length, abs=1e-9
    )


def test_decay_of_solutions_by_dimension():
    solution = gutz.solve(gutz.Mixture(t=1.0, U=5.0, filling=0.7, T=np.array([0.0, 0.2]), dim=1, species=1, n_max=6))
    cold, warm = (shapes.decay(solution, (n,), "1") for n in range(2))
    assert (cold.reach, warm.reach) == (Reach.POWER, Reach.EXPONENTIAL)
    assert warm.value == pytest.approx(2 * float(solution.stiffness[1, 0, 0, 0]) / 0.2, rel=1e-9)
    with pytest.raises(InputError, match="channel is 'pair'"):
        shapes.decay(solution, (0,), "pair")


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: shapes.line_shape(Decay.everywhere(), np.array([1.0, -1.0])), "negative"),
        (lambda: shapes.line_shape(Decay.everywhere(), np.zeros(4)), "empty"),
        (lambda: shapes.line_shape(Decay.everywhere(), np.array([np.nan, 1.0])), "finite"),
        (lambda: shapes.envelope(np.zeros(2), 0.0), "depth is 0"),
        (lambda: shapes.blurred(np.ones(4), 0, -1.0), "spread is -1"),
        (lambda: luttinger.correlator(np.ones(5)), "at least 12"),
        (lambda: luttinger.fit(np.ones(20), first=9), "three distances"),
    ],
)
def test_bad_input_is_one_sentence(call, words):
    with pytest.raises(InputError, match=words):
        call()


def hard_core_ring(length: int, atoms: int) -> np.ndarray:
    """Exact <b+_0 b_r> of hard-core bosons on a ring, odd number of atoms: determinants of free fermions."""
    k = 2 * np.pi * (np.arange(atoms) - atoms // 2) / length
    r = np.arange(length)
    fermions = np.exp(1j * np.subtract.outer(r, r)[..., None] * k).sum(-1).real / length
    return hard_core_one_body(fermions)[0]


@pytest.mark.parametrize("length", [42, 82])
def test_hard_core_bosons_have_luttinger_parameter_one(length):
    """K = 1 and exponent 1/2: Lenard, J. Math. Phys. 5, 930 (1964); here on a ring, read from n(k) alone."""
    g = hard_core_ring(length, length // 2)
    n = np.fft.fft(g).real
    found = luttinger.fit(luttinger.correlator(n), first=4)
    assert found.decays
    assert found.K == pytest.approx(1.0, abs=0.02)
    assert found.spread < 0.02
    assert xxz_luttinger(0.0) == pytest.approx(1.0)


def test_order_and_gap_are_not_called_power_laws():
    assert not luttinger.fit(np.ones(30)).decays
    assert not luttinger.fit(np.where(np.arange(30) == 0, 1.0, 0.0)).decays
