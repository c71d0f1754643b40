"""Second-order variational functional of exchanging sites, and spin waves: what critical temperatures are
made of.

In:  bond operators per direction (`gutz.exchange.bond_operator`), trial fields; or couplings of
pseudo-spins 1/2.
Out: the functional's terms, its curvature at vanishing order, transition temperatures and entropies of one
     point (callers vmap).

Local states exp(kappa . O)/Z on two sublattices, fields kappa in units of T. Per site and with one bond per
direction,

    F/T = -S0 + E1/T - lambda E2/(2 T²),   E1 = sum_dir <B>,   E2 = sum_dir int_0^1 ds <V(s) V>,

where V is B minus its one-site parts in the local states (an expansion at fixed local averages: Georges and
Yedidia, J. Phys. A 24, 2173 (1991)). Temperature enters as a polynomial, so onsets need no search.
"""

import math
from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from numpy.typing import NDArray

Array = Any
Floats = NDArray[np.float64]

SPIN: Floats = np.array([[[0.0, 0.5], [0.5, 0.0]], [[0.5, 0.0], [0.0, -0.5]]])
"""Operators of a pseudo-spin's trial fields: Sx (transverse order) and Sz (imbalance)."""

VORTEX_SCREENING = 0.851263904259467
"""T_c over (pi/2) times the vortex-free stiffness: u on the separatrix u - 1 - log u = 2 pi² exp(-2 pi/u) of
Kosterlitz' flow (J. Phys. C 7, 1046 (1974)) with the square lattice's vortex fugacity exp(-pi² rho/2T)."""

_NODES, _WEIGHTS = (0.5 * x for x in np.polynomial.legendre.leggauss(12))
_NODES = _NODES + 0.5


class Terms(NamedTuple):
    """Terms of the functional: entropy S0 and E1, E2 (energy, energy²) per site, averages (2, operator)."""

    entropy: Array
    first: Array
    second: Array
    averages: Array


class Onset(NamedTuple):
    """Instabilities of the disordered state: transverse, staggered and uniform imbalance, each shape (3,).

    slope: the bare mean-field temperature a. curvature: b of 1 - a/T + b/T².
    entropy, second, third: S = entropy - second/(2T²) + third/(3T³) per site of the disordered state.
    """

    slope: Array
    curvature: Array
    entropy: Array
    second: Array
    third: Array


def functional(bond: Array, kappa: Array) -> Terms:
    """Terms at trial fields `kappa`, shape (2 sublattices, operator of `SPIN`).

    bond: shape (direction, 4, 4), rows (first site, second site). Differentiable to any order. The integral
    over s is Gaussian with 12 nodes, good to 1e-10 for fields up to 20.
    """
    grown = _powers(kappa)
    norm = jnp.trace(grown[-1], axis1=-2, axis2=-1)
    exponent = np.concatenate([_NODES, [1.0]])[:, None, None, None]
    rho = grown / norm[:, None, None] ** exponent
    averages = jnp.einsum("sij,kji->sk", rho[-1], SPIN)
    entropy = (jnp.log(norm) - (kappa * averages).sum(-1)).mean()
    mean, V = _fluctuation(bond, rho[-1])
    two = jnp.einsum("nij,nkl->nikjl", rho[:-1, 0], rho[:-1, 1]).reshape(-1, 4, 4)
    # The nodes are symmetric about 1/2, so reversing them turns s into 1 - s.
    left = jnp.einsum("nij,djk->ndik", two, V)
    right = jnp.einsum("nij,djk->ndik", two[::-1], V)
    second = jnp.einsum("n,ndij,ndji->", _WEIGHTS, left, right)
    return Terms(entropy, mean.sum(), second, averages)


def _powers(kappa: Array) -> Array:
    """exp(s kappa . S) at the nodes and at s = 1, shape (s, sublattice, 2, 2)."""
    s = np.concatenate([_NODES, [1.0]])[:, None]
    square = 0.25 * s**2 * (kappa**2).sum(-1)
    # cosh(r) and sinh(r)/r as functions of r², which have no square root to differentiate at 0.
    close = square < 0.1
    r = jnp.sqrt(jnp.where(close, 1.0, square))
    even = jnp.where(close, _series(square, 0), jnp.cosh(r))
    odd = jnp.where(close, _series(square, 1), jnp.sinh(r) / r)
    spin = jnp.einsum("sk,kij->sij", kappa, SPIN)
    return even[..., None, None] * jnp.eye(2) + (s * odd)[..., None, None] * spin


def _series(x: Array, first: int) -> Array:
    """sum_n x^n / (2n + first)!, to 1e-17 for x < 0.1."""
    total = jnp.zeros_like(x)
    for n in range(7, -1, -1):
        total = total * x + 1.0 / math.factorial(2 * n + first)
    return total


def _fluctuation(bond: Array, rho: Array) -> tuple[Array, Array]:
    """<B> and V = B minus its one-site parts, (direction, 4, 4), for states rho (2, 2, 2)."""
    B = bond.reshape(-1, 2, 2, 2, 2)
    identity = jnp.eye(2)
    on_second = jnp.einsum("xabcd,ca->xbd", B, rho[0])
    on_first = jnp.einsum("xabcd,db->xac", B, rho[1])
    mean = jnp.einsum("xac,ca->x", on_first, rho[0])
    V = (
        B
        - jnp.einsum("ac,xbd->xabcd", identity, on_second)
        - jnp.einsum("xac,bd->xabcd", on_first, identity)
        + mean[:, None, None, None, None] * jnp.einsum("ac,bd->abcd", identity, identity)
    )
    return mean, V.reshape(-1, 4, 4)


def onset(bond: Array, imbalance: Array) -> Onset:
    """Curvatures of the functional at the disordered state with <Sz> = `imbalance`, kept fixed."""
    field = 2.0 * jnp.arctanh(2.0 * imbalance)

    def terms(k: Array) -> Array:
        """k: transverse, uniform, staggered field."""
        kappa = jnp.stack([jnp.stack([k[0], k[1] + k[2]]), jnp.stack([k[0], k[1] - k[2]])])
        t = functional(bond, kappa)
        return jnp.stack([t.entropy, t.first, t.second, t.averages[:, 1].mean()])

    k0 = jnp.stack([jnp.zeros_like(field), field, jnp.zeros_like(field)])

    def twice(direction: Array) -> tuple[Array, Array, Array]:
        """Value, first and second derivative along a direction of fields."""

        def once(k: Array) -> tuple[Array, Array]:
            return jax.jvp(terms, (k,), (direction,))

        (value, slope), (_, bend) = jax.jvp(once, (k0,), (direction,))
        return value, slope, bend

    # Order: transverse, staggered, uniform.
    value, slope, bend = jax.vmap(twice)(jnp.eye(3)[np.array([0, 2, 1])])
    value, slope = value[0], slope[2]
    per_m = slope[:3] / slope[3]
    curve = bend[:, :3] - per_m * bend[:, 3:]
    stiff = -curve[:, 0]
    _, V = _fluctuation(bond, jnp.stack([_diagonal_state(imbalance)] * 2))
    two = jnp.kron(_diagonal_state(imbalance), _diagonal_state(imbalance))
    third = jnp.einsum("ij,xjk,xkl,xli->", two, V, V, V)
    return Onset(-curve[:, 1] / stiff, -0.5 * curve[:, 2] / stiff, value[0], value[2], third)


def _diagonal_state(imbalance: Array) -> Array:
    return jnp.diag(jnp.stack([0.5 + imbalance, 0.5 - imbalance]))


def extrapolated(a: Array, b: Array, gamma: Array) -> Array:
    """T_c from the start 1 - a/T + b/T² of the inverse susceptibility, whose power law has exponent gamma
    in (1, 2).

    The susceptibility is matched to (1 + B/T)(1 - T_c/T)^-gamma, a biased extrapolation with no other
    input; 0 where a ≤ 0 (no tendency to order) or b ≥ a² (nothing left of it).
    """
    c = jnp.clip(b / jnp.where(a > 0, a, 1.0) ** 2, 0.0, 1.0)
    root = jnp.sqrt(gamma * (2.0 - gamma + 2.0 * c * (gamma - 1.0)))
    return jnp.where(a > 0, a * 2.0 * (1.0 - c) / (gamma + root), 0.0)


def plain_root(a: Array, b: Array) -> Array:
    """Largest T where 1 - a/T + b/T² vanishes, or where it is least if it does not vanish; 0 where a ≤ 0."""
    inside = a**2 - 4.0 * b
    crossing = 0.5 * (a + jnp.sqrt(jnp.where(inside > 0, inside, 1.0)))
    return jnp.where(a > 0, jnp.where(inside > 0, crossing, 2.0 * b / jnp.where(a > 0, a, 1.0)), 0.0)


_HALVINGS = 22


class Waves(NamedTuple):
    """Spin waves of transverse order at one temperature: stiffness per direction (2,), entropy per site."""

    stiffness: Array
    entropy: Array


def _corner_rule(points: int) -> tuple[Floats, Floats]:
    """Momenta in (0, pi) and weights (sum 1), crowded towards both ends, where spin waves go soft."""
    x, w = np.polynomial.legendre.leggauss(points)
    s = 0.5 * (x + 1)
    return np.pi * s**3 * (10 - 15 * s + 6 * s**2), 0.5 * w * 30 * s**2 * (1 - s) ** 2


_K, _K_WEIGHT = _corner_rule(24)
_COS = np.cos(_K)


def waves(perp: Array, zz: Array, imbalance: Array, T: Array) -> Waves:
    """Linear spin waves about transverse order in two dimensions; perp, zz: shape (2,); T > 0.

    rho_d = J_d (psi² + 1/2 - <d omega/d J_d coth(omega/2T)>/2), psi² = 1/4 - imbalance², for a twist along
    d, with omega² = P Q, P = sum J (1 - cos k), Q = sum J + (J_z cos² - J sin²) cos k, sin = 2 imbalance.
    """
    sine = 4.0 * imbalance**2
    cx, cy = jnp.meshgrid(_COS, _COS, indexing="ij")
    cos = jnp.stack([cx, cy])
    weight = _K_WEIGHT[:, None] * _K_WEIGHT
    q = zz * (1.0 - sine) - perp * sine
    P = (perp[:, None, None] * (1.0 - cos)).sum(0)
    Q = perp.sum() + (q[:, None, None] * cos).sum(0)
    positive = P * Q > 0
    omega = jnp.sqrt(jnp.where(positive, P * Q, 1.0))
    slope = ((1.0 - cos) * Q + P * (1.0 - sine * cos)) / (2.0 * omega)
    filled = (weight * slope / jnp.tanh(omega / (2.0 * T))).sum((-1, -2))
    entropy = (weight * _mode_entropy(omega / T)).sum()
    return Waves(perp * (0.75 - imbalance**2 - 0.5 * filled), entropy)


def gapped_entropy(perp: Array, zz: Array, T: Array) -> Array:
    """Spin-wave entropy per site of staggered (J_z > 0) or uniform (J_z < 0) order; perp, zz: shape (2,)."""
    cx, cy = jnp.meshgrid(_COS, _COS, indexing="ij")
    hop = perp[0] * cx + perp[1] * cy
    level = jnp.abs(zz.sum())
    staggered = jnp.sqrt(jnp.maximum(level**2 - hop**2, 0.0))
    omega = jnp.where(zz.sum() > 0, staggered, jnp.maximum(level - hop, 0.0))
    return (_K_WEIGHT[:, None] * _K_WEIGHT * _mode_entropy(omega / T)).sum()


def _mode_entropy(x: Array) -> Array:
    """Of an oscillator with quantum x in units of T."""
    number = 1.0 / jnp.expm1(jnp.clip(x, 1e-12, 700.0))
    return jnp.log1p(number) + number * x


def transverse_stable(perp: Array, zz: Array, imbalance: Array) -> Array:
    """Whether transverse order is a minimum with a gap against rotation into imbalance (symmetry xy only)."""
    sine = 4.0 * imbalance**2
    return jnp.abs(zz * (1.0 - sine) - perp * sine).sum() < perp.sum() * (1.0 - 1e-9)


def jump_temperature(perp: Array, zz: Array, imbalance: Array, screening: float) -> Array:
    """T where screening (pi/2) sqrt(rho_x rho_y) = T with the spin waves' stiffness; meaningful where
    stable."""

    def excess(T: Array) -> Array:
        rho = waves(perp, zz, imbalance, T).stiffness
        safe = jnp.where((rho > 0).all(), rho, 1.0)
        return screening * 0.5 * jnp.pi * jnp.where((rho > 0).all(), jnp.sqrt(safe.prod()), 0.0) - T

    return root(excess, 1e-3 * perp.max(), 0.5 * jnp.pi * perp.max())


def bare_jump(perp: Array, imbalance: Array) -> tuple[Array, Array]:
    """The jump rule with the product state's stiffness J psi²(T), and the entropy per site there."""
    geometric = jnp.sqrt(perp.prod())

    def excess(field: Array) -> Array:
        """In the local field over T, whose spin has length tanh(field/2)/2."""
        s = 0.5 * jnp.tanh(0.5 * field)
        return perp.sum() * 2.0 * s / field - 0.5 * jnp.pi * geometric * (s**2 - imbalance**2)

    field = root(excess, 2.0 * jnp.arctanh(2.0 * jnp.abs(imbalance)) + 1e-6, jnp.asarray(1e6))
    length = 0.5 * jnp.tanh(0.5 * field)
    return perp.sum() * 2.0 * length / field, spin_entropy(length)


def spin_entropy(length: Array) -> Array:
    """Entropy of a spin 1/2 whose average has this length (0 to 1/2)."""
    p = jnp.stack([0.5 + length, 0.5 - length])
    return jax.scipy.special.entr(p).sum(0)


def chain_scale(perp: Array, zz: Array, imbalance: Array) -> Array:
    """Coherence length times T of a chain at low T: 2 rho, with rho = K v/pi; 0 where |J_z| > J_perp.

    K and v of the XXZ chain (Bethe ansatz; Giamarchi, Quantum Physics in One Dimension (2003)) at zero
    imbalance; with imbalance m the exact rho = J cos(pi m)/pi of J_z = 0, with a factor that is exact at m
    = 0 and near saturation.
    """
    delta = zz / jnp.where(perp > 0, perp, 1.0)
    angle = jnp.arccos(jnp.clip(-delta, -1 + 1e-12, 1 - 1e-12))
    ratio = 0.25 * jnp.pi**2 * jnp.sinc(angle / jnp.pi) / (jnp.pi - angle)
    factor = 1.0 - (1.0 - ratio) * (1.0 - 4.0 * imbalance**2)
    rho = perp * factor * jnp.cos(jnp.pi * imbalance) / jnp.pi
    return jnp.where(jnp.abs(delta) <= 1.0, 2.0 * rho, 0.0)


def root(function: Callable[[Array], Array], low: Array, high: Array) -> Array:
    """Zero of a function that falls from positive to negative: bisection, then Newton steps, the last
    differentiable.

    The ends must be positive; halving is geometric.
    """

    def halve(_: int, ends: tuple[Array, Array]) -> tuple[Array, Array]:
        middle = jnp.sqrt(ends[0] * ends[1])
        above = function(middle) > 0
        return jnp.where(above, middle, ends[0]), jnp.where(above, ends[1], middle)

    def newton(x: Array) -> Array:
        value, slope = jax.value_and_grad(function)(x)
        slope = jax.lax.stop_gradient(slope)
        return x - jnp.where(slope < 0, value / jnp.where(slope < 0, slope, 1.0), 0.0)

    low, high = jax.lax.stop_gradient((low, high))
    low, high = jax.lax.fori_loop(0, _HALVINGS, halve, (low, high))
    x = jnp.sqrt(low * high)
    x = jax.lax.fori_loop(0, 3, lambda _, y: jnp.clip(newton(y), low, high), x)
    return newton(jax.lax.stop_gradient(x))
