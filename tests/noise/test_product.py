"""Maps of product states against brute force with full many-site matrices, and the laws every map obeys."""

from itertools import product as combinations

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from gutz.errors import InputError, ResourceError
from gutz.fock import local_space
from gutz.noise import ProductMap, local_moments
from gutz.noise.projection import projected, projected_uniform

TINY = 1e-12


def random_state(rng, size: int, pure: bool) -> np.ndarray:
    root = rng.normal(size=(size, 1 if pure else size)) + 1j * rng.normal(size=(size, 1 if pure else size))
    rho = root @ root.conj().T
    return rho / np.trace(rho).real


def conserving(rho: np.ndarray, key: np.ndarray) -> np.ndarray:
    """The part of a state that keeps a number: no coherence between its different values."""
    kept = rho * (key[:, None] == key[None, :])
    return kept / np.trace(kept).real


class BruteForce:
    """Everything from matrices on the whole Hilbert space; sites of a grid of any dimension."""

    def __init__(self, shape, n_max, species):
        self.space = local_space(n_max, species)
        self.shape, self.sites = shape, int(np.prod(shape))
        self.index = list(combinations(*map(range, shape)))
        self.b = [[self.on_site(self.space.lower[a], j) for j in range(self.sites)] for a in range(species)]

    def on_site(self, operator, site):
        out = np.eye(1)
        for j in range(self.sites):
            out = np.kron(out, operator if j == site else np.eye(self.space.size))
        return out

    def annihilator(self, a, m):
        phase = [
            np.exp(-2j * np.pi * sum(x * y / L for x, y, L in zip(m, r, self.shape, strict=True))) for r in self.index
        ]
        return sum(p * b for p, b in zip(phase, self.b[a], strict=True)) / np.sqrt(self.sites)

    def maps(self, state):
        species = len(self.b)
        b = [[self.annihilator(a, m) for m in self.index] for a in range(species)]
        mean = np.array([[np.trace(x @ state @ x.conj().T).real for x in row] for row in b])
        C = np.empty((species, species, self.sites, self.sites))
        for a in range(species):
            for c in range(species):
                for i in range(self.sites):
                    for j in range(self.sites):
                        both = b[c][j] @ b[a][i]
                        C[a, c, i, j] = np.trace(both @ state @ both.conj().T).real - mean[a, i] * mean[c, j]
        return mean, C

    def product(self, rho):
        out = rho[0]
        for one in rho[1:]:
            out = np.kron(out, one)
        return out

    def project(self, state, numbers):
        diagonal = [np.diag(sum(b.T @ b for b in row)).round() for row in self.b]
        keep = np.all([d == n for d, n in zip(diagonal, numbers, strict=True)], axis=0)
        kept = state * keep[:, None] * keep[None, :]
        return kept / np.trace(kept).real


KEYS = {
    "nothing": lambda n: np.zeros(n.shape[1]),
    "total": lambda n: n.sum(0),
    "difference": lambda n: n[0] - n[-1],
    "both": lambda n: n[0] * 100 + n[-1],
}


SYSTEMS = [((3,), 1, 2), ((2,), 2, 2), ((2, 2), 2, 1), ((4,), 2, 1)]
"""Shape, largest occupation, species: few enough states for full matrices."""


@pytest.mark.parametrize(("shape", "n_max", "species"), SYSTEMS)
@pytest.mark.parametrize("kept", list(KEYS))
@pytest.mark.parametrize("pure", [True, False])
def test_any_product_state_against_brute_force(shape, n_max, species, kept, pure):
    rng = np.random.default_rng(3)
    brute = BruteForce(shape, n_max, species)
    key = KEYS[kept](brute.space.number)
    rho = np.array([conserving(random_state(rng, brute.space.size, pure), key) for _ in range(brute.sites)])
    mean, C = brute.maps(brute.product(rho))
    moments = local_moments(rho.reshape(*shape, *rho.shape[1:]), brute.space)
    plain = ProductMap(moments, shape, fixed=False)
    assert plain.mean == pytest.approx(mean, abs=TINY)
    found = np.array([[plain.full(a, b) for b in range(species)] for a in range(species)])
    assert found == pytest.approx(C, abs=TINY)
    fixed = ProductMap(moments, shape)
    for a, b in combinations(range(species), repeat=2):
        assert fixed.with_shot_noise(a, b).sum(1) == pytest.approx(0.0, abs=1e-10)
        assert fixed.full(a, b) == pytest.approx(fixed.full(b, a).T, abs=TINY)


def test_covariances_with_the_numbers_against_brute_force():
    """The fixed-number correction subtracts exactly Cov(n_a(k), N) V^-1 Cov(N, n_b(k')), numbers from full matrices."""
    rng = np.random.default_rng(4)
    brute = BruteForce((3,), 1, 2)
    rho = np.array([random_state(rng, brute.space.size, False) for _ in range(3)])
    state = brute.product(rho)
    N = [sum(b.T @ b for b in row) for row in brute.b]
    V = np.array([[np.trace(state @ x @ y) - np.trace(state @ x) * np.trace(state @ y) for y in N] for x in N]).real
    moments = local_moments(rho, brute.space)
    plain, fixed = ProductMap(moments, (3,), fixed=False), ProductMap(moments, (3,))
    whole = np.array([[plain.with_shot_noise(a, b) for b in range(2)] for a in range(2)])
    g = np.einsum("abkl->abk", whole)
    expected = whole - np.einsum("ack,cd,bdl->abkl", g, np.linalg.inv(V), g)
    found = np.array([[fixed.with_shot_noise(a, b) for b in range(2)] for a in range(2)])
    assert found == pytest.approx(expected, abs=TINY)


@pytest.mark.parametrize(("shape", "species", "numbers"), [((3,), 2, (2, 1)), ((2,), 2, (3, 2)), ((2, 2), 1, (5,))])
def test_projection_against_brute_force(shape, species, numbers):
    rng = np.random.default_rng(5)
    brute = BruteForce(shape, 1 if shape == (3,) else 2, species)
    rho = np.array([random_state(rng, brute.space.size, bool(j % 2)) for j in range(brute.sites)])
    mean, C = brute.maps(brute.project(brute.product(rho), numbers))
    found = projected(rho, shape, numbers, brute.space)
    for a, b in combinations(range(species), repeat=2):
        assert found.full(a, b) == pytest.approx(C[a, b], abs=TINY)
        assert found.mean(a) == pytest.approx(mean[a], abs=TINY)


@pytest.mark.parametrize(("shape", "species", "numbers"), [((3,), 2, (2, 2)), ((5,), 1, (4,)), ((2, 3), 1, (6,))])
def test_uniform_projection_equals_the_general_one(shape, species, numbers):
    rng = np.random.default_rng(6)
    space = local_space(2, species)
    rho = random_state(rng, space.size, False).real
    rho = 0.5 * (rho + rho.T)
    general = projected(np.array([rho] * int(np.prod(shape))), shape, numbers, space)
    uniform = projected_uniform(rho, shape, numbers, space)
    for a, b in combinations(range(species), repeat=2):
        assert uniform.full(a, b) == pytest.approx(general.full(a, b), abs=1e-11)
        assert uniform.with_shot_noise(a, b).sum(1) == pytest.approx(0.0, abs=1e-10)


@pytest.mark.parametrize("sites", [8, 32, 128])
def test_closed_correction_approaches_projection_as_one_over_sites(sites):
    space = local_space(8, 1)
    amplitude = np.exp(-0.35 * (np.arange(9.0) - 1.0) ** 2)

    # Shift to one atom per site by a fugacity, which keeps the state pure.
    def filled(z):
        v = amplitude * z ** np.arange(9.0)
        return np.outer(v, v) / (v @ v)

    z = brentq(lambda z: np.diagonal(filled(z)) @ space.number[0] - 1.0, 0.3, 3.0)
    rho = filled(z)
    exact = projected_uniform(rho, (sites,), (sites,), space).entries(0, 0, np.array([[1]]), np.array([[0]]))[0]
    closed = ProductMap(local_moments(rho, space), (sites,)).entries(0, 0, np.array([[1]]), np.array([[0]]))[0]
    assert closed == pytest.approx(exact, rel=1.0 / sites)


def test_between_the_grid_momenta():
    """Refined momenta are those of the same cloud in free space: every direct sum agrees."""
    rng = np.random.default_rng(7)
    brute = BruteForce((3,), 2, 1)
    rho = np.array([random_state(rng, 3, False) for _ in range(3)])
    fine = ProductMap(local_moments(rho, brute.space), (3,), fixed=False, refine=4)
    state = brute.product(rho)
    for m in (1, 5, 10):
        b = sum(np.exp(-2j * np.pi * m * j / 12) * x for j, x in enumerate(brute.b[0])) / np.sqrt(3)
        assert fine.mean[0, m] == pytest.approx(np.trace(b @ state @ b.conj().T).real, abs=TINY)


@given(st.integers(0, 10_000), st.integers(2, 5))
@settings(max_examples=40)
def test_laws(seed, sites):
    """Exchange of the momenta, inversion of real states, exchange of the species, sum rule."""
    rng = np.random.default_rng(seed)
    space = local_space(2, 2)
    rho = np.array([random_state(rng, 9, bool(seed % 2)).real for _ in range(sites)])
    rho = 0.5 * (rho + np.swapaxes(rho, -1, -2))
    rho /= np.trace(rho, axis1=1, axis2=2)[:, None, None]
    swap = np.arange(9).reshape(3, 3).T.ravel()
    one = ProductMap(local_moments(rho, space), (sites,))
    other = ProductMap(local_moments(rho[:, swap][:, :, swap], space), (sites,))
    negative = one.grid.negative()
    for a, b in combinations(range(2), repeat=2):
        C = one.full(a, b)
        assert C == pytest.approx(one.full(b, a).T, abs=1e-11)
        assert C == pytest.approx(C[negative][:, negative], abs=1e-11)
        assert C == pytest.approx(other.full(1 - a, 1 - b), abs=1e-11)
        assert one.with_shot_noise(a, b).sum(1) == pytest.approx(0.0, abs=1e-10)


def test_moments_can_be_differentiated():
    space = local_space(3, 2)
    rng = np.random.default_rng(8)
    rho, change = (random_state(rng, 16, False).real for _ in range(2))

    def height(x):
        return local_moments(rho + x * jnp.asarray(change), space).m[0, 1] ** 2

    step = 1e-5
    assert float(jax.grad(height)(0.0)) == pytest.approx(float(height(step) - height(-step)) / (2 * step), rel=1e-6)


def test_what_is_refused():
    space = local_space(1, 1)
    rho = np.diag([0.5, 0.5])
    with pytest.raises(InputError, match="leading axes"):
        ProductMap(local_moments(np.array([rho] * 3), space), (4,))
    with pytest.raises(InputError, match="no weight"):
        projected(np.array([np.diag([1.0, 0.0])] * 3), (3,), (2,), space)
    with pytest.raises(ResourceError, match="steps"):
        projected(np.array([rho] * 300), (300,), (2,), space)
    with pytest.raises(ResourceError, match="entries"):
        ProductMap(local_moments(rho, space), (100, 100)).full(0, 0)
