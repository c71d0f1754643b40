"""Whole maps against exact diagonalisation: one table of errors, each entry with its bound.

The references are our own exact diagonalisation (`gutz.exact.ed`, itself tested against published energies). The
error is the Frobenius norm of the difference over that of the exact map, shot noise included. docs/noise.md quotes
this table.
"""

import numpy as np
import pytest

import gutz
from gutz.exact import ed
from gutz.exact.lattice import LatticeModel, box, ring
from gutz.noise import Validity, maps

TORUS = {1: 0.04, 4: 0.03, 8: 0.03, 12: 0.13, 14: 0.15, 16: 0.15, 18: 0.15, 20: 0.08, 24: 0.15, 30: 0.06, 60: 0.03}
RING = {1: 0.03, 2: 0.04, 4: 0.10, 5: 0.15, 6: 0.15, 8: 0.15, 10: 0.15, 12: 0.16, 20: 0.08, 40: 0.03}
"""U/t and the largest error allowed, filling 1: the 3 x 3 torus and the ring of six."""


def error(found: np.ndarray, exact: np.ndarray) -> float:
    return float(np.linalg.norm(found - exact) / np.linalg.norm(exact))


def exact_map(state: ed.State, a: int, b: int) -> np.ndarray:
    out = ed.noise_map(state, a, b)
    return out + np.diag(ed.momentum_distribution(state, a)) if a == b else out


def one_species(cluster, shape, bounds, filling=1.0):
    """(U, error of the map, error of n(k), validity) for every U, at most eight to a solve."""
    values = list(bounds)
    atoms = round(filling * len(cluster.positions))
    for begin in range(0, len(values), 8):
        U = np.array(values[begin : begin + 8], float)
        mixture = gutz.Mixture(t=1.0, U=U, filling=filling, dim=len(shape), species=1, n_max=6)
        solution = gutz.solve(mixture, ansatz="dressed")
        for u, (made, validity), trusted in zip(U, maps(solution, shape), np.asarray(solution.trusted), strict=True):
            if not trusted:  # no uniform state of this filling: nothing to compare
                assert validity is Validity.QUALITATIVE
                continue
            state = ed.ground_state(LatticeModel(cluster, t=(1.0,), U=(u,), n_max=5), atoms)
            n = ed.momentum_distribution(state, 0)
            yield u, error(made.with_shot_noise(0, 0), exact_map(state, 0, 0)), error(made.mean[0], n), validity


QUICK = {U: TORUS[U] for U in (4, 8, 14, 18, 30)}


@pytest.mark.parametrize(
    ("cluster", "shape", "bounds"),
    [
        pytest.param(box((3, 3)), (3, 3), QUICK, id="torus, some"),
        pytest.param(box((3, 3)), (3, 3), TORUS, id="torus", marks=pytest.mark.slow),
        pytest.param(ring(6), (6,), RING, id="ring", marks=pytest.mark.slow),
    ],
)
def test_one_species_filling_one(cluster, shape, bounds):
    for U, found, in_n, validity in one_species(cluster, shape, bounds):
        assert found < bounds[U], f"U/t = {U}"
        assert in_n < 0.17
        # The class must not promise more than there is.
        assert found < {Validity.GOOD: 0.08, Validity.FAIR: 0.2}.get(validity, 1.0), f"U/t = {U}"


@pytest.mark.slow
@pytest.mark.parametrize(
    ("cluster", "shape", "filling"),
    [(ring(8), (8,), 1.0), (box((2, 4)), (2, 4), 1.0), (box((3, 3)), (3, 3), 2 / 3), (ring(6), (6,), 2 / 3)],
    ids=["ring 8", "torus 2x4", "torus 3x3, 6 atoms", "ring 6, 4 atoms"],
)
def test_validity_on_lattices_that_were_not_used_to_choose_the_recipe(cluster, shape, filling):
    limits = {Validity.GOOD: 0.1, Validity.FAIR: 0.2, Validity.QUALITATIVE: 0.5}
    for U, found, _, validity in one_species(cluster, shape, (1, 4, 6, 8, 12, 16, 20, 30), filling):
        assert found < limits[validity], f"U/t = {U}"


def paired_states(L, t, U12):
    """Paired (U12 < 0) or counterflow states at half filling each; mu that does it is found from the filling."""
    n_max, low, high = 3, 0.5 * U12, 0.5 * U12
    if U12 < 0:
        low = low - 8 * t * t / abs(U12)
    for _ in range(1 if U12 > 0 else 8):
        mu = np.linspace(low, high, 8)
        mixture = gutz.Mixture(t=t, U=1.0, U12=U12, mu=mu, T=0.0, dim=1, n_max=n_max)
        solution = gutz.solve(mixture, ansatz="dressed")
        paired = np.isin(np.asarray(solution.phase), (gutz.Phase.PAIRED, gutz.Phase.COUNTERFLOW))
        filling = np.where(paired, np.asarray(solution.filling)[:, 0], np.inf)
        best = int(np.argmin(np.abs(filling - 0.5)))
        if abs(filling[best] - 0.5) < 1e-5:
            break
        step = (high - low) / 7
        low, high = mu[best] - step, mu[best] + step
    assert filling[best] == pytest.approx(0.5, abs=2e-3)
    one = gutz.solve(gutz.Mixture(t=t, U=1.0, U12=U12, mu=mu[best], T=0.0, dim=1, n_max=n_max), ansatz="dressed")
    return maps(one, L)[0]


# t/U, U12/U, bounds on the errors of C12 and C11 on rings of 4 and 6.
PAIRED = [
    (0.005, 0.8, 0.10, 0.05),
    (0.02, 0.6, 0.19, 0.08),
    (0.02, 0.9, 0.08, 0.03),
    (0.05, 0.8, 0.18, 0.07),
    (0.02, -0.8, 0.11, 0.05),
    (0.05, -0.6, 0.22, 0.13),
]


@pytest.mark.slow
@pytest.mark.parametrize(("t", "U12", "in_12", "in_11"), PAIRED)
@pytest.mark.parametrize("L", [4, 6])
def test_paired_and_counterflow_rings(L, t, U12, in_12, in_11):
    made, validity = paired_states(L, t, U12)
    state = ed.ground_state(LatticeModel(ring(L), t=(t, t), U=(1.0, 1.0), U12=U12, n_max=3), (L // 2, L // 2))
    e12, e11 = (error(made.with_shot_noise(0, b), exact_map(state, 0, b)) for b in (1, 0))
    assert e12 < in_12
    assert e11 < in_11
    assert validity is not Validity.GOOD or max(e12, e11) < 0.2
