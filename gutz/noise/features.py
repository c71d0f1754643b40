"""The features of a map in words and numbers: where, how high, how wide, how much, and what each one means.

In:  a map, and what the solution says about order.
Out: a list of `Feature`, in the order a person would look for them.
"""

from typing import NamedTuple

import numpy as np

from gutz.noise.grid import Floats
from gutz.noise.shapes import CHANNELS, Decay, decay, line_shape, width
from gutz.noise.uniform import BlendedMap
from gutz.phases import EMPTY_THRESHOLD, PAIR_THRESHOLD, STAGGER_THRESHOLD
from gutz.solution import Solution

_SAMPLE = 4096

CONDENSED = 1e-5
"""Condensate density above which there is single-particle order."""

FAINT = 1e-3
"""Heights below this, relative to the squared fillings, are not listed."""


class Feature(NamedTuple):
    """One feature of C_ab, or of n(k).

    species: (a, b), counted from 1. where: "k' = k", "k' = -k", "k' = 0", "k' = k + (π, ..)" or "k = 0". height: mean
    over k of C_ab on the feature above its surroundings; normalised: the same over n_a n_b. width: full width at half
    maximum along x, in 1/lattice constant. weight: height summed over the momenta of the feature (order peaks: of
    its top, not of the wings that fluctuations give it). meaning: a sentence.
    order: this feature proves order by itself.
    """

    name: str
    species: tuple[int, int]
    where: str
    height: float
    normalised: float
    width: float
    weight: float
    meaning: str
    order: bool


class Order(NamedTuple):
    """What the solution says.

    condensate: |φ_a|², (a,). staggering: sublattice density difference, (a,). pair, antipair: local <b_1 b_2>,
    <b_1† b_2>. decays: by channel (see `gutz.noise.shapes`).
    """

    condensate: Floats
    staggering: Floats
    pair: float
    antipair: float
    decays: dict[str, Decay]

    @property
    def paired_channel(self) -> str | None:
        """Which order parameter there is besides <b_a>, if there is no <b_a>: "pair", "antipair" or None."""
        if np.any(self.condensate > CONDENSED):
            return None
        if abs(self.pair) > PAIR_THRESHOLD:
            return "pair"
        return "antipair" if abs(self.antipair) > PAIR_THRESHOLD else None


def features(made: BlendedMap, order: Order) -> list[Feature]:
    """List the features of a map."""
    grid = made.grid
    found: list[Feature] = []
    k = grid.indices()
    own_inverse = grid.flat(2 * k) == 0
    away = ~own_inverse
    filling = made.mean.sum(-1) / grid.sites
    condensed = order.condensate > CONDENSED

    def add(
        name: str, a: int, b: int, where: str, height: float, decay: Decay | None, meaning: str, proves: bool = False
    ) -> None:
        scale = float(filling[a] * filling[b])
        if scale < EMPTY_THRESHOLD**2 or abs(height) < FAINT * scale:
            return
        found.append(
            Feature(
                name, (a + 1, b + 1), where, height, height / scale, _width(grid.shape, decay),
                height * int(away.sum()), meaning, proves,
            )
        )  # fmt: skip

    for a in range(made.species):
        if condensed[a]:
            background = float(np.median(made.mean[a]))
            found.append(
                Feature(
                    "condensate peak of n(k)", (a + 1, a + 1), "k = 0", float(made.mean[a, 0]) - background, np.nan,
                    _width(grid.shape, order.decays.get(str(a + 1))), float(made.mean[a, 0]), _CONDENSATE, True,
                )
            )  # fmt: skip
        add("bunching", a, a, "k' = k", _height(made, a, a, 1, away), None, _BUNCHING)
        if condensed[a]:
            add("pairing of one species", a, a, "k' = -k", _height(made, a, a, -1, away), None, _OWN_PAIRING)
            # C(k, 0), k ≠ 0: what is not in the condensate came out of it.
            line = float(made.entries(a, a, k[away], np.zeros(grid.dim, int)).mean())
            add("negative lines", a, a, "k' = 0", line, None, _DEPLETION)
        wave = _staggered(made, a, away) if abs(order.staggering[a]) > STAGGER_THRESHOLD else 0.0
        add("density-wave peak", a, a, "k' = k + (π, ..)", wave, None, _WAVE, True)
    if made.species == 2:
        pair = _height(made, 0, 1, -1, away)
        anti = _height(made, 0, 1, 1, away)
        for name, height, where, channel in (
            ("pairing between species", pair, "k' = -k", "pair"),
            ("counterflow peak", anti, "k' = k", "antipair"),
        ):
            proves = channel == order.paired_channel
            words = _PROOF[channel] if proves else _NO_PROOF[channel]
            fall = order.decays[channel] if proves else None
            # Mean field gives the weight; what the top keeps of it depends on how far the order reaches.
            top = 1.0 if fall is None else _top(grid.shape, fall)
            add(name, 0, 1, where, height * top, fall, words, proves)
    return found


_CONDENSATE = "many atoms of one momentum: single-particle order, or what a finite cloud shows of quasi-order"
_BUNCHING = (
    "bosons bunch, in every state and also without order; free of shot noise at k' = k + G, so it calibrates heights"
)
_OWN_PAIRING = "atoms leave the condensate in pairs of opposite momentum: an interacting superfluid"
_DEPLETION = "an atom at k ≠ 0 is missing from the condensate: fixed atom number in a superfluid"
_WAVE = "alternating density: a checkerboard"
_PROOF = {
    "pair": "pair order: <b_1 b_2> without any condensate",
    "antipair": "counterflow order: <b_1† b_2> without any condensate",
}
_NO_PROOF = {
    "pair": "pairs of opposite momentum; present in an ordinary superfluid of two species too, so pair order is proven "
    "only with vanishing condensate",
    "antipair": "correlated momenta of the species; in an ordinary superfluid this is weak and even its sign is "
    "uncertain, so counterflow order is proven only with vanishing condensate",
}


def _height(made: BlendedMap, a: int, b: int, sign: int, away: np.ndarray) -> float:
    """Mean over k of C_ab(k, ±k), above the mean of its surroundings; momenta with k = -k left out."""
    k = made.grid.indices()[away]
    on = made.entries(a, b, k, sign * k).mean()
    off = []
    k = k[:: max(1, len(k) // _SAMPLE)]
    for step in _neighbours(made.grid.shape):
        partner = sign * k + step
        # Not where the neighbour lies on the other line, or on an axis of the condensate.
        fair = (made.grid.flat(partner - k) != 0) & (made.grid.flat(partner + k) != 0) & (made.grid.flat(partner) != 0)
        if fair.any():
            off.append(made.entries(a, b, k[fair], partner[fair]).mean())
    return float(on - (np.mean(off) if off else 0.0))


def _neighbours(shape: tuple[int, ...]) -> list[np.ndarray]:
    """Steps to momenta near a line, two along each direction."""
    steps = []
    for axis, length in enumerate(shape):
        for count in (1, 2):
            if length > 2 * count:
                step = np.zeros(len(shape), int)
                step[axis] = count
                steps += [step, -step]
    return steps or [np.ones(len(shape), int)]


def _staggered(made: BlendedMap, a: int, away: np.ndarray) -> float:
    """Height at k' = k + (π, ..) above its surroundings."""
    shape = made.grid.shape
    if any(length % 2 for length in shape) or min(shape) < 6:
        return 0.0
    k, half = made.grid.indices()[away], np.array(shape) // 2
    clear = made.grid.flat(2 * k + half) != 0
    k = k[clear]
    on = made.entries(a, a, k, k + half).mean()
    k = k[:: max(1, len(k) // _SAMPLE)]
    near = [made.entries(a, a, k, k + half + step).mean() for step in _neighbours(shape)]
    return float(on - np.median(near))


def _top(shape: tuple[int, ...], decay: Decay) -> float:
    """Height of an order peak relative to long-range order, for a box of this shape."""
    return float(line_shape(decay, np.ones(shape), refine=1)[1].max())


def _width(shape: tuple[int, ...], decay: Decay | None) -> float:
    """Full width at half maximum for a box of this shape; bunching has the width of the box."""
    cloud = np.ones(shape if np.prod(shape) <= 1_000_000 else shape[:1])
    from_box = decay if decay is not None else Decay.everywhere()
    return width(*line_shape(from_box, cloud))


_TAKEN = ("condensate", "staggering", "pair_order", "antipair_order")


def order_of(solution: Solution, point: tuple[int, ...]) -> Order:
    """What a solution says about order at one point."""
    names = CHANNELS if solution.mixture.species == 2 else CHANNELS[:1]
    pick = {name: np.asarray(solution.outputs[name])[point] for name in _TAKEN}
    return Order(
        pick["condensate"],
        pick["staggering"],
        float(pick["pair_order"]),
        float(pick["antipair_order"]),
        {name: decay(solution, point, name) for name in names},
    )
