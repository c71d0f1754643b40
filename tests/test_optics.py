"""Lattices, atoms and bands: exact limits, laws and refusals. Published values are in tests/published."""

import itertools
import math

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants, integrate, linalg, special

from gutz.atoms import Atom, atom, atom_names
from gutz.bands import DEPTH_RANGE, bands, deep_hopping, harmonic_interaction, wannier
from gutz.errors import InputError
from gutz.optics import (
    Caution,
    Harmonic,
    OpticalLattice,
    StandingWave,
    depth_ratio,
    hubbard_parameters,
    recoil_energy,
    sentences,
)

A0 = constants.physical_constants["Bohr radius"][0]
RB, K = atom("87Rb"), atom("41K")
DEPTHS = st.floats(*DEPTH_RANGE)
law = settings(max_examples=60, derandomize=True, deadline=None)


def one_species(depth=10.0, a11=100 * A0, wavelength=1064e-9, **options):
    axes = options.pop("axes", StandingWave(depth))
    return OpticalLattice(wavelength, (RB,), axes, a11, **options)


def two_species(axes=None, a11=100 * A0, a22=60 * A0, a12=160 * A0, **options):
    axes = StandingWave((10.0, 8.0)) if axes is None else axes
    return OpticalLattice(1064e-9, options.pop("atoms", (RB, K)), axes, a11, a22, a12, **options)


# --- bands against exact results -----------------------------------------------------------------


@pytest.mark.parametrize("depth", [0.1, 0.5, 1, 2, 3, 5, 8, 10, 15, 20, 30, 50])
def test_band_edges_are_mathieu_characteristic_values(depth):
    """y'' + (a - 2q cos 2z) y = 0 with q = s/4, E = a + s/2 (Abramowitz-Stegun 20.1; scipy.special).

    Edges of the lowest band are a_0 and b_1, the next band starts at a_1. scipy's values are good to about
    1e-10 relative, which sets the tolerance on E; the plane-wave solution is held to 1e-12 in other tests.
    """
    solved = bands(depth)
    a0, b1, a1 = (
        special.mathieu_a(0, depth / 4),
        special.mathieu_b(1, depth / 4),
        special.mathieu_a(1, depth / 4),
    )
    assert solved.bottom == pytest.approx(a0 + depth / 2, abs=1e-9)
    assert solved.top == pytest.approx(b1 + depth / 2, abs=1e-9)
    assert solved.gap == pytest.approx(a1 - b1, abs=1e-9)


def _lowest_level(diagonal, side):
    """Lowest level of a symmetric tridiagonal matrix by Rayleigh-quotient iteration, in mpmath."""
    size, level = len(diagonal), mpmath.mpf(0)
    state = [mpmath.mpf(1)] * size
    for _ in range(8):
        pivots, right = [diagonal[0] - level], [state[0]]
        for i in range(1, size):
            ratio = side / pivots[-1]
            right.append(state[i] - ratio * right[-1])
            pivots.append(diagonal[i] - level - ratio * side)
        state[-1] = right[-1] / pivots[-1]
        for i in range(size - 2, -1, -1):
            state[i] = (right[i] - side * state[i + 1]) / pivots[i]
        norm = mpmath.sqrt(sum(x * x for x in state))
        state = [x / norm for x in state]
        off = 2 * side * sum(a * b for a, b in itertools.pairwise(state))
        # A hair below the level, so that no pivot ever vanishes.
        level = sum(d * x * x for d, x in zip(diagonal, state, strict=True)) + off - mpmath.mpf(10) ** -45
    return level


def _hopping_60_digits(depth, order, wells):
    """t_order as the plain sum of -E_q cos(order π q) over plane-wave levels, all in 60 digits (mpmath)."""
    with mpmath.workdps(60):
        total = mpmath.mpf(0)
        for j in range(wells):
            q = mpmath.mpf(2 * j + 1) / wells - 1
            diagonal = [(q + 2 * m) ** 2 + mpmath.mpf(depth) / 2 for m in range(-24, 25)]
            level = _lowest_level(diagonal, -mpmath.mpf(depth) / 4)
            total -= level * mpmath.cos(order * mpmath.pi * q)
        return float(total / wells)


@pytest.mark.parametrize(("depth", "order", "relative"), [(40, 1, 1e-11), (40, 2, 1e-9), (200, 1, 1e-9)])
def test_hopping_keeps_its_digits_in_deep_lattices(depth, order, relative):
    """t(200) = 6e-11 E_R is lost in double precision as a difference of energies; here it must not be."""
    solved = bands(depth)
    ours = float(solved.t if order == 1 else solved.t2)
    assert ours == pytest.approx(_hopping_60_digits(depth, order, 8), rel=relative)


@pytest.mark.parametrize("depth", [0.1, 1, 5, 20])
@pytest.mark.parametrize("order", [1, 2])
def test_hopping_by_adaptive_quadrature(depth, order):
    """t_n = -∫ E(q) cos(nπq) dq over q from 0 to 1, with scipy's quad and tridiagonal eigensolver."""
    wave = 2 * np.arange(-14, 15)

    def level(q):
        diagonal = (q + wave) ** 2 + depth / 2
        return linalg.eigh_tridiagonal(diagonal, np.full(28, -depth / 4), select="i", select_range=(0, 0))[0][0]

    expected = -integrate.quad(lambda q: level(q) * math.cos(order * math.pi * q), 0, 1, epsabs=1e-12, limit=200)[0]
    solved = bands(depth)
    assert float(solved.t if order == 1 else solved.t2) == pytest.approx(expected, abs=2e-12)


def test_nearly_free_limit():
    """Gap s/2 in first order, bottom s/2 - s²/32 in second; a free band has t_n = -(-1)^n 2/(π n)²."""
    solved = bands(0.1)
    assert solved.gap == pytest.approx(0.05, rel=1e-4)
    assert solved.bottom == pytest.approx(0.05 - 0.1**2 / 32, rel=1e-4)
    assert solved.t == pytest.approx(2 / math.pi**2, rel=1e-2)
    assert solved.t2 == pytest.approx(-2 / (2 * math.pi) ** 2, rel=2e-2)


def _limit_at_infinite_depth(s, error):
    """Coefficient c of error = c/√s + c'/s + c''/s^{3/2}, from an exact fit to three depths."""
    root = 1 / np.sqrt(s)
    return np.linalg.solve(np.stack([root, root**2, root**3], axis=-1), error)[0]


def test_deep_limit_is_approached():
    """Lowest Mathieu band, DLMF 28.8.2 (from memory): the deep form times 1 - 7/(32√q), q = s/4."""
    s = np.array([60.0, 100.0, 160.0])
    error = bands(s).t / deep_hopping(s) - 1
    assert np.all(error < 0)
    assert _limit_at_infinite_depth(s, error) == pytest.approx(-7 / 16, rel=0.02)


def test_harmonic_limit_of_the_orbital():
    """I4 = √(π/2) s^{1/4} (1 - 7/(32√s) + …): Gaussian of width ℓ = d s^{-1/4}/π, corrected by first-order
    perturbation theory in the well's quartic term (second and fourth oscillator level mixed in)."""
    s = np.array([60.0, 100.0, 160.0])
    error = bands(s).quartic / (math.sqrt(math.pi / 2) * s**0.25) - 1
    assert _limit_at_infinite_depth(s, error) == pytest.approx(-7 / 32, rel=0.02)
    # Level spacing 2√s with the anharmonic shift -1, next order 1/√s.
    assert bands(200.0).excitation == pytest.approx(2 * math.sqrt(200) - 1, abs=1 / math.sqrt(200))


def test_harmonic_interaction_is_the_cubed_gaussian_overlap():
    gaussian = 8 / math.pi * 0.01 * (math.sqrt(math.pi / 2) * 10**0.25) ** 3
    assert harmonic_interaction(10.0, 0.01 * 532e-9, 532e-9) == pytest.approx(gaussian, rel=1e-14)


@pytest.mark.parametrize("depth", [0.5, 2, 5, 12, 40, 200])
def test_wannier_functions_are_orthonormal(depth):
    """Riemann sums on a grid unrelated to the solver's, out to where the function has ended."""
    step, reach = 1 / 37, 120 if depth < 1 else 60 if depth < 3 else 20
    x = np.arange(-reach, reach, step) + 0.3 * step
    centre = wannier(depth, x)
    assert step * (centre**2).sum() == pytest.approx(1, abs=1e-12)
    for n in (1, 2, 3):
        assert abs(step * (centre * wannier(depth, x - n)).sum()) < 1e-10
    assert step * (centre**4).sum() == pytest.approx(float(bands(depth).quartic), rel=1e-11)


@pytest.mark.parametrize("depth", [3, 10, 30])
def test_hopping_is_the_wannier_matrix_element(depth):
    """t = -∫ w(x) H w(x-1) dx, H = -(1/π²) d²/dx² + s sin²(πx); derivative by FFT on a long box."""
    cells, per_cell = 64, 64
    x = (np.arange(cells * per_cell) - cells * per_cell // 2) / per_cell
    w, neighbour = wannier(depth, x), wannier(depth, x - 1)
    k = 2 * math.pi * np.fft.fftfreq(x.size, 1 / per_cell)
    kinetic = np.fft.ifft(k**2 * np.fft.fft(neighbour)).real / math.pi**2
    element = (w * (kinetic + depth * np.sin(math.pi * x) ** 2 * neighbour)).sum() / per_cell
    assert -element == pytest.approx(float(bands(depth).t), rel=1e-8)


def test_wannier_function_is_real_even_and_positive_at_its_well():
    x = np.linspace(0, 5, 101)
    np.testing.assert_allclose(wannier(7.0, x), wannier(7.0, -x), atol=1e-15)
    assert 0 < float(wannier(7.0, 0.0)) == pytest.approx(wannier(7.0, x).max(), rel=1e-14)
    assert wannier(7.0, 1e3) == 0


@law
@given(depth=DEPTHS, factor=st.floats(1.001, 1.5))
def test_deeper_means_less_hopping_and_tighter_orbitals(depth, factor):
    shallow, deep = bands(depth), bands(min(depth * factor, DEPTH_RANGE[1]))
    if depth * factor <= DEPTH_RANGE[1]:
        assert deep.t < shallow.t
        assert deep.quartic > shallow.quartic
        assert deep.gap > shallow.gap
        assert deep.excitation > shallow.excitation
    assert shallow.excitation >= shallow.gap * (1 - 1e-12)
    assert -0.26 < shallow.t2 / shallow.t < 1e-11


@law
@given(depths=st.lists(DEPTHS, min_size=1, max_size=6))
def test_a_batch_is_the_same_as_its_points(depths):
    together = bands(depths)
    for i, depth in enumerate(depths):
        alone = bands(depth)
        for name, values in vars(together).items():
            assert values[i] == pytest.approx(float(getattr(alone, name)), rel=1e-9, abs=1e-18), name


# --- Hubbard parameters ----------------------------------------------------------------------------


def test_equal_species_share_one_overlap():
    """m1 = m2 = m, a12 = a11: U12 = U1 = U2, since 2πħ²/μ = 4πħ²/m."""
    lattice = two_species(atoms=(RB, RB), axes=StandingWave(np.array([2.0, 9.0, 40.0])), a22=100 * A0, a12=100 * A0)
    solved = hubbard_parameters(lattice)
    np.testing.assert_allclose(solved.U[:, 0], solved.U[:, 1], rtol=1e-14)
    np.testing.assert_allclose(solved.U12, solved.U[:, 0], rtol=1e-13)


@law
@given(first=DEPTHS, second=DEPTHS)
def test_shared_overlap_obeys_cauchy_schwarz(first, second):
    """(∫w1²w2²)² <= ∫w1⁴ ∫w2⁴, so (U12 μ)² <= U1 U2 m1 m2 / 4 at equal scattering lengths."""
    solved = hubbard_parameters(two_species(StandingWave((first, second)), a22=100 * A0, a12=100 * A0))
    reduced = RB.mass * K.mass / (RB.mass + K.mass)
    assert (solved.U12 * reduced) ** 2 <= solved.U.prod() * RB.mass * K.mass / 4 * (1 + 1e-12)


def test_cross_overlap_by_direct_quadrature():
    step = 1 / 64
    x = np.arange(-30, 30, step)
    overlap = step * (wannier(4.0, x) ** 2 * wannier(17.0, x) ** 2).sum()
    lattice = two_species(StandingWave((4.0, 17.0)))
    reduced = RB.mass * K.mass / (RB.mass + K.mass)
    expected = 2 * math.pi * constants.hbar**2 * 160 * A0 / reduced * (overlap / lattice.spacing) ** 3
    assert pytest.approx(expected, rel=1e-11) == hubbard_parameters(lattice).U12


def test_harmonic_axes_by_closed_form():
    """Gaussian orbitals: ∫w⁴ = 1/(√(2π) ℓ), ∫w1²w2² = 1/√(π(ℓ1²+ℓ2²)), ℓ² = ħ/(mω); elementary integrals."""
    tight = Harmonic((20e3, 35e3))
    lattice = two_species((StandingWave((10.0, 8.0)), tight, tight), dim=1)
    solved = hubbard_parameters(lattice)
    width = np.sqrt(constants.hbar / (np.array([RB.mass, K.mass]) * 2 * math.pi * np.array([20e3, 35e3])))
    own = bands([10.0, 8.0]).quartic / lattice.spacing / (2 * math.pi * width**2)
    expected = 4 * math.pi * constants.hbar**2 / np.array([RB.mass, K.mass]) * np.array([100, 60]) * A0 * own
    np.testing.assert_allclose(solved.U, expected, rtol=1e-13)
    step = 1 / 64
    x = np.arange(-30, 30, step)
    along = step * (wannier(10.0, x) ** 2 * wannier(8.0, x) ** 2).sum() / lattice.spacing
    reduced = RB.mass * K.mass / (RB.mass + K.mass)
    shared = 2 * math.pi * constants.hbar**2 * 160 * A0 / reduced * along / (math.pi * (width**2).sum())
    assert pytest.approx(shared, rel=1e-11) == solved.U12
    assert not solved.t[:, 1:].any()
    np.testing.assert_allclose(solved.band_gap[:, 1], constants.h * np.array([20e3, 35e3]), rtol=1e-14)


def test_deep_lattice_confines_like_its_harmonic_bottom():
    """A trap of frequency 2√s E_R/h gives a U higher than s E_R do by the anharmonic 7/(32√s) per axis."""
    deep = hubbard_parameters(one_species(axes=(StandingWave(8.0), StandingWave(150.0), StandingWave(150.0)), dim=1))
    trap = Harmonic(2 * math.sqrt(150) * float(deep.recoil_hz[0]))
    smooth = hubbard_parameters(one_species(axes=(StandingWave(8.0), trap, trap), dim=1))
    assert smooth.U[0] / deep.U[0] - 1 == pytest.approx(2 * 7 / (32 * math.sqrt(150)), rel=0.1)
    assert smooth.t[0, 0] == pytest.approx(deep.t[0, 0], rel=1e-13)


@law
@given(length=st.floats(-500, 500), depth=st.floats(3, 40))
def test_interaction_is_linear_in_the_scattering_length(length, depth):
    unit = hubbard_parameters(one_species(depth, A0)).U[0]
    assert hubbard_parameters(one_species(depth, length * A0)).U[0] == pytest.approx(length * unit, rel=1e-12)


@law
@given(scale=st.floats(0.5, 2.0), depth=st.floats(3, 40))
def test_everything_scales_with_the_wavelength(scale, depth):
    """At fixed s and a/d all energies go with E_R, hence with 1/λ²."""
    one = hubbard_parameters(one_species(depth, 5e-9))
    other = hubbard_parameters(one_species(depth, 5e-9 * scale, wavelength=1064e-9 * scale))
    for name in ("t", "U", "band_gap", "excitation", "recoil"):
        np.testing.assert_allclose(getattr(other, name) * scale**2, getattr(one, name), rtol=1e-11)


def test_order_of_species_and_axes_does_not_matter():
    axes = (StandingWave((5.0, 7.0)), StandingWave((11.0, 13.0)), StandingWave((30.0, 20.0)))
    solved = hubbard_parameters(two_species(axes))
    turned = hubbard_parameters(two_species(axes[::-1]))
    np.testing.assert_allclose(turned.t[:, ::-1], solved.t, rtol=1e-13)
    np.testing.assert_allclose(turned.U12, solved.U12, rtol=1e-13)
    swapped = tuple(StandingWave(axis.depth[::-1]) for axis in axes)
    other = hubbard_parameters(OpticalLattice(1064e-9, (K, RB), swapped, 60 * A0, 100 * A0, 160 * A0))
    np.testing.assert_allclose(other.t[::-1], solved.t, rtol=1e-13)
    np.testing.assert_allclose(other.U[::-1], solved.U, rtol=1e-13)
    np.testing.assert_allclose(other.U12, solved.U12, rtol=1e-13)


def test_batches_broadcast():
    depth, length = np.linspace(4, 20, 5)[:, None], np.array([50.0, 100.0, 150.0]) * A0
    lattice = two_species(StandingWave((depth, 10.0)), a12=length)
    solved = hubbard_parameters(lattice)
    assert solved.t.shape == (5, 3, 2, 3)
    assert solved.U.shape == (5, 3, 2)
    assert solved.U12.shape == solved.flags.shape == (5, 3)
    point = hubbard_parameters(two_species(StandingWave((float(depth[3, 0]), 10.0)), a12=length[1]))
    np.testing.assert_allclose(solved.U12[3, 1], point.U12, rtol=1e-12)
    np.testing.assert_allclose(solved.t[3, 1], point.t, rtol=1e-12)
    assert all(np.isfinite(v).all() for v in (solved.t, solved.t2_ratio, solved.U, solved.U12, solved.band_gap))


def test_energies_in_other_units():
    solved = hubbard_parameters(two_species(StandingWave((np.array([6.0, 12.0]), 9.0))))
    assert solved.energies_in("U1")["U"][:, 0] == pytest.approx([1, 1], rel=1e-15)
    np.testing.assert_allclose(solved.energies_in("U1")["t"], solved.t / solved.U[:, :1, None], rtol=1e-15)
    np.testing.assert_allclose(solved.energies_in("E_R")["t"][:, 0, 0], bands([6.0, 12.0]).t, rtol=1e-13)
    np.testing.assert_allclose(solved.energies_in("kHz")["U12"], solved.U12 / constants.h / 1e3, rtol=1e-14)
    np.testing.assert_allclose(solved.energies_in("nK")["U"], solved.U / constants.k * 1e9, rtol=1e-14)
    with pytest.raises(InputError, match='did you mean "kHz"'):
        solved.energies_in("khz")
    with pytest.raises(InputError, match="a11 = 0"):
        hubbard_parameters(two_species(a11=0.0)).energies_in("U1")


def test_one_species_keeps_the_species_axis():
    solved = hubbard_parameters(one_species(np.array([5.0, 6.0])))
    assert solved.U.shape == (2, 1)
    assert solved.U12 is None
    assert "U12" not in solved.energies_in("kHz")


# --- flags -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("lattice", "flag"),
    [
        (one_species(10.0), Caution(0)),
        (one_species(4.0), Caution.SECOND_HOPPING),
        (one_species(2.5), Caution.SECOND_HOPPING | Caution.SHALLOW),
        (one_species(30.0, 200 * A0), Caution.SCATTERING_LENGTH),
        (one_species(30.0, -950 * A0), Caution.SCATTERING_LENGTH | Caution.GAP),
        (two_species(a12=0.0, a22=100 * A0), Caution(0)),
        (two_species(a12=900 * A0), Caution.GAP | Caution.SCATTERING_LENGTH),
        (one_species(axes=(StandingWave(10.0), StandingWave(40.0), StandingWave(40.0)), dim=1), Caution(0)),
        (
            one_species(axes=(StandingWave(10.0), StandingWave(25.0), StandingWave(40.0)), dim=1),
            Caution.TRANSVERSE_HOPPING,
        ),
        (
            one_species(axes=(StandingWave(10.0), StandingWave(10.0), StandingWave(25.0)), dim=2),
            Caution.TRANSVERSE_HOPPING,
        ),
        (two_species(StandingWave(20.0), same_light=True, a12=0.0), Caution.ESTIMATED_DEPTH),
    ],
)
def test_flags_go_up_where_they_should(lattice, flag):
    solved = hubbard_parameters(lattice)
    assert Caution(int(solved.flags)) == flag
    assert solved.cautions == sentences(int(flag))


def test_flags_are_per_point_and_sentences_collect_them():
    solved = hubbard_parameters(one_species(np.array([2.0, 4.0, 10.0])))
    assert solved.flags.tolist() == [Caution.SECOND_HOPPING | Caution.SHALLOW, Caution.SECOND_HOPPING, 0]
    assert len(solved.cautions) == 2
    assert all(text.endswith(".") and len(text) < 120 for text in sentences(sum(Caution)))
    assert len(sentences(sum(Caution))) == len(Caution)


# --- bad input -----------------------------------------------------------------------------------------

REFUSALS = [
    (lambda: one_species(0.0), r"depth of axis 1: got 0 E_R, must lie between 0.1 and 200 E_R"),
    (lambda: one_species(-3.0), r"depth of axis 1: got -3 E_R"),
    (lambda: one_species(201.0), r"depth of axis 1: got 201 E_R"),
    (lambda: one_species(math.nan), r"depth of axis 1: got nan E_R"),
    (lambda: one_species(np.array([5.0, math.inf])), r"depth of axis 1: got inf E_R"),
    (lambda: one_species("deep"), r"depth of axis 1: got 'deep', must be numbers in E_R"),
    (lambda: one_species(np.array([])), r"depth of axis 1: got an empty array"),
    (lambda: one_species((5.0, 6.0)), r"depth of axis 1: got a tuple of 2, must be one value or 1"),
    (
        lambda: one_species(axes=(StandingWave(5.0), Harmonic(0.0), Harmonic(9e3)), dim=1),
        r"frequency of axis 2: got 0 Hz",
    ),
    (
        lambda: one_species(axes=(StandingWave(5.0), Harmonic(9e3)), dim=1),
        r"axes: got \['StandingWave', 'Harmonic'\]",
    ),
    (
        lambda: one_species(axes=(StandingWave(5.0), Harmonic(9e3), Harmonic(9e3)), dim=2),
        r"the first 2 \(dim\)",
    ),
    (lambda: one_species(dim=4), r"dim: got 4, must be 1, 2 or 3"),
    (lambda: one_species(wavelength=-1064e-9), r"wavelength: got -1.064e-06 m, must lie between"),
    (lambda: one_species(wavelength=1064), r"wavelength: got 1064 m"),
    (lambda: one_species(wavelength="1064 nm"), r"wavelength: got '1064 nm'"),
    (
        lambda: one_species(a11=1e-6),
        r"scattering length a11: got 1e-06 m, must lie between -5.32e-07 and 5.32e-07 m",
    ),
    (lambda: one_species(a11=math.nan), r"scattering length a11: got nan m"),
    (lambda: one_species(a22=1e-9), r"a22: got 1e-09, must be left out for one species"),
    (lambda: two_species(a12=None), r"a12: got None, must be given in m for two species"),
    (
        lambda: two_species(a12=np.ones(3) * A0, a11=np.ones(2) * A0),
        r"scattering lengths: arrays must broadcast",
    ),
    (
        lambda: two_species(StandingWave((np.ones(3), np.ones(2)))),
        r"depth of axis 1: the species' arrays must",
    ),
    (
        lambda: two_species(StandingWave(np.ones(3)), a12=np.ones(2) * A0),
        r"shapes \(2,\), \(3,\), must broadcast",
    ),
    (
        lambda: two_species(StandingWave((10.0, 9.0)), same_light=True),
        r"same_light needs two species and the first",
    ),
    (
        lambda: two_species(StandingWave(150.0), atoms=(K, RB), same_light=True),
        r"87Rb \(× 2\.\d+ from the same light\)",
    ),
    (lambda: two_species(atoms=(RB, K, K)), r"atoms: got 3 species"),
    (lambda: Atom("x", 0.0), r"mass of x: got 0.0 kg"),
    (lambda: Atom("x", math.inf), r"mass of x: got inf kg"),
    (lambda: atom("88Rb"), r'atom: got "88Rb", must be one of 7Li.*did you mean "8[57]Rb"'),
    (lambda: atom("Rb"), r'did you mean "8[57]Rb"'),
    (lambda: atom("87Rb87"), r"atom: got"),
    (lambda: atom(""), r'atom: got ""'),
    (lambda: atom("x" * 1000), r'atom: got "x{40}…"'),
    (
        lambda: RB.polarisability(780.25e-9),
        r"got 780.25 nm, must be at least 0.05 nm from the 87Rb line at 780.2412 nm",
    ),
    (lambda: atom("168Er").polarisability(1064e-9), r"atoms: 168Er has no D lines .* 7Li, 23Na"),
    (lambda: depth_ratio(775e-9, RB, K), r"wavelength: got 775 nm, where light attracts one of 87Rb and 41K"),
    (lambda: wannier(0.0, 0.0), r"depth: got 0 E_R"),
]


@pytest.mark.parametrize(("mistake", "message"), REFUSALS)
def test_mistakes_get_one_sentence(mistake, message):
    with pytest.raises(InputError, match=message) as caught:
        mistake()
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 260


# --- atoms ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["87Rb", "Rb87", "rb87", "87rb", "Rb-87", " 87 Rb "])
def test_spellings_of_an_atom(name):
    assert atom(name) is RB


def test_every_atom_is_complete():
    for name in atom_names():
        entry = atom(name)
        number = int("".join(c for c in name if c.isdigit()))
        # The mass defect of a bound nucleus is below 0.2 u for every stable one.
        assert entry.mass / constants.atomic_mass == pytest.approx(number, abs=0.2)
        assert len(entry.source) > 20
        assert len(entry.lines) in (0, 2)
        if entry.lines:
            d1, d2 = entry.lines
            assert d1.wavelength > d2.wavelength
            # LS coupling in a light alkali gives 1 : 2; spin-orbit mixing raises it, to 2.08 in Cs.
            assert 1.99 < d2.strength / d1.strength < 2.1


def test_recoil_energy_definition():
    assert recoil_energy(1064e-9, RB.mass) == pytest.approx((constants.h / 1064e-9) ** 2 / (2 * RB.mass), rel=1e-15)


def test_depth_ratio_is_antisymmetric_and_trivial_for_equals():
    assert depth_ratio(1064e-9, RB, RB) == pytest.approx(1, rel=1e-15)
    assert depth_ratio(1064e-9, RB, K) * depth_ratio(1064e-9, K, RB) == pytest.approx(1, rel=1e-14)


def test_same_light_fills_in_the_second_depth():
    solved = two_species(StandingWave(np.array([8.0, 12.0])), same_light=True)
    np.testing.assert_allclose(
        solved.depths[:, 1, 0], [8 * depth_ratio(1064e-9, RB, K), 12 * depth_ratio(1064e-9, RB, K)]
    )
    in_joule = solved.depths[..., 0] * solved.recoil
    ratio = K.polarisability(1064e-9) / RB.polarisability(1064e-9)
    np.testing.assert_allclose(in_joule[:, 1] / in_joule[:, 0], ratio, rtol=1e-14)
