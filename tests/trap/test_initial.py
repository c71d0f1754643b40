"""The gas before the lattice, against the published entropies of trapped Bose gases."""

import mpmath
import numpy as np
import pytest

from gutz.errors import InputError
from gutz.trap import initial


def test_ideal_gas_below_condensation():
    """S/N = 4 zeta(4)/zeta(3) (T/T_c)^3 = 3.6016 (T/T_c)^3, Bagnato, Pritchard, Kleppner, PRA 35, 4354 (1987)."""
    t = np.array([0.1, 0.45, 0.9, 1.0])
    exact = 4 * float(mpmath.zeta(4) / mpmath.zeta(3)) * t**3
    np.testing.assert_allclose(initial.ideal_entropy(t), exact, rtol=1e-12)
    assert float(initial.ideal_entropy(1.0)) == pytest.approx(3.6016, abs=1e-4)


@pytest.mark.parametrize("t", [1.001, 1.3, 3.0])
def test_ideal_gas_above_condensation(t):
    """S/N = 4 g_4(z)/g_3(z) - log z with g_3(z) = zeta(3)/t^3, solved by mpmath to 30 digits."""
    with mpmath.workdps(30):
        z = mpmath.findroot(
            lambda z: mpmath.polylog(3, z) - mpmath.zeta(3) / mpmath.mpf(t) ** 3, (0.01, 0.99999), solver="anderson"
        )
        exact = 4 * mpmath.polylog(4, z) / mpmath.polylog(3, z) - mpmath.log(z)
    assert float(initial.ideal_entropy(t)) == pytest.approx(float(exact), rel=2e-5)


@pytest.mark.parametrize("eta", [0.2, 0.4])
def test_interaction_entropy_is_the_integral_of_the_published_energy(eta):
    """dS = dE/T with E/(N T_c) = 3 zeta(4)/zeta(3) t^4 + eta (1 - t^3)^(2/5) (5 + 16 t^3)/7.

    Giorgini, Pitaevskii, Stringari, J. Low Temp. Phys. 109, 309 (1997), as in Dalfovo et al., RMP 71, 463 (1999);
    formula from memory.
    """

    def energy(t):
        ideal = 3 * mpmath.zeta(4) / mpmath.zeta(3) * t**4
        return ideal + eta * (1 - t**3) ** mpmath.mpf("0.4") * (5 + 16 * t**3) / 7

    for t in (0.2, 0.5, 0.8):
        exact = mpmath.quad(lambda x: mpmath.diff(energy, x) / x, [mpmath.mpf("1e-6"), t])
        assert initial.trapped_entropy(t, eta) == pytest.approx(float(exact), rel=1e-6)


def test_two_species_share_one_temperature():
    alone = initial.mixture_entropy(0.5, np.array([1000.0]), np.array([50.0]), np.zeros(1))
    equal = initial.mixture_entropy(0.5, np.array([1000.0, 1000.0]), np.array([50.0, 50.0]), np.zeros(2))
    assert equal == pytest.approx(alone)
    # A looser trap for the second species means a lower T_c: at the same T it holds more entropy.
    assert initial.mixture_entropy(0.5, np.array([1e3, 1e3]), np.array([50.0, 30.0]), np.zeros(2)) > equal


def test_words():
    with pytest.raises(InputError, match="T_over_Tc is 0.95; it must be at most 0.85"):
        initial.trapped_entropy(0.95, 0.4)
    with pytest.raises(InputError, match="must be at least 0"):
        initial.trapped_entropy(-0.1)
