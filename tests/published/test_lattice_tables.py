"""Optical-lattice numbers against outside tables, and against our own earlier, separate computation.

Each table says where it comes from and how well that is known. "own computation" rows were made by separate
scratch numerics and are a cross-check, not an outside source.
"""

import math

import numpy as np
import pytest
from scipy import constants, optimize

from gutz.atoms import Line, atom
from gutz.bands import bands, deep_hopping, harmonic_interaction
from gutz.optics import OpticalLattice, StandingWave, hubbard_parameters

A0 = constants.physical_constants["Bohr radius"][0]


@pytest.mark.parametrize(
    ("depth", "four_t"), [(3, 0.444109), (5, 0.263069), (10, 0.076730), (15, 0.026075), (20, 0.009965)]
)
def test_hopping_of_bloch_dalibard_zwerger(depth, four_t):
    """4t/E_R: Bloch, Dalibard, Zwerger, Rev. Mod. Phys. 80, 885 (2008), table of hoppings (from memory, high
    confidence). Tolerance: half a unit of the last printed digit."""
    assert 4 * bands(depth).t == pytest.approx(four_t, abs=5.1e-7)


# s, t/E_R, t2/t, gap/E_R, I4, (U/E_R)/(a/d), deep t / exact, harmonic U / exact (own computation)
OWN_TABLE = [
    (1, 0.178118, -0.199, 0.500, 0.9734, 2.349, 1.715, 2.134),
    (2, 0.142755, -0.143, 0.996, 1.1791, 4.175, 1.571, 2.020),
    (3, 0.111027, -0.101, 1.487, 1.3494, 6.258, 1.450, 1.826),
    (4, 0.085490, -0.072, 1.969, 1.4932, 8.478, 1.368, 1.673),
    (5, 0.065767, -0.0516, 2.441, 1.6156, 10.739, 1.311, 1.561),
    (6, 0.050773, -0.0376, 2.899, 1.7212, 12.985, 1.270, 1.480),
    (8, 0.030799, -0.0206, 3.770, 1.8953, 17.337, 1.218, 1.376),
    (10, 0.0191825, -0.0118, 4.572, 2.0354, 21.472, 1.185, 1.313),
    (12, 0.0122521, -0.0071, 5.304, 2.1531, 25.416, 1.164, 1.272),
    (13, 0.00987670, -0.0055, 5.645, 2.2057, 27.327, 1.155, 1.256),
    (15, 0.00651882, -0.0035, 6.281, 2.3015, 31.045, 1.141, 1.231),
    (18, 0.00361725, -0.0018, 7.134, 2.4270, 36.405, 1.126, 1.203),
    (20, 0.00249135, -0.0012, 7.648, 2.5014, 39.858, 1.118, 1.190),
    (25, 0.00103858, -0.0005, 8.794, 2.6642, 48.154, 1.103, 1.164),
    (30, 0.000462884, -0.0002, 9.797, 2.8027, 56.064, 1.092, 1.146),
    (40, 0.000106869, -0.0000, 11.537, 3.0325, 71.017, 1.078, 1.123),
]


def test_own_table_of_bands():
    """Own computation. Tolerance: half a unit of the last printed digit."""
    s, t, ratio, gap, quartic, interaction, deep, harmonic = np.array(OWN_TABLE).T
    solved = bands(s)
    assert np.all(np.abs(solved.t - t) < np.where(s < 9, 5.1e-7, 5.1e-6 * t))
    np.testing.assert_allclose(solved.t2 / solved.t, ratio, atol=5.1e-4)
    np.testing.assert_allclose(solved.gap, gap, atol=5.1e-4)
    np.testing.assert_allclose(solved.quartic, quartic, atol=5.1e-5)
    np.testing.assert_allclose(8 / math.pi * solved.quartic**3, interaction, atol=5.1e-4)
    np.testing.assert_allclose(deep_hopping(s) / solved.t, deep, atol=5.1e-4)
    exact = 8 / math.pi * 0.01 * solved.quartic**3
    np.testing.assert_allclose(harmonic_interaction(s, 0.01, 1.0) / exact, harmonic, atol=5.1e-4)


@pytest.mark.parametrize(
    ("name", "hertz"),
    [("7Li", 25119), ("23Na", 7665.8), ("39K", 4523.1), ("41K", 4302.4), ("87Rb", 2027.8), ("133Cs", 1326.0)],
)
def test_recoil_at_1064_nm(name, hertz):
    """Own computation, held to half a unit of the last digit."""
    solved = hubbard_parameters(OpticalLattice(1064e-9, (atom(name),), StandingWave(10.0), A0))
    assert solved.recoil_hz[0] == pytest.approx(hertz, abs=0.51 if hertz > 9999 else 0.051)


def test_h_over_m_of_rubidium():
    """h/m(87Rb) = 4.591 359 258 90(65)e-9 m²/s: Morel et al., Nature 588, 61 (2020), from memory.

    CODATA's u rests in part on such data, so this tests the mass. Tolerance: three times u's own 3e-10.
    """
    assert constants.h / atom("87Rb").mass == pytest.approx(4.59135925890e-9, rel=1e-9)


@pytest.mark.parametrize(
    ("wavelength", "ratio", "depth"),
    [
        (850e-9, 29.34, 12.42),
        (850e-9, 34.97, 13.04),
        (850e-9, 16.74, 10.56),
        (1064e-9, 29.34, 13.21),
        (1064e-9, 34.97, 13.85),
        (1064e-9, 16.74, 11.29),
    ],
)
def test_critical_depths_of_rubidium(wavelength, ratio, depth):
    """Depth at which U/t reaches the ratio, 87Rb with a = 100.4 a0 (own computation, two decimals)."""

    def excess(s):
        solved = hubbard_parameters(OpticalLattice(wavelength, (atom("87Rb"),), StandingWave(s), 100.4 * A0))
        return float(solved.U[0] / solved.t[0, 0]) - ratio

    assert optimize.brentq(excess, 5, 20, xtol=1e-8) == pytest.approx(depth, abs=5.1e-3)


@pytest.mark.parametrize(
    ("wavelength", "depths", "t", "U"),
    [
        (850e-9, [10, 12, 14, 16], [60.95, 38.93, 25.43, 16.95], [852.9, 1009.6, 1159.9, 1305.2]),
        (1064e-9, [10, 12, 14, 16], [38.90, 24.84, 16.23, 10.82], [434.8, 514.7, 591.4, 665.4]),
    ],
)
def test_energy_scales_of_rubidium(wavelength, depths, t, U):
    """t/h and U/h in Hz, a = 100.4 a0 (own computation, to the printed digits)."""
    lattice = OpticalLattice(wavelength, (atom("87Rb"),), StandingWave(np.array(depths, dtype=float)), 100.4 * A0)
    energies = hubbard_parameters(lattice).energies_in("Hz")
    np.testing.assert_allclose(energies["t"][:, 0, 0], t, atol=5.1e-3)
    np.testing.assert_allclose(energies["U"][:, 0], U, atol=5.1e-2)


@pytest.mark.parametrize(("name", "tune_out"), [("87Rb", 790.03), ("41K", 768.97)])
def test_light_shift_vanishes_between_the_lines(name, tune_out):
    """Wavelengths of zero shift: 87Rb 790.03 nm, K 768.97 nm; existence and method Arora, Safronova, Clark,
    arXiv:1107.2060, numbers from memory (high confidence). The core's and higher lines' share, which two
    lines leave out, moves the zero by up to 0.1 nm: hence 0.15 nm."""
    d1, d2 = atom(name).lines
    zero = optimize.brentq(atom(name).polarisability, d2.wavelength + 1e-10, d1.wavelength - 1e-10, xtol=1e-15)
    assert zero * 1e9 == pytest.approx(tune_out, abs=0.15)


@pytest.mark.parametrize(
    ("name", "atomic_units"),
    [("7Li", 164.1), ("23Na", 162.7), ("39K", 290.6), ("87Rb", 318.8), ("133Cs", 401.0)],
)
def test_static_polarisability(name, atomic_units):
    """Static polarisabilities in atomic units, measured: Miffre 2006 (Li), Ekstrom 1995 (Na), Holmgren 2010
    (K, Rb), Amini and Gould 2003 (Cs); all from memory. Two lines leave out core and higher lines, 1 to 6 per
    cent, always to the low side. The static limit is taken at the longest wavelength accepted, 100 µm."""
    unit = constants.physical_constants["atomic unit of electric polarizability"][0]
    ratio = atom(name).polarisability(100e-6) / unit / atomic_units
    assert 0.94 < ratio < 1.0


def test_both_lines_are_needed():
    """A check that can fail: dropping D1 puts the static value far outside the band above."""
    rubidium = atom("87Rb")
    assert all(isinstance(line, Line) for line in rubidium.lines)
    only_d2 = type(rubidium)("one line", rubidium.mass, rubidium.lines[1:])
    unit = constants.physical_constants["atomic unit of electric polarizability"][0]
    assert only_d2.polarisability(100e-6) / unit / 318.8 < 0.7
