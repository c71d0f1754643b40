"""The bond term against its definition, an explicit double sum over the levels of both sites."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from gutz import precision  # noqa: F401
from gutz.ansatz import bond, evaluate
from gutz.ansatz.second import second_order
from gutz.errors import InputError


def double_sum(h_first, h_second, t, lower, T):
    """-1/2 sum |<mp|V|nq>|² (P_n P_q - P_m P_p)/(E_m + E_p - E_n - E_q): the definition, in plain numpy."""
    sites = []
    for h in (h_first, h_second):
        E, V = np.linalg.eigh(h)
        P = np.exp(-(E - E[0]) / T) if T > 0 else np.eye(len(E))[0]
        P = P / P.sum()
        means = [np.sum(P * np.diag(V.T @ b @ V)) for b in lower]
        sites.append((E, P, [V.T @ b @ V - m * np.eye(len(E)) for b, m in zip(lower, means, strict=True)]))
    (E, P, L), (e, p, M) = sites
    V = sum(
        -ta * (np.einsum("mn,pq->mpnq", x.T, y) + np.einsum("mn,pq->mpnq", x, y.T))
        for ta, x, y in zip(t, L, M, strict=True)
    )
    energy, weight = E[:, None] + e, P[:, None] * p
    if T == 0:
        v = V[:, :, 0, 0].copy()
        v[0], v[:, 0] = 0.0, 0.0
        gap = energy - energy[0, 0]
        gap[0, 0] = 1.0
        return -np.sum(v**2 / gap)
    x = np.abs(energy[:, :, None, None] - energy) / T
    safe = np.where(x > 1e-13, x, 1.0)
    kernel = np.maximum(weight[:, :, None, None], weight) * np.where(x > 1e-13, -np.expm1(-safe) / safe, 1.0) / T
    return -0.5 * np.sum(V**2 * kernel)


FIELDS = {
    "full": ("J1", "J2", "K", "M", "nu1", "nu2"),
    "pair": ("K", "nu1", "nu2"),
    "antipair": ("M", "nu1", "nu2"),
    "normal": ("nu1", "nu2"),
}


class Case:
    """Random trial fields around an asymmetric (or an exactly degenerate) pair of species."""

    def __init__(self, n_max, species, kind, sublattices, symmetric=False):
        self.f = bond.frame(n_max, species, kind)
        n = self.f.number
        U, mu = ((1.0, 1.0), (0.4, 0.4)) if symmetric else ((1.0, 1.2), (0.4, 0.55))
        self.energy = sum(U[a] / 2 * n[a] * (n[a] - 1) - mu[a] * n[a] for a in range(species))
        if species == 2:
            self.energy = self.energy + 0.7 * n[0] * n[1]
        self.names = [name for name in FIELDS[kind] if name in self.f.fields]
        self.t = np.array([0.05, 0.08])[:species]
        rng = np.random.default_rng(7)
        self.x = 0.1 * rng.normal(size=(sublattices, len(self.names)))
        if symmetric:
            self.x = np.full_like(self.x, 0.0)
            self.x[:, : species if kind == "full" else 1] = 0.1
        self.direction = rng.normal(size=self.x.shape)

    def h(self, x):
        fields = [self.f.fields[name] for name in self.names]
        return np.stack([np.diag(self.energy) - np.einsum("i,ijk->jk", row, fields) for row in x])

    def reference(self, T, x=None):
        h = self.h(self.x if x is None else x)
        return double_sum(h[0], h[-1], self.t, self.f.lower, T)

    def weight(self):
        return jnp.asarray(np.stack([np.outer(self.t, self.t)] * 2))


TEMPERATURES = [0.0, 1e-3, 1e-2, 0.1, 1.0, 10.0]


def energy_function(case, T):
    """The bond energy as a function of (h, T, weight) for one point."""
    cold, nodes = T == 0, 0 if T == 0 else bond.enough_nodes(15.0 / T)

    def energy(h, T, w):
        return bond.bond_energy(h[None], T[None], w[None], case.f, cold, nodes)[0]

    return energy


@pytest.mark.parametrize("T", TEMPERATURES)
@pytest.mark.parametrize(("n_max", "species"), [(3, 1), (3, 2)])
def test_agrees_with_the_double_sum_over_levels(n_max, species, T):
    case = Case(n_max, species, "full", 2)
    value = energy_function(case, T)(jnp.asarray(case.h(case.x)), jnp.asarray(T), case.weight())
    assert value == pytest.approx(case.reference(T), rel=1e-10)


@pytest.mark.parametrize("T", [0.0, 0.05])
@pytest.mark.parametrize("kind", ["pair", "antipair", "normal"])
def test_smaller_frames_give_the_same(kind, T):
    case = Case(2, 2, kind, 2)
    value = energy_function(case, T)(jnp.asarray(case.h(case.x)), jnp.asarray(T), case.weight())
    assert value == pytest.approx(case.reference(T), rel=1e-11)


def in_numbers(case, T, h=None):
    """The bond term without compilation, and its derivative in the Hamiltonians of the sites."""
    h = case.h(case.x) if h is None else h
    given = np.diagonal(h, axis1=-2, axis2=-1) if case.f.diagonal else h
    lv = evaluate.levels(given[None], np.array([T]), case.f, cold=T == 0)
    V = np.broadcast_to(lv.vectors, (1, *h.shape))
    b = np.swapaxes(V, -1, -2)[:, :, None] @ case.f.lower @ V[:, :, None]
    phi = np.einsum("psaii,psi->psa", b, lv.weight)
    b = b - phi[..., None, None] * np.eye(b.shape[-1])
    nodes = 0 if T == 0 else bond.enough_nodes(np.ptp(lv.energy) / T)
    out = second_order(lv, b, np.asarray(case.weight())[None], case.f, cold=T == 0, nodes=nodes)
    return out.value[0], (V @ out.slope @ np.swapaxes(V, -1, -2))[0]


@pytest.mark.parametrize("T", TEMPERATURES)
@pytest.mark.parametrize("kind", FIELDS)
@pytest.mark.parametrize("sublattices", [1, 2])
def test_in_numbers_agrees_with_the_double_sum(sublattices, kind, T):
    case = Case(3, 2, kind, sublattices)
    assert in_numbers(case, T)[0] == pytest.approx(case.reference(T), rel=1e-10)


@pytest.mark.parametrize(("symmetric", "T"), [(False, 0.0), (False, 0.02), (False, 1.0), (True, 0.02), (True, 1.0)])
@pytest.mark.parametrize("kind", FIELDS)
def test_slope_in_numbers_matches_differences_of_the_double_sum(kind, T, symmetric):
    """Symmetric: exactly degenerate levels (at T = 0 the lowest ones too, where there is no derivative)."""
    case = Case(2, 2, kind, 1, symmetric)
    change = case.h(case.direction) - case.h(0.0 * case.direction)
    e = 1e-4

    def at(k):
        return case.reference(T, case.x + k * e * case.direction)

    numeric = (8 * (at(1) - at(-1)) - (at(2) - at(-2))) / (12 * e)
    assert np.sum(in_numbers(case, T)[1] * change) == pytest.approx(numeric, rel=2e-7, abs=1e-12)


@pytest.mark.parametrize("symmetric", [False, True])
@pytest.mark.parametrize("T", [0.0, 0.02, 1.0])
def test_gradient_matches_differences_of_the_double_sum(T, symmetric):
    """At the symmetric point levels are exactly degenerate, and some directions couple them."""
    case = Case(2, 2, "full", 1, symmetric)
    gradient = jax.grad(energy_function(case, T))(jnp.asarray(case.h(case.x)), jnp.asarray(T), case.weight())
    change = case.h(case.direction) - case.h(0.0 * case.direction)
    e = 1e-4

    def at(k):
        return case.reference(T, case.x + k * e * case.direction)

    numeric = (8 * (at(1) - at(-1)) - (at(2) - at(-2))) / (12 * e)
    assert np.sum(np.asarray(gradient) * change) == pytest.approx(numeric, rel=2e-7)


def test_derivative_in_temperature_and_in_the_hoppings():
    case = Case(2, 2, "full", 2)
    T, e = 0.07, 1e-4
    energy = energy_function(case, T)
    args = (jnp.asarray(case.h(case.x)), jnp.asarray(T), case.weight())
    in_T, in_w = jax.grad(energy, argnums=(1, 2))(*args)
    numeric = (case.reference(T + e) - case.reference(T - e)) / (2 * e)
    assert in_T == pytest.approx(numeric, rel=1e-5)
    assert np.sum(np.asarray(in_w) * np.asarray(case.weight())) == pytest.approx(float(energy(*args)), rel=1e-12)


def test_second_derivative_is_refused():
    case = Case(1, 2, "full", 1)
    energy = energy_function(case, 0.1)
    args = (jnp.asarray(case.h(case.x)), jnp.asarray(0.1), case.weight())
    with pytest.raises(InputError, match="second derivative"):
        jax.grad(lambda T: jax.grad(energy, argnums=1)(args[0], T, args[2]))(args[1])
    with pytest.raises(InputError, match="second derivative"):
        jax.jacfwd(jax.grad(energy))(*args)


def test_coherent_states_have_no_bond_term():
    """δb annihilates a coherent state, the exact ground state without interactions (exact)."""
    f = bond.frame(16, 1, "full")
    h = jnp.asarray(np.diag(f.number[0]) - 0.8 * f.fields["J1"])
    value = bond.bond_energy(h[None, None], jnp.zeros(1), jnp.ones((1, 2, 1, 1)), f, True, 0)
    assert abs(float(value[0])) < 1e-8
