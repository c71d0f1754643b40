"""The dressed ansatz through the public door: paired and counterflow phases, drag, couplings, what is refused."""

import numpy as np
import pytest

import gutz
from gutz.phases import Phase
from gutz.status import Status


@pytest.fixture(scope="module")
def counterflow():
    mix = gutz.Mixture(t=np.array([0.01, 0.02, 0.05]), U=1.0, U12=0.5, mu=0.25, T=0.0, dim=3, n_max=3)
    return gutz.solve(mix, ansatz="dressed")


@pytest.fixture(scope="module")
def paired():
    mix = gutz.Mixture(t=np.array([0.01, 0.02, 0.05]), U=1.0, U12=-0.5, mu=-0.25, T=0.0, dim=3, n_max=3)
    return gutz.solve(mix, ansatz="dressed")


def test_phases_follow_the_order(counterflow, paired):
    assert list(counterflow.phase) == [Phase.COUNTERFLOW, Phase.COUNTERFLOW, Phase.SUPERFLUID]
    assert list(paired.phase) == [Phase.PAIRED, Phase.PAIRED, Phase.SUPERFLUID]


def test_counterflow_energy_is_that_of_the_exchange_model(counterflow):
    """Second-order product value of the spin-1/2 model, -(z/2) 2t²(1/U12 + 1/U) - mu, up to fourth order in t.

    Kuklov and Svistunov, PRL 90, 100401 (2003); Duan, Demler, Lukin, PRL 91, 090402 (2003).
    """
    expected = -3 * 2 * 0.01**2 * (1 / 0.5 + 1 / 1.0) - 0.25
    assert abs(float(counterflow.free_energy[0]) - expected) < 1e-5
    assert abs(float(counterflow.antipair_order[0]) - 0.5) < 1e-3


def test_drag_tells_the_phases_apart(counterflow, paired):
    """Rank one along (1, -1) in the counterflow, along (1, 1) in the paired superfluid; no hidden factor."""
    for sol, sign in ((counterflow, -1.0), (paired, 1.0)):
        rho = sol.stiffness[:2, :, :, 0]
        np.testing.assert_allclose(rho[:, 0, 1], sign * rho[:, 0, 0], rtol=1e-6)
        np.testing.assert_allclose(rho[:, 1, 1], rho[:, 0, 0], rtol=1e-6)
        assert np.all(rho[:, 0, 0] > 0)
        assert np.all(np.linalg.eigvalsh(sol.stiffness[2, :, :, 0]) > 0)


def test_uncoupled_species_do_not_drag():
    sol = gutz.solve(gutz.Mixture(t=0.05, U=1.0, U12=0.0, mu=0.3, T=0.0, dim=3, n_max=3), ansatz="dressed")
    assert sol.phase == Phase.SUPERFLUID
    assert abs(sol.stiffness[0, 1, 0]) < 1e-9


def test_dressing_lowers_the_free_energy_of_the_product_state(counterflow):
    product = gutz.solve(counterflow.mixture)
    assert np.all(counterflow.free_energy < product.free_energy)
    assert np.all((counterflow.status & int(Status.FALLBACK)) == 0)
    assert np.all(counterflow.dressing < 0.2)


def test_dataset_has_the_dressing_and_no_residual(counterflow):
    ds = counterflow.to_dataset()
    assert "dressing" in ds and "residual" not in ds
    assert ds.attrs["ansatz"] == "dressed"


def test_flat_density_fields_do_not_move_the_boundary():
    """In the insulator a density field costs exp(-gap/T), nothing in numbers: neither label nor F may depend on it."""
    T = np.linspace(0.0115, 0.015, 8)
    sol = gutz.solve(gutz.Mixture(t=0.0254, U=1.0, U12=0.5, mu=0.25, dim=3, n_max=4, T=T), "dressed")
    assert set(sol.phase.tolist()) == {gutz.Phase.MOTT} and not sol.status.any()
    # F of free spins plus the exchange: -T ln 2 per site and a constant. Where the field is found it lowers F by 3e-6.
    np.testing.assert_allclose(sol.free_energy - sol.free_energy[0], -np.log(2) * (T - T[0]), atol=1e-5)
    np.testing.assert_allclose(sol.entropy, np.log(2), atol=5e-3)


def test_exchange_that_favours_it_staggers_by_itself():
    """(t1 - t2)²/(2 |U12|) > t1²/U1 + t2²/U2: z-Néel order of one atom per site, checkerboard of hard-core pairs.

    Criterion of Kuklov and Svistunov, PRL 90, 100401 (2003) and Duan, Demler, Lukin, PRL 91, 090402 (2003), from
    memory; mean field orders below z J_z/4, J_z = 2 (t1² + t2²)/|U12| for hard cores.
    """
    t = ((0.01,) * 3, (0.001,) * 3)
    soft = gutz.solve(gutz.Mixture(t=t, U=1.0, U12=0.25, mu=0.125, n_max=3, T=[0.0002, 0.002]), "dressed")
    assert soft.phase.tolist() == [gutz.Phase.NEEL, gutz.Phase.MOTT]
    np.testing.assert_allclose(soft.staggering[:, 0], -soft.staggering[:, 1], atol=1e-9)
    t = ((0.003,) * 3, (0.0003,) * 3)
    T = np.array([0.95, 1.0]) * 6 * 2 * (0.003**2 + 0.0003**2) / 0.25 / 4
    hard = gutz.solve(gutz.Mixture(t=t, U=1.0, U12=-0.25, mu=-0.125, n_max=1, T=T), "dressed")
    assert hard.phase.tolist() == [gutz.Phase.DENSITY_WAVE, gutz.Phase.NORMAL]
    np.testing.assert_allclose(hard.staggering[:, 0], hard.staggering[:, 1], atol=1e-9)
    assert not (hard.status & int(gutz.Status.FALLBACK)).any()
