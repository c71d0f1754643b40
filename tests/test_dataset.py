"""Labelled results: shapes, units and flags survive the way into xarray."""

import numpy as np
import pytest

import gutz
from gutz.errors import InputError
from gutz.status import SENTENCES, Status, describe
from gutz.variables import ABSENT, VARIABLES


@pytest.fixture(scope="module")
def solution():
    t = np.linspace(0.01, 0.05, 3)[:, None]
    mix = gutz.Mixture(t=t, U=1.0, U12=0.5, mu=np.array([0.2, 0.6]), T=0.05, dim=2, n_max=3)
    return gutz.solve(mix)


def test_every_output_is_labelled(solution):
    ds = solution.to_dataset(dims=["t", "mu_given"], energy_unit="E_R")
    assert dict(ds.sizes) == {"t": 3, "mu_given": 2, "species": 2, "species_": 2, "direction": 2}
    assert set(ds.data_vars) == set(VARIABLES) - set(ABSENT["product"])
    for name, array in ds.data_vars.items():
        assert array.dims == ("t", "mu_given", *VARIABLES[name].dims)
        assert array.dtype == VARIABLES[name].dtype
        assert array.attrs["units"] and array.attrs["long_name"]
        np.testing.assert_array_equal(array, getattr(solution, name))
    assert ds.free_energy.attrs["units"] == "E_R"
    assert ds.compressibility.attrs["units"] == "1 / E_R"
    assert ds.entropy.attrs["units"] == "k_B"
    assert ds.attrs["ansatz"] == "product"
    assert len(ds.phase.attrs["flag_values"]) == len(ds.phase.attrs["flag_meanings"].split())
    assert len(ds.status.attrs["flag_masks"]) == len(ds.status.attrs["flag_meanings"].split())


def test_wrong_number_of_names_is_refused(solution):
    with pytest.raises(InputError, match="dims has 1 names; the solution has 2 batch axes"):
        solution.to_dataset(dims=["t"])


def test_unknown_output_and_output_of_the_other_ansatz(solution):
    with pytest.raises(AttributeError, match="dressing is not an output of the product ansatz"):
        _ = solution.dressing
    with pytest.raises(AttributeError):
        _ = solution.nonsense


def test_every_status_bit_has_words():
    assert set(SENTENCES) == {s for s in Status if s != Status.OK}
    assert describe(0) == []
    assert describe(-1) == ["not computed yet"]
    assert describe(int(Status.CUTOFF | Status.PLATEAU)) == [SENTENCES[Status.CUTOFF], SENTENCES[Status.PLATEAU]]
