"""Verdicts, distances and interpolation: rules that can be stated without any solver."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gutz.comparison import verdicts
from gutz.comparison.judge import NAMES, Judgement, interpolate
from gutz.comparison.places import Places, distances
from gutz.comparison.references import References
from gutz.comparison.verdicts import Flag, Verdict
from gutz.phases import Phase
from gutz.status import Status

PHASE = NAMES.index("phase")


def chain_places(U, filling, **more):
    """One-species chains at T = 0, hopping 1."""
    U = np.atleast_1d(np.asarray(U, float))
    filling = np.broadcast_to(np.asarray(filling, float), U.shape)
    size = U.size
    given = {"U12": np.zeros(size), "T": np.zeros(size), "hard_core": np.zeros(size, bool)} | more
    return Places(np.ones((size, 1)), U[:, None], given["U12"], filling[:, None], given["T"], given["hard_core"])


def mixture(t=(1.0, 1.0), U=(20.0, 20.0), U12=10.0, filling=(0.5, 0.5), T=0.0):
    return Places(np.array([t]), np.array([U]), np.array([U12]), np.array([filling]), np.array([T]), np.array([False]))


# --- verdicts -----------------------------------------------------------------------------------------------


def test_thresholds():
    errors = [0.0, 0.1, 0.1001, 0.5, 0.5001, np.inf, np.nan]
    assert verdicts.verdict(errors).tolist() == [0, 0, 1, 1, 2, 2, -1]


def row(**errors):
    values = np.full((1, len(NAMES)), np.nan)
    for name, error in errors.items():
        values[0, NAMES.index(name)] = error
    return values


@pytest.mark.parametrize(
    ("errors", "number", "code"),
    [
        ({"energy": 0.02, "phase": 0.0}, 0.01, Verdict.QUANTITATIVE),
        ({"energy": 0.2, "coherence": 0.0, "phase": 0.0}, 0.2 / 3, Verdict.QUALITATIVE),
        ({"energy": 0.0, "coherence": 0.0, "phase": 1.0}, 1 / 3, Verdict.WRONG),
        ({"energy": 7.0, "phase": 0.0}, 0.5, Verdict.WRONG),
        ({"energy": 7.0, "coherence": 0.0, "phase": 0.0}, 1 / 3, Verdict.QUALITATIVE),
        ({}, np.nan, Verdict.NOT_JUDGED),
    ],
)
def test_overall(errors, number, code):
    value, found = verdicts.overall(row(**errors), PHASE)
    assert value[0] == pytest.approx(number, nan_ok=True)
    assert found[0] == code


def test_labels_without_order_mean_the_same():
    assert verdicts.same_phase(Phase.NORMAL, Phase.MOTT)
    assert not verdicts.same_phase(Phase.SUPERFLUID, Phase.MOTT)
    assert not verdicts.same_phase(Phase.PAIRED, Phase.COUNTERFLOW)


@pytest.mark.parametrize(
    ("phase", "condensate", "status", "lockable", "expected"),
    [
        (Phase.SUPERFLUID, 0.5, 0, False, Flag.LONG_RANGE_CLAIMED | Flag.DEPLETION_DIVERGES),
        (Phase.SUPERFLUID, 0.5, 0, True, Flag.LONG_RANGE_CLAIMED | Flag.DEPLETION_DIVERGES),
        (Phase.MOTT, 0.5, 0, True, Flag.LONG_RANGE_CLAIMED | Flag.DEPLETION_DIVERGES | Flag.LOCKING_MISSED),
        (Phase.MOTT, 0.0, Status.DRESSING_LARGE, True, Flag.DRESSING_LARGE),
        (Phase.PAIRED, 0.0, Status.FALLBACK, False, Flag.LONG_RANGE_CLAIMED | Flag.FALLBACK),
        (Phase.MOTT, 0.0, Status.NOT_CONVERGED, False, Flag.UNTRUSTED),
    ],
)
def test_flags(phase, condensate, status, lockable, expected):
    found = verdicts.flags([int(phase)], [condensate], [int(status)], [lockable])
    assert found.tolist() == [int(expected)]


def test_every_flag_and_verdict_has_words():
    assert set(verdicts.SENTENCES) == set(Flag)
    assert set(verdicts.WORDS) == set(Verdict)


# --- distances ----------------------------------------------------------------------------------------------


def test_distance_knows_no_unit_of_energy():
    scaled = Places(
        np.array([[3.0, 3.0]]), np.array([[60.0, 60.0]]), np.array([30.0]), np.array([[0.5, 0.5]]), np.array([0.0]),
        np.array([False]),
    )  # fmt: skip
    assert distances(mixture(), scaled)[0, 0] == pytest.approx(0.0, abs=1e-12)


@settings(max_examples=40, deadline=None)
@given(
    t2=st.floats(0.2, 2.0), U2=st.floats(1.0, 50.0), U12=st.floats(-20.0, 20.0), n2=st.floats(0.1, 1.0),
    T=st.floats(0.0, 2.0),
)  # fmt: skip
def test_names_of_the_species_do_not_matter(t2, U2, U12, n2, T):
    one = mixture(t=(1.0, t2), U=(20.0, U2), U12=U12, filling=(0.5, n2), T=T)
    assert distances(one, one.swapped())[0, 0] == pytest.approx(0.0, abs=1e-9)
    assert distances(one, mixture())[0, 0] == pytest.approx(distances(mixture(), one)[0, 0], rel=1e-9, abs=1e-12)


def test_a_whole_filling_is_far_from_any_other():
    assert distances(chain_places(8.0, 1.0), chain_places(8.0, 0.98))[0, 0] > 1
    assert distances(chain_places(8.0, 0.5), chain_places(8.0, 0.52))[0, 0] < 0.2


# --- interpolation ------------------------------------------------------------------------------------------


def judgement(errors):
    values = np.full((len(errors), len(NAMES)), np.nan)
    values[:, 0] = errors
    blank = np.zeros(len(errors))
    return Judgement("product", values, values, values, blank, blank.astype(np.int8), blank.astype(np.int32), blank)


STRENGTHS = np.array([4.0, 6.0, 40.0])
SOME = References((), (), chain_places(STRENGTHS, 1.0))


def test_at_a_reference_its_own_error_stands():
    found = interpolate(chain_places([6.0], 1.0), SOME, judgement([0.1, 0.3, 0.9]))
    assert found.errors[0, 0] == pytest.approx(0.3)
    assert (found.nearest[0], found.distance[0]) == (1, pytest.approx(0.0, abs=1e-9))


def test_between_references_the_error_lies_between_and_the_nearer_weighs_more():
    found = interpolate(chain_places([4.5], 1.0), SOME, judgement([0.1, 0.3, 0.9]))
    assert 0.1 < found.errors[0, 0] < 0.2
    assert (found.lowest[0, 0], found.highest[0, 0]) == (0.1, 0.3)


def test_far_from_all_references_nothing_is_said():
    for far in (chain_places([1.0], 1.0), chain_places([5.0], 0.9), chain_places([5.0], 1.0, T=np.array([3.0]))):
        found = interpolate(far, SOME, judgement([0.1, 0.3, 0.9]))
        assert np.isnan(found.errors).all()
        assert found.verdict[0] == Verdict.NOT_JUDGED
        assert found.distance[0] > 1


def test_an_error_without_bound_counts_as_one():
    found = interpolate(chain_places([4.0], 1.0), SOME, judgement([np.inf, 0.3, 0.9]))
    assert found.errors[0, 0] == 1.0


def test_order_of_points_does_not_matter():
    points = chain_places([4.2, 5.0, 30.0, 100.0], 1.0)
    whole = interpolate(points, SOME, judgement([0.1, 0.3, 0.9])).errors
    back = interpolate(points[::-1], SOME, judgement([0.1, 0.3, 0.9])).errors
    np.testing.assert_allclose(whole, back[::-1])
