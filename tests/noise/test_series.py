"""Series over temperature and dimension: trends that must hold, and what is refused."""

import numpy as np
import pytest

import gutz
from gutz.errors import InputError
from gutz.noise import noise_series


def test_condensate_and_its_traces_fade_with_heat():
    mixture = gutz.Mixture(t=1.0, U=8.0, mu=3.0, dim=3, species=1, n_max=6)
    ds = noise_series(mixture, [0.0, 2.0, 20.0], (2, 3), sites=64, ansatz="product")
    assert ds["condensate_peak"].dims == ("dim", "T", "species")
    peak = ds["condensate_peak"].values[..., 0]
    assert np.all(peak[:, 0] > peak[:, 1])
    # Far above every transition: no condensate, no pairs of opposite momentum, no negative lines; bunching stays.
    hot = ds.isel(T=2)
    assert not hot["condensate"].values.any()
    assert hot["own_pairing"].values == pytest.approx(0.0)
    assert hot["negative_lines"].values == pytest.approx(0.0)
    assert np.all(hot["bunching"].values > 0.5)
    assert np.all(ds["negative_lines"].values[:, 0] < 0)
    # More neighbours, more condensate.
    assert np.all(np.diff(ds["condensate"].values[:, 0, 0]) > 0)


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"temperatures": [-1.0]}, "temperatures are"),
        ({"temperatures": []}, "temperatures are"),
        ({"temperatures": [0.0], "dims": (4,)}, "among 1, 2 and 3"),
    ],
)
def test_bad_input_is_one_sentence(settings, words):
    with pytest.raises(InputError, match=words):
        noise_series(gutz.Mixture(t=1.0, U=8.0, mu=3.0, dim=3, species=1, n_max=6), **settings)


def test_several_points_and_uneven_hopping_are_refused():
    with pytest.raises(InputError, match="one point"):
        noise_series(gutz.Mixture(t=1.0, U=np.array([1.0, 2.0]), mu=3.0, species=1), [0.0])
    with pytest.raises(InputError, match="depends on the direction"):
        noise_series(gutz.Mixture(t=((1.0, 1.0, 0.5),), U=1.0, mu=3.0, species=1), [0.0])
