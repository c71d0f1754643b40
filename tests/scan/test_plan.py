"""The grid and its parameters: chunks cover every point once, units convert by CODATA, numbers match optics."""

import math

import numpy as np
import pytest
from conftest import LATTICE, MIXTURE
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from gutz.atoms import atom
from gutz.errors import InputError
from gutz.optics import OpticalLattice, StandingWave, hubbard_parameters
from gutz.scan import document, plan, schema, spec


def make(text, *overrides):
    return plan.plan(spec.check(document.parse(text, "x.toml", overrides)))


@settings(max_examples=200, derandomize=True, deadline=None)
@given(st.lists(st.integers(2, 300), min_size=1, max_size=4))
def test_chunks_cover_the_grid_once_and_are_bounded(shape):
    if math.prod(shape) > 2_000_000:
        return
    chunk = plan.chunk_shape(tuple(shape))
    assert math.prod(chunk) <= max(plan.CHUNK_POINTS)
    pieces = [-(-n // c) for n, c in zip(shape, chunk, strict=True)]
    # Even pieces: padding the last chunk of an axis repeats fewer points than there are chunks.
    for n, c, k in zip(shape, chunk, pieces, strict=True):
        assert 0 <= k * c - n < k


def test_regions_tile_the_grid():
    full = make(MIXTURE)
    seen = np.zeros(full.shape, int)
    for index in full.indices():
        seen[full.region(index)] += 1
    assert np.all(seen == 1)
    for index in full.indices():
        assert tuple(p.size for p in full.picked(index)) == full.chunk


def test_a_million_points_have_few_files():
    """Files per variable at 10^6 points: 200 would need chunks of 5,000 points, the solver wants at most 4,096."""
    chunk = plan.chunk_shape((100, 100, 100))
    assert math.prod(-(-100 // c) for c in chunk) <= 300


def test_axes_land_on_the_parameters_they_name():
    full = make(
        MIXTURE.replace('"mixture.t"', '"mixture.t.2.xy"')
        .replace('"mixture.mu"', '"mixture.mu.1"')
        .replace("[axes.mu]", "[axes.mu1]"),
        "mixture.t=[[0.01,0.02,0.03],[0.04,0.05,0.06]]",
        "mixture.mu=[9, 0.7]",
    )
    found = full.settings([np.array([0.1, 0.2]), np.array([0.5])], None)
    assert [np.ravel(part).tolist() for part in found["mu"]] == [[0.1, 0.2], [0.7]]
    hopping = [[np.ravel(part).tolist() for part in species] for species in found["t"]]
    assert hopping == [[[0.01], [0.02], [0.03]], [[0.5], [0.5], [0.06]]]


def test_lattice_energies_are_in_recoils_of_the_first_species():
    """E_R = h^2 / (2 m lambda^2) with CODATA constants; a plain computation in SI units is the reference."""
    full = make(LATTICE)
    picked = [np.array([12.0]), np.array([5.0, 10.0])]
    found = full.settings(picked, full.lattice(picked))
    mass = 86.909180531 * constants.atomic_mass  # 87Rb, Atomic Mass Evaluation (literature list, from memory)
    recoil = constants.h**2 / (2 * mass * (1064e-9) ** 2)
    assert found["T"].ravel() == pytest.approx([5e-9 * constants.k / recoil, 10e-9 * constants.k / recoil], rel=1e-7)
    a0 = constants.physical_constants["Bohr radius"][0]
    rubidium = atom("87Rb")
    direct = hubbard_parameters(
        OpticalLattice(1064e-9, (rubidium, rubidium), StandingWave(12.0), a11=100.4 * a0, a22=95.44 * a0, a12=90 * a0)
    )
    assert found["t"][0][0].ravel() == pytest.approx(direct.t[0, 0] / recoil, rel=1e-7)
    assert np.ravel(found["U12"]) == pytest.approx(direct.U12 / recoil, rel=1e-7)
    # 4t/E_R at s = 10 from the table in Bloch, Dalibard, Zwerger, Rev. Mod. Phys. 80, 885 (2008) (from memory).
    at_ten = full.settings([np.array([10.0]), picked[1]], full.lattice([np.array([10.0]), picked[1]]))
    assert 4 * at_ten["t"][0][0].item() == pytest.approx(0.076730, abs=5e-7)


@pytest.mark.parametrize(
    "unit, size",
    [("nK", constants.k * 1e-9), ("uK", constants.k * 1e-6), ("Hz", constants.h), ("kHz", 1e3 * constants.h)],
)
def test_units_of_energy(unit, size):
    full = make(LATTICE, f"axes.T.unit={unit}")
    picked = [np.array([12.0]), np.array([3.0])]
    lattice = full.lattice(picked)
    found = full.settings(picked, lattice)["T"].item()
    assert found * lattice.recoil[0] == pytest.approx(3.0 * size, rel=1e-9)


@pytest.mark.parametrize("unit, part", [("U1", ("U", 0)), ("U2", ("U", 1)), ("t1", ("t", 0)), ("E_R", None)])
def test_units_that_follow_the_lattice(unit, part):
    full = make(LATTICE, f"axes.T.unit={unit}")
    picked = [np.array([9.0, 14.0]), np.array([3.0])]
    found = full.settings(picked, full.lattice(picked))
    if part is None:
        expected = np.array([[3.0]])
    else:
        value = found[part[0]][part[1]]
        expected = 3.0 * (value[0] if isinstance(value, tuple) else value)
    assert np.allclose(found["T"], expected, rtol=1e-12)


def test_tubes_may_be_harmonic():
    full = make(
        LATTICE,
        'lattice.depth=[10, "20 kHz", "20 kHz"]',
        "lattice.dim=1",
        "axes.depth.parameter=lattice.depth.x",
    )
    found = full.lattice([np.array([10.0]), np.array([1.0])])
    assert found.t.shape[-1] == 3
    assert np.all(found.t[..., 1:] == 0)
    assert found.band_gap[..., 1].ravel() == pytest.approx([20e3 * constants.h] * 2, rel=1e-12)


def test_one_point_is_chosen_by_name():
    full = make(LATTICE)
    point = plan.at(full, {"depth": 12.5, "T": 3.0})
    assert point.shape == (1, 1)
    assert [axis.values.item() for axis in point.axes] == [12.5, 3.0]
    for values, words in (
        ({"depth": 12}, "the axes T need a value each"),
        ({"depth": 12, "T": 1, "k": 2}, "--at k: is not an axis"),
        ({"depth": 12, "T": -1}, "--at T: -1 is not allowed"),
    ):
        with pytest.raises(InputError, match=words):
            plan.at(full, values)


@pytest.mark.parametrize(
    "overrides, words",
    [
        (["mixture.U12=-1.5"], "collapses"),
        (["mixture.n_max=13"], "n_max is 13"),
        (
            ["axes.mu.parameter=mixture.filling", "mixture.n_max=1"],
            "mixture.filling reaches 1.3; it must stay below n_max = 1",
        ),
    ],
)
def test_grids_without_sense_are_refused(overrides, words):
    full = make(MIXTURE.replace("[axes.mu]", "[axes.n]"), *[o.replace("axes.mu", "axes.n") for o in overrides])
    with pytest.raises(InputError, match=words.replace("(", r"\(")):
        plan.check_physics(full)


def test_grids_that_collapse_in_part_are_allowed():
    text = MIXTURE.replace('"mixture.t"', '"mixture.U12"').replace("start = 0.0", "start = -2.0")
    plan.check_physics(make(text, "mixture.t=0.02"))


def test_large_grids_are_checked_thinned_and_fast():
    full = make(MIXTURE, "axes.hop.points=1000000", "axes.mu.points=100")
    assert full.points == 10**8
    plan.check_physics(full)
    assert schema.bytes_per_point(full) * full.points > 10**10


def test_two_attractive_species_cannot_have_attractive_atoms():
    with pytest.raises(InputError, match="U of species 1"):
        plan.check_physics(make(LATTICE, "lattice.a11=-5 a0"))
