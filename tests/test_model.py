"""Parameters: how they broadcast, what is refused and in which words, and that jax can carry them."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import gutz
from gutz.errors import InputError
from gutz.fock import local_space
from gutz.model import Mixture


def test_numbers_pairs_arrays_and_directions_broadcast():
    mix = Mixture(t=((0.1, 0.2, 0.3), 0.05), U=1.0, mu=(np.zeros(4), 0.3), T=np.zeros((2, 1)), U12=0.5)
    assert mix.shape == (2, 4)
    assert mix.t.shape == (2, 4, 2, 3)
    np.testing.assert_allclose(mix.z_t[0, 0], [1.2, 0.3])
    assert mix.flat().shape == (8,)
    assert mix[1, 2].shape == ()
    assert mix.sublattices == 1
    assert Mixture(t=0.1, U=1.0, mu=0.1, offset=(0.0, 0.1)).sublattices == 2


def test_is_a_pytree_that_survives_jit_vmap_and_grad():
    mix = Mixture(t=np.linspace(0.01, 0.05, 3), U=1.0, mu=0.3)
    through = jax.jit(lambda m: m)(mix)
    assert through.shape == (3,) and through.filling is None and through.dim == 3
    assert jax.vmap(lambda m: m.z_t.sum())(mix).shape == (3,)
    slope = jax.grad(lambda t: Mixture(t=t, U=1.0, mu=0.3).z_t.sum())(0.1)
    assert float(slope) == 12.0


BAD = [
    ({"t": -0.1}, r"t is -0.1; it must be at least 0"),
    ({"t": (0.1, 0.1, 0.1)}, r"t has 3 entries; it needs 2, one for each species"),
    ({"t": ((0.1, 0.2), 0.1)}, r"t\[1\] has 2 entries; it needs 3, one for each direction"),
    ({"t": "fast"}, r"t is 'fast'; it must be a real number"),
    ({"U": np.nan}, r"U contains nan; every value must be a finite number"),
    ({"U": -1.0}, r"U is -1; it must be at least 0"),
    ({"T": -1.0}, r"T is -1; it must be at least 0"),
    ({"T": 0.1, "entropy": 0.1}, r"both T and entropy are given"),
    ({"filling": 0.5}, r"both mu and filling are given; give exactly one"),
    ({"mu": None}, r"neither mu nor filling is given"),
    ({"mu": None, "filling": 0.0}, r"filling is 0; it must be greater than 0"),
    ({"mu": None, "filling": 3.0, "n_max": 3}, r"filling is 3; it must be below n_max = 3"),
    ({"n_max": 0}, r"n_max is 0; it must be a whole number from 1 to 12"),
    ({"n_max": 2.5}, r"n_max is 2.5; it must be a whole number"),
    ({"n_max": True}, r"n_max is True; it must be a whole number"),
    ({"dim": 4}, r"dim is 4; it must be 1, 2 or 3"),
    ({"species": 3}, r"species is 3; it must be 1 or 2"),
    ({"species": 1}, r"U12 is 0.5; it must be 0 \(or left out\) for one species"),
    ({"U12": -1.1}, r"U12 is -1.1; it must be at least -sqrt\(U1 U2\) = -1, below which the mixture collapses"),
    ({"mu": np.zeros(3), "T": np.zeros(2)}, r"batch shapes do not fit together: mu \(3,\), T \(2,\)"),
]


@pytest.mark.parametrize(("change", "words"), BAD, ids=[w[:30] for _, w in BAD])
def test_mistakes_are_one_sentence(change, words):
    with pytest.raises(InputError, match=words) as caught:
        Mixture(**({"t": 0.1, "U": 1.0, "U12": 0.5, "mu": 0.1} | change))
    assert "\n" not in str(caught.value)


def test_attraction_beyond_collapse_is_fine_for_hard_cores():
    assert Mixture(t=0.1, U=1.0, U12=-5.0, mu=0.1, n_max=1).shape == ()


def test_unknown_ansatz_is_refused():
    with pytest.raises(InputError, match="ansatz is 'best'; it must be one of: product, dressed"):
        gutz.solve(Mixture(t=0.1, U=1.0, mu=0.1), ansatz="best")


numbers = st.floats(allow_nan=True, allow_infinity=True) | st.none() | st.text(max_size=3) | st.booleans()


@given(st.fixed_dictionaries({k: numbers for k in ("t", "U", "U12", "mu", "T", "filling", "entropy", "n_max")}))
def test_only_input_errors_come_out(values):
    try:
        mix = Mixture(**values)
    except InputError:
        return
    assert all(np.isfinite(v).all() for v in jax.tree.leaves(mix))


@pytest.mark.parametrize("species", [1, 2])
def test_local_operators_obey_their_algebra_below_the_cutoff(species):
    space = local_space(4, species)
    for a in range(species):
        commutator = space.lower[a] @ space.lower[a].T - space.lower[a].T @ space.lower[a]
        below = space.number[a] < 4
        np.testing.assert_allclose(np.diag(commutator)[below], 1.0)
        np.testing.assert_allclose(np.diag(space.lower[a].T @ space.lower[a]), space.number[a], atol=1e-14)
    if species == 2:
        np.testing.assert_allclose(space.pair, space.lower[1] @ space.lower[0])
        np.testing.assert_allclose(space.antipair, space.lower[0].T @ space.lower[1])


def test_public_names_are_listed_sorted_and_lazy():
    assert gutz.__all__ == sorted(gutz.__all__, key=str.casefold)
    for name in gutz.__all__:
        assert getattr(gutz, name) is not None
    assert set(gutz.__all__) <= set(dir(gutz))


def test_default_numbers_are_double_precision():
    assert jnp.zeros(()).dtype == np.float64
