"""Critical temperatures and entropies of pairs and anti-pairs against published values of spin-1/2 models.

Units: J_perp (J_z in the Ising limit). Tolerances: 6 % and 25 % for 0 ≤ Delta ≤ 1, 10 % and 30 % at Delta = -1, the
accuracy the method claims or better.
"""

import numpy as np
import pytest

from gutz.model import Mixture
from gutz.phases import Phase
from gutz.temperature import critical_temperature

HOP = 0.01


def mixture(delta, dim, **more):
    """Equal species at total filling 1 with Delta = 1 - 2 U12/U; hard cores give Delta = 1."""
    if delta == 1:
        return Mixture(t=HOP, U=1.0, U12=0.5, filling=0.5, dim=dim, n_max=1, **more)
    return Mixture(t=HOP, U=1.0, U12=(1 - delta) / 2, filling=0.5, dim=dim, **more)


def in_exchange(mix, value):
    return float(value) / (4 * HOP**2 / float(mix.U12))


@pytest.mark.parametrize(
    "delta, T_c, tolerance",
    [
        (-1.0, 0.839, 0.10),  # ferromagnet: Wessel, PRB 81, 052405 (2010); series of Oitmaa & Zheng (2004), from memory
        (0.0, 1.008, 0.06),  # hard-core bosons 2.016 t: Carrasquilla & Rigol, PRA 86, 043629 (2012), from memory
        (0.5, 1.015, 0.06),  # own computation (Monte Carlo), no outside source
        (1.0, 0.946, 0.06),  # antiferromagnet: Sandvik, PRL 80, 5196 (1998)
    ],
)
def test_cubic_lattice_temperature(delta, T_c, tolerance):
    mix = mixture(delta, 3)
    r = critical_temperature(mix)
    assert in_exchange(mix, r.T_c) == pytest.approx(T_c, rel=tolerance)
    assert in_exchange(mix, r.T_c_bare) == pytest.approx(1.5, rel=1e-9)  # z J/4, textbook


@pytest.mark.parametrize(
    "delta, entropy, tolerance",
    [
        (-1.0, 0.401, 0.30),  # Wessel, PRB 81, 052405 (2010), from memory
        (0.0, 0.449, 0.25),  # own computation (Monte Carlo), no outside source
        (1.0, 0.341, 0.25),  # Wessel, PRB 81, 052405 (2010), from memory
    ],
)
def test_cubic_lattice_entropy(delta, entropy, tolerance):
    r = critical_temperature(mixture(delta, 3))
    assert float(r.entropy_per_particle) == pytest.approx(entropy, rel=tolerance)
    assert float(r.entropy_bare) == pytest.approx(np.log(2), rel=1e-9)


def test_ising_limit_of_the_cubic_lattice():
    """One species immobile: T_c = 4.51152 J_z/4 (Ising on the simple cubic lattice, textbook); z-Néel order."""
    mix = Mixture(t=(HOP, 0.0), U=1.0, U12=0.5, filling=0.5, n_max=1)
    r = critical_temperature(mix)
    assert float(r.T_c) / (2 * HOP**2 / 0.5) == pytest.approx(1.1279, rel=0.06)
    assert int(r.phase) == Phase.NEEL


def test_square_lattice_xy():
    """0.3427(2) J: Harada & Kawashima, J. Phys. Soc. Jpn. 67, 2768 (1998), from memory; entropy: own computation."""
    mix = mixture(0.0, 2)
    r = critical_temperature(mix)
    assert in_exchange(mix, r.T_c) == pytest.approx(0.3427, rel=0.06)
    assert float(r.entropy_per_particle) == pytest.approx(0.079, rel=0.25)
    # Without vortices the jump rule is 17 % high; without spin waves 12 %.
    assert in_exchange(mix, r.T_c_plain) == pytest.approx(0.3427, rel=0.20)


@pytest.mark.parametrize("delta", [-1.0, 1.0])
def test_square_lattice_with_full_symmetry_does_not_order(delta):
    """Mermin & Wagner, PRL 17, 1133 (1966)."""
    r = critical_temperature(mixture(delta, 2))
    assert float(r.T_c) == 0.0
    assert "rotation symmetry" in r.notes[0]


def test_square_lattice_ising_limit():
    """T_c = J_z / (2 log(1 + sqrt 2)) (Onsager, Phys. Rev. 65, 117 (1944))."""
    mix = Mixture(t=(HOP, 0.0), U=1.0, U12=0.5, filling=0.5, dim=2, n_max=1)
    onsager = 1 / (2 * np.log(1 + np.sqrt(2)))
    assert float(critical_temperature(mix).T_c) / (2 * HOP**2 / 0.5) == pytest.approx(onsager, rel=0.06)
