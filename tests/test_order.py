"""What order means in each dimension: labels, ranges, exponents, lengths.

Sources beside the checks. Closed forms of the hydrodynamics (Giamarchi, Quantum Physics in One Dimension, OUP 2004) are
worked out here for one component and for equal components by hand; the module uses matrices.
"""

import numpy as np
import pytest

import gutz
from gutz.order import by_dimension
from gutz.phases import Phase, Range, words


def outputs(size=1, species=2, **changes):
    """A superfluid of both species with unit stiffness and compressibility, filling 1/3 each, T = 0."""
    eye = np.eye(species)
    base = {
        "T": np.zeros(size),
        "filling": np.full((size, species), 1 / 3),
        "order_parameter": np.full((size, species), 0.5),
        "pair_order": np.full(size, 0.25 * (species - 1)),
        "antipair_order": np.full(size, 0.25 * (species - 1)),
        "number_variance": np.tile(0.3 * eye, (size, 1, 1)),
        "compressibility": np.tile(eye, (size, 1, 1)),
        "staggering": np.zeros((size, species)),
    }
    stiffness = changes.pop("stiffness", eye)
    dim = changes.pop("dim", 1)
    base["stiffness"] = np.repeat(np.broadcast_to(stiffness, (size, species, species))[..., None], dim, -1)
    return {**base, **changes}, np.ones((size, species, dim))


def test_three_dimensions_and_cold_planes_have_long_range_order():
    for dim, T in ((3, 0.0), (3, 0.4), (2, 0.0)):
        found = by_dimension(*outputs(dim=dim, T=np.array([T])))
        assert found["phase"][0] == Phase.SUPERFLUID and found["order_range"][0] == Range.LONG
        assert found["exponent"].tolist() == [[0.0, 0.0]] and found["exponent_pair"][0] == 0.0
        assert np.isinf(found["coherence_length"]).all()


def test_one_component_in_a_plane_follows_the_jump_rule():
    # Nelson and Kosterlitz, PRL 39, 1201 (1977): order while T < (pi/2) rho, where the exponent reaches 1/4.
    rho = 0.7
    T = np.array([0.5, 0.999, 1.001]) * np.pi / 2 * rho
    found = by_dimension(*outputs(3, species=1, dim=2, T=T, stiffness=[[rho]]))
    assert found["phase"].tolist() == [Phase.SUPERFLUID, Phase.SUPERFLUID, Phase.NORMAL]
    assert found["order_range"].tolist() == [Range.QUASI, Range.QUASI, Range.NONE]
    np.testing.assert_allclose(found["exponent"][:2, 0], [1 / 8, 0.999 / 4], rtol=1e-9)
    assert found["exponent"][2, 0] == np.inf and found["coherence_length"][2, 0] == 0.0


def test_unequal_directions_enter_by_their_geometric_mean():
    given, t = outputs(species=1, dim=2, T=np.array([0.1]))
    given["stiffness"] = np.array([[[[0.2, 0.8]]]])
    # <(theta(r) - theta(0))²> of rho_x k_x² + rho_y k_y²: scaling one coordinate leaves sqrt(rho_x rho_y).
    np.testing.assert_allclose(by_dimension(given, t)["exponent"][0, 0], 0.1 / (2 * np.pi * 0.4), rtol=1e-9)


def test_drag_can_unbind_relative_vortices_first():
    # Energies per log of vortices with windings (1,0), (1,1), (1,-1): pi times 1, 2(1 + d), 2(1 - d).
    drag, T = 0.7, np.array([np.pi / 2 * 0.8])
    paired = by_dimension(*outputs(dim=2, T=T, stiffness=[[1, drag], [drag, 1]]))
    assert paired["phase"][0] == Phase.PAIRED and paired["order_range"][0] == Range.QUASI
    assert np.isinf(paired["exponent"]).all() and np.isinf(paired["exponent_antipair"][0])
    counter = by_dimension(*outputs(dim=2, T=T, stiffness=[[1, -drag], [-drag, 1]]))
    assert counter["phase"][0] == Phase.COUNTERFLOW
    both = by_dimension(*outputs(dim=2, T=T, stiffness=np.eye(2)))
    assert both["phase"][0] == Phase.SUPERFLUID


@pytest.mark.parametrize(("rho", "kappa"), [(0.3, 2.0), (1.0, 1.0)])
def test_chain_of_one_component(rho, kappa):
    K = np.pi * np.sqrt(rho * kappa)
    cold = by_dimension(*outputs(species=1, stiffness=[[rho]], compressibility=np.array([[[kappa]]])))
    assert cold["order_range"][0] == Range.QUASI
    np.testing.assert_allclose(cold["exponent"][0, 0], 1 / (2 * K), rtol=1e-9)
    warm = by_dimension(*outputs(species=1, stiffness=[[rho]], T=np.array([0.2])))
    assert warm["order_range"][0] == Range.SHORT and np.isinf(warm["exponent"][0, 0])
    np.testing.assert_allclose(warm["coherence_length"][0, 0], 2 * rho / 0.2, rtol=1e-9)


def test_chain_of_two_components_is_two_normal_modes():
    # Equal species: total and relative phase decouple, rho± = rho ± drag, kappa± likewise.
    rho, drag, kappa, cross = 0.8, 0.1, 1.5, -0.4
    modes = {s: np.sqrt((rho + s * drag) * (kappa + s * cross)) for s in (1, -1)}
    found = by_dimension(
        *outputs(stiffness=[[rho, drag], [drag, rho]], compressibility=np.array([[[kappa, cross], [cross, kappa]]]))
    )
    np.testing.assert_allclose(found["exponent_pair"], 2 / modes[1] / (2 * np.pi), rtol=1e-9)
    np.testing.assert_allclose(found["exponent_antipair"], 2 / modes[-1] / (2 * np.pi), rtol=1e-9)
    alone = 0.5 * (1 / modes[1] + 1 / modes[-1]) / (2 * np.pi)
    np.testing.assert_allclose(found["exponent"][0], [alone, alone], rtol=1e-9)


@pytest.mark.parametrize("sign", [1, -1])
def test_paired_and_counterflow_chains_have_rank_one(sign):
    order = {1: ("pair_order", "antipair_order"), -1: ("antipair_order", "pair_order")}[sign]
    v = np.array([1.0, sign])
    found = by_dimension(
        *outputs(
            order_parameter=np.zeros((1, 2)),
            stiffness=0.2 * np.outer(v, v),
            compressibility=3.0 * np.outer(v, v)[None],
            number_variance=np.full((1, 2, 2), 0.25) * np.outer(v, v),
            **{order[0]: np.array([0.4]), order[1]: np.zeros(1)},
        )
    )
    name = "pair" if sign == 1 else "antipair"
    np.testing.assert_allclose(found[f"exponent_{name}"], 1 / (2 * np.pi * np.sqrt(0.6)), rtol=1e-5)
    assert found["order_range"][0] == Range.QUASI
    assert words(found["phase"][0], found["order_range"][0]).startswith("quasi-long-range")


def test_commensurate_chain_locks_below_two():
    # Kosterlitz-Thouless value of the Luttinger parameter at whole filling: K = 2 (Giamarchi 1997, textbook above).
    for K, phase in ((2.01, Phase.SUPERFLUID), (1.99, Phase.MOTT)):
        given = outputs(species=1, filling=np.ones((1, 1)), stiffness=[[K / np.pi]])
        given[0]["compressibility"] = np.array([[[K / np.pi]]])
        assert by_dimension(*given)["phase"][0] == phase
        given[0]["filling"] = np.full((1, 1), 0.9)
        assert by_dimension(*given)["phase"][0] == Phase.SUPERFLUID


def test_total_filling_one_locks_the_total_density_into_counterflow():
    given, t = outputs(filling=np.array([[0.4, 0.6]]), stiffness=0.3 * np.eye(2), compressibility=0.3 * np.eye(2)[None])
    found = by_dimension(given, t)  # pi w.G.w = 0.6 pi < 2 for w = (1, 1)
    assert found["phase"][0] == Phase.COUNTERFLOW and found["order_range"][0] == Range.QUASI


def test_product_ansatz_with_the_jump_rule_in_the_plane():
    # Hard core, half filling: phi² = (1 - x²)/4 with 4T atanh(x)/(4t x) = ..., so T_KT/t = 0.766 from the product
    # stiffness (own computation); published 0.685 to 0.69 (Harada and Kawashima 1998, from memory).
    T = np.array([0.70, 0.76, 0.77])
    sol = gutz.solve(gutz.Mixture(t=1.0, U=1.0, mu=0.0, species=1, dim=2, n_max=1, T=T))
    assert sol.phase.tolist() == [Phase.SUPERFLUID, Phase.SUPERFLUID, Phase.NORMAL]


def test_product_ansatz_with_the_locking_rule_in_the_chain():
    # Accepted value of the transition at one atom per site: U/t = 3.3 (t/U = 0.297 to 0.305); bare mean field 11.66.
    # With K = 2 the product ansatz comes to 4.1 (own computation).
    U_over_t = np.array([3.0, 4.0, 4.2, 11.0])
    sol = gutz.solve(gutz.Mixture(t=1 / U_over_t, U=1.0, filling=1.0, species=1, dim=1, n_max=6))
    assert sol.phase.tolist() == [Phase.SUPERFLUID, Phase.SUPERFLUID, Phase.MOTT, Phase.MOTT]
    assert set(sol.order_range.tolist()) == {Range.QUASI, Range.NONE}


def test_no_chain_is_called_long_ranged():
    rng = np.random.default_rng(5)
    size = 256
    sol = gutz.solve(
        gutz.Mixture(
            t=rng.uniform(0, 0.3, size), U=1.0, U12=rng.uniform(-0.8, 0.9, size), mu=rng.uniform(0, 1.5, size),
            T=np.where(rng.random(size) < 0.5, 0.0, 0.05), dim=1, n_max=3,
        )
    )  # fmt: skip
    assert Range.LONG not in sol.order_range
    assert {Range.QUASI, Range.SHORT} <= set(sol.order_range.tolist())
