"""Which formula for which state: noise maps from the Gaussian layer, with the atom numbers fixed.

In:  the sites of a point (one ansatz, or both), a grid, fillings.
Out: a map, and how far it can be trusted.

Three descriptions, each with G and F of the Gaussian layer:

    cumulant  all local cumulants of the product state, second ones replaced by G_k, F_k; spread of N taken out
    coherent  lines |G|² at k' = k and |F|² at k' = -k for k, k' ≠ 0; the condensate supplies what the sum rule asks for
    thermal   Wick's theorem for every momentum, k = 0 included; spread of N taken out

Deep in the superfluid the first is right, near the transition the second, in states without single-particle order the
third. Below `PROJECT_BELOW` sites, the difference between exact projection of the product state and its closed
fixed-number form is added to the first two (and to paired states). Where product and dressed ansatz are both
superfluid their maps are averaged: they bracket the truth (measured, see docs/noise.md). The weights were chosen on
the 3 x 3 torus and the ring of six, and tried on other lattices.
"""

from dataclasses import dataclass
from enum import IntEnum

import numpy as np

from gutz.errors import InputError
from gutz.fluctuations import GaussianLayer, LocalSites
from gutz.noise.grid import Floats, Grid
from gutz.noise.moments import LocalMoments, of_sites
from gutz.noise.projection import MAX_TWISTS, projected_uniform
from gutz.noise.uniform import Background, BlendedMap, Line, UniformMap
from gutz.phases import PAIR_THRESHOLD

PROJECT_BELOW = 256
"""Sites below which a product state is projected on its numbers exactly; above, the correction is below 1 %."""

DEEP = (0.70, 0.80)
"""Condensate fraction between which `coherent` gives way to `cumulant`."""
MELTING = (0.30, 0.57)
"""Condensate fraction of the product state below which `coherent` gives way to `thermal`."""
AVERAGED = (0.30, 0.45)
"""Condensate fraction of the dressed state above which it has half the weight."""
WEAK = (0.80, 0.90)
"""Condensate fraction of the product state above which it is used alone: depletion is small, and it has it right."""
LEFT = 0.27
"""Condensate fraction of the product state below which a dressed insulator takes over."""
LONG_CHAIN = 16
"""Sites above which a chain is longer than anything the recipes were tried on."""
_WHOLE = 1e-3
SMALL = 12.0
"""Sites up to which a lattice passes from one description to the next as smoothly as the rings and tori of the tests;
the width of the passage shrinks like 1/sites, since it is an effect of finite size."""


class Validity(IntEnum):
    """How far a map can be trusted: relative error of a whole map below about 8 %, below about 20 %, or more."""

    GOOD = 0
    FAIR = 1
    QUALITATIVE = 2


@dataclass(frozen=True, eq=False)
class Fluctuating:
    """A point's fluctuations on a grid.

    mean: n_a(k) with the condensate, (a, sites). normal, anomalous: connected G, F, (a, a, sites). staggered: the same
    between k and k + (π, ..). phi: condensate amplitude, (a,). moments: local averages over the sublattices.
    """

    sites: LocalSites
    grid: Grid
    mean: Floats
    normal: Floats
    anomalous: Floats
    staggered: Floats
    phi: Floats
    moments: LocalMoments
    unstable: bool

    @property
    def condensed(self) -> float:
        """Condensate over all atoms."""
        return float((self.phi**2).sum() / max(self.moments.density.sum(), 1e-300))


def fluctuating(sites: LocalSites, grid: Grid, filling: Floats) -> Fluctuating:
    """Evaluate the Gaussian layer on a grid and let the momenta hold the atoms there are.

    With single-particle order the condensate takes what the other momenta leave; without it n_a(k) is scaled.
    """
    layer = GaussianLayer(sites)
    found = layer.correlations(grid.momenta())
    normal = np.moveaxis(found.normal, 0, -1).copy()
    anomalous = np.moveaxis(found.anomalous, 0, -1).copy()
    staggered = np.moveaxis(found.staggered, 0, -1)
    moments = LocalMoments(*(np.asarray(v).mean(0) for v in of_sites(sites)))
    species = sites.species
    own = np.arange(species)
    mean = normal[own, own].copy()
    atoms = np.asarray(filling, float) * grid.sites
    for a in range(species):
        if sites.ordered[a]:
            mean[a, 0] = atoms[a] - mean[a, 1:].sum()
        else:
            factor = atoms[a] / mean[a].sum() if mean[a].sum() > 0 else 1.0
            mean[a] *= factor
            root = np.sqrt(max(factor, 0.0))
            for part in (normal, anomalous):
                part[a] *= root
                part[:, a] *= root
    unstable = bool((~found.finite).sum() > (1 if np.any(sites.ordered) else 0) * sites.sublattices)
    # More atoms outside the condensate than there are: long waves have destroyed it.
    unstable |= bool((mean[:, 0] < 0.0).any())
    return Fluctuating(
        sites,
        grid,
        mean,
        normal,
        anomalous,
        staggered,
        np.where(sites.ordered, sites.phi.mean(0), 0.0),
        moments,
        unstable,
    )


def thermal(f: Fluctuating) -> UniformMap:
    """Wick's theorem for every momentum, numbers fixed."""
    own = np.arange(len(f.mean))
    G, F = f.normal**2, f.anomalous**2
    G[own, own] = f.mean**2
    ordered = f.sites.ordered
    both = np.outer(ordered, ordered)
    F[both, 0] = 0.0
    G[both & ~np.eye(len(own), dtype=bool), 0] = 0.0
    return UniformMap(f.grid, f.mean, _lines(f, G, F))


def coherent(f: Fluctuating) -> UniformMap:
    """Lines away from the condensate; rows and columns of k = 0 from the sum rule, for species with order."""
    species, ordered = len(f.mean), f.sites.ordered
    own = np.arange(species)
    G, F = f.normal**2, f.anomalous**2
    G[own, own] = np.where(ordered[:, None], G[own, own], f.mean**2)
    both = np.outer(ordered, ordered)
    G[both, 0] = F[both, 0] = 0.0
    weight = G + F
    weight[own, own] += f.mean
    weight[own[ordered], own[ordered], 0] = 0.0
    # left: k = 0, and the row of every pair of species.
    pairs = [(a, b) for a in range(species) for b in range(a, species) if ordered[a] and ordered[b]]
    zero = np.zeros(f.grid.sites)
    zero[0] = 1.0
    left = np.stack([zero, *(weight[a, b] for a, b in pairs)])
    core = np.zeros((species, species, len(left), len(left)))
    for row, (a, b) in enumerate(pairs, 1):
        for c, d in {(a, b), (b, a)}:
            core[c, d, 0, row] = core[c, d, row, 0] = -1.0
            # The entry (0, 0) holds everything; its own shot noise is kept apart like all the others'.
            core[c, d, 0, 0] = weight[a, b].sum() - (f.mean[a, 0] if a == b else 0.0)
    return UniformMap(f.grid, f.mean, _lines(f, G, F), Background(left, core), fixed=~ordered)


def cumulant(f: Fluctuating, *, local: bool = False) -> UniformMap:
    """Local cumulants with the layer's G and F (or with the local ones: the product state itself)."""
    sites, m = f.grid.sites, f.moments
    species = len(f.mean)
    G, F = f.normal.copy(), f.anomalous.copy()
    zero = np.zeros(sites)
    zero[0] = 1.0
    if local:
        G[:], F[:] = m.nu[..., None], m.m[..., None]
    phi = f.phi
    core = np.zeros((species, species, 2, 2))
    core[..., 0, 0] = m.kap / sites
    core[..., 1, 0] = 2.0 * m.third * phi[:, None]
    core[..., 0, 1] = 2.0 * m.third.T * phi[None, :]
    core[..., 1, 1] = 2.0 * sites * (m.m + m.nu) * phi[:, None] * phi[None, :]
    own = np.arange(species)
    mean = G[own, own] + sites * (phi**2)[:, None] * zero
    return UniformMap(f.grid, mean, _lines(f, G**2, F**2), Background(np.stack([np.ones(sites), zero]), core))


def _lines(f: Fluctuating, G2: Floats, F2: Floats) -> list[Line]:
    nowhere = np.zeros(f.grid.dim, int)
    lines = [Line(1, nowhere, G2), Line(-1, nowhere, F2)]
    if f.sites.sublattices == 2 and all(length % 2 == 0 for length in f.grid.shape):
        lines.append(Line(1, np.array(f.grid.shape) // 2, f.staggered**2))
    return lines


def projection_terms(f: Fluctuating, filling: Floats) -> list[tuple[float, UniformMap]]:
    """Exact projection minus closed correction of the product state; nothing where it is small or impossible.

    Between whole atom numbers the neighbours are interpolated, those at which the state has weight (a counterflow state
    has none where the total is not that of its sites).
    """
    space, sites = f.sites.space, f.grid.sites
    twists = (space.n_max * sites + 1) ** space.species
    if sites > PROJECT_BELOW or twists > MAX_TWISTS or f.sites.sublattices == 2:
        return []
    atoms = np.asarray(filling, float) * sites
    atoms = np.where(np.abs(atoms - np.round(atoms)) < _WHOLE, np.round(atoms), atoms)
    terms: list[tuple[float, UniformMap]] = []
    corners: list[tuple[float, tuple[int, ...]]] = [(1.0, ())]
    for number in atoms:
        low = int(np.floor(number))
        share = float(number - low)
        parts = [(1.0 - share, low)] + ([(share, low + 1)] if share > 0 else [])
        corners = [(w * s, (*n, one)) for w, n in corners for s, one in parts]
    for weight, numbers in corners:
        try:
            terms.append((weight, projected_uniform(f.sites.rho[0], f.grid.shape, numbers, space)))
        except InputError:
            continue
    total = sum(weight for weight, _ in terms)
    if not total > 0:
        return []
    return [*((weight / total, part) for weight, part in terms), (-1.0, cumulant(f, local=True))]


def ramp(x: float, low: float, high: float) -> float:
    """0 below low, 1 above high, straight in between."""
    return float(np.clip((x - low) / (high - low), 0.0, 1.0))


def superfluid(f: Fluctuating, filling: Floats, melt: float | None = None) -> BlendedMap:
    """Map of a state with single-particle order; melt: weight of `thermal`, by default from its own condensate."""
    share = f.condensed
    melt = _melt(f) if melt is None else melt
    deep = ramp(share, *DEEP)
    parts: list[tuple[float, UniformMap]] = [(melt, thermal(f))]
    if melt < 1.0:
        parts += [((1.0 - melt) * (1.0 - deep), coherent(f)), ((1.0 - melt) * deep, cumulant(f))]
        parts += [((1.0 - melt) * w, part) for w, part in projection_terms(f, filling)]
    return BlendedMap(f.mean, [(w, part) for w, part in parts if w != 0.0])


def _melt(f: Fluctuating) -> float:
    return (1.0 - ramp(f.condensed, *MELTING)) * min(1.0, SMALL / f.grid.sites)


def insulating(f: Fluctuating, filling: Floats) -> BlendedMap:
    """Map of a state without single-particle order: Mott, paired, counterflow, density wave, normal."""
    return BlendedMap(f.mean, [(1.0, thermal(f)), *projection_terms(f, filling)])


def blend(parts: list[tuple[float, BlendedMap]]) -> BlendedMap:
    """Weighted mean of maps."""
    used = [(w, part) for w, part in parts if w > 0.0]
    mean = sum((w * part.mean for w, part in used), np.zeros_like(used[0][1].mean))
    return BlendedMap(mean, [(w * v, piece) for w, part in used for v, piece in part.parts])


def best(sites: LocalSites, companion: LocalSites | None, grid: Grid, filling: Floats) -> tuple[BlendedMap, Validity]:
    """Choose and blend. companion: the product state at the same filling, where `sites` is dressed."""
    own = fluctuating(sites, grid, filling)
    other = None if companion is None else fluctuating(companion, grid, filling)
    ordered = bool(sites.ordered.any())
    if other is None or not other.sites.ordered.any():
        made = superfluid(own, filling) if ordered else insulating(own, filling)
        return made, _judge(own, other)
    if is_paired(sites):
        return insulating(own, filling), _judge(own, other)
    if ordered:
        half = 0.5 * ramp(own.condensed, *AVERAGED) * (1.0 - ramp(other.condensed, *WEAK))
        melt = _melt(other)
        made = blend([(1.0 - half, superfluid(other, filling)), (half, superfluid(own, filling, melt))])
        return made, _judge(own, other)
    left = ramp(other.condensed, 0.0, LEFT) * min(1.0, SMALL / grid.sites)
    made = blend([(left, superfluid(other, filling)), (1.0 - left, insulating(own, filling))])
    return made, _judge(own, other)


def is_paired(sites: LocalSites) -> bool:
    """No single-particle order, but <b_1 b_2> or <b_1† b_2> (or both species locked together in any other way)."""
    if sites.species == 1 or bool(sites.ordered.any()):
        return False
    m = of_sites(sites)
    return bool(max(np.abs(m.m[:, 0, 1]).max(), np.abs(m.nu[:, 0, 1]).max()) > PAIR_THRESHOLD)


def _judge(own: Fluctuating, other: Fluctuating | None) -> Validity:
    """Class of the expected error, from the measurements in docs/noise.md."""
    chain = own.grid.dim == 1
    reference = other or own
    share = reference.condensed
    long_chain = chain and own.grid.sites > LONG_CHAIN
    broken = own.sites.sublattices == 2 and bool(own.sites.ordered.any())
    if own.unstable or reference.unstable or broken:
        return Validity.QUALITATIVE
    if share > 0:
        if share > (0.9 if chain else 0.75):
            return Validity.FAIR if long_chain else Validity.GOOD
        filling = reference.moments.density.sum()
        commensurate = abs(filling - np.round(filling)) < 1e-2
        narrow = share > 0.7 or (commensurate and not chain and other is not None)
        return Validity.FAIR if narrow else Validity.QUALITATIVE
    limits = (0.5, 1.5) if chain else (0.6, 2.5)
    paired = is_paired(own.sites)
    if paired:
        limits = (0.15, 0.6)
    spread = _modulation(own)
    grade = int(spread > limits[0]) + int(spread > limits[1])
    # Order of pairs decays along a chain; mean field knows nothing of it.
    worst = (2 if long_chain else 1) if paired and chain else 0
    return Validity(max(grade, worst))


def _modulation(f: Fluctuating) -> float:
    """Largest relative swing of the momentum distribution, 0 in the atomic limit."""
    level = f.mean.mean(-1)
    return float(np.max((f.mean.max(-1) - level) / np.maximum(level, 1e-300)))
