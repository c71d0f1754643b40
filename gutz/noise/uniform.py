"""Noise maps of translation-invariant states: lines over a background of low rank, O(1) per entry.

In:  momentum distributions, strengths of the channels k' = ±k + Q, backgrounds; by whatever method.
Out: `UniformMap`, with the spread of the atom numbers taken out.

    :C_ab:(k, k') = Σ_lines w_ab(k) δ(k' = ±k + Q) + Σ_rs L_r(k) B_ab,rs L_s(k') - Σ_cd g_ac(k) W_cd g_bd(k')

With lines |G_ab|² at k' = k, |F_ab|² at k' = -k and no background this is Wick's theorem with fixed numbers.
"""

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.noise.grid import Floats, Grid, Indices, NoiseMap, fixed_number


class Line(NamedTuple):
    """A channel. sign: +1 for k' = k + Q, -1 for k' = -k + Q. Q: (dim,) index. weight: (a, a, sites), at k."""

    sign: int
    Q: Indices
    weight: Floats


class Background(NamedTuple):
    """Σ_rs L_r(k) B_ab,rs L_s(k'). left: L, (r, sites). core: B, (a, a, r, r)."""

    left: Floats
    core: Floats


class UniformMap(NoiseMap):
    """Map of a translation-invariant (or checkerboard) state."""

    def __init__(
        self,
        grid: Grid,
        mean: Floats,
        lines: Sequence[Line],
        background: Background | None = None,
        *,
        fixed: Sequence[bool] | NDArray[np.bool_] | bool = True,
    ) -> None:
        """Collect. mean: (a, sites). fixed: species whose spread of numbers is taken out (all, none, one each)."""
        species = len(mean)
        self.grid, self.mean, self.lines = grid, mean, tuple(lines)
        self._background = background or Background(np.zeros((0, grid.sites)), np.zeros((species, species, 0, 0)))
        # Cov(n_a(k), N_b): every line meets one k' for each k.
        gain = sum((line.weight for line in self.lines), np.zeros((species, species, grid.sites)))
        left, core = self._background
        gain = gain + np.einsum("rk,abrs,s->abk", left, core, left.sum(1))
        gain[range(species), range(species)] += mean
        free = ~np.broadcast_to(np.asarray(fixed, bool), (species,))
        gain[:, free] = gain[free] = 0.0
        self._gain = gain
        self._weight = fixed_number(gain, gain.sum(-1))

    def entries(self, a: int, b: int, k: Indices, k_: Indices) -> Floats:
        """See `NoiseMap.entries`."""
        at, at_ = self.grid.flat(k), self.grid.flat(k_)
        at, at_ = np.broadcast_arrays(at, at_)
        left, core = self._background
        out = np.einsum("r...,rs,s...->...", left[:, at], core[a, b], left[:, at_])
        out = out - np.einsum("c...,cd,d...->...", self._gain[a][:, at], self._weight, self._gain[b][:, at_])
        for line in self.lines:
            partner = self.grid.flat(line.sign * k + line.Q)
            out = out + np.where(np.broadcast_to(partner, at.shape) == at_, line.weight[a, b][at], 0.0)
        return out

    def channel(self, a: int, b: int, sign: int) -> tuple[Floats, Floats]:
        """Mean over k of C_ab(k, ±k + Q) for every Q, without and with its line at each Q; both (sites,).

        What an experiment sees that averages over the image: the background, and the background with peaks. Costs
        a few Fourier transforms, never sites².
        """
        shape, axes = self.grid.shape, tuple(range(1, 1 + self.grid.dim))

        def spectra(values: Floats) -> NDArray[np.complex128]:
            return np.fft.fftn(values.reshape(len(values), *shape), axes=axes)

        def correlate(left: Floats, middle: Floats, right: Floats) -> Floats:
            # Σ_k L_r(k) M_rs R_s(sign k + Q): a correlation (+) or a convolution (-) over the grid.
            first = spectra(left)
            first = np.conj(first) if sign > 0 else first
            product = np.einsum("r...,rs,s...->...", first, middle, spectra(right))
            return np.fft.ifftn(product).real.ravel() / self.grid.sites

        left, core = self._background
        smooth = correlate(left, core[a, b], left) - correlate(self._gain[a], self._weight, self._gain[b])
        peaks = smooth.copy()
        k = self.grid.indices()
        for line in self.lines:
            if line.sign == sign:
                peaks[self.grid.flat(line.Q)] += line.weight[a, b].mean()
                continue
            # The other channel crosses this one: k' = -s k + Q0 and k' = s k + Q meet where 2k = s (Q0 - Q).
            meet = self.grid.flat(line.Q - 2 * sign * k)
            np.add.at(peaks, meet, line.weight[a, b] / self.grid.sites)
        return smooth, peaks


class BlendedMap(NoiseMap):
    """Weighted sum of maps with shot noise: Σ_i weight_i C_i; normal-ordered with the momentum distribution given."""

    def __init__(self, mean: Floats, parts: Sequence[tuple[float, UniformMap]]) -> None:
        """Collect; mean: (a, sites)."""
        self.grid, self.mean, self.parts = parts[0][1].grid, mean, tuple(parts)
        excess = sum((w * part.mean for w, part in parts), -mean)
        species = len(mean)
        weight = np.zeros((species, species, self.grid.sites))
        weight[range(species), range(species)] = excess
        # Shot noise of the parts that the common momentum distribution does not have.
        self._rest = UniformMap(self.grid, mean, [Line(1, np.zeros(self.grid.dim, int), weight)], fixed=False)

    def entries(self, a: int, b: int, k: Indices, k_: Indices) -> Floats:
        """See `NoiseMap.entries`."""
        return sum((w * part.entries(a, b, k, k_) for w, part in self.parts), self._rest.entries(a, b, k, k_))

    def channel(self, a: int, b: int, sign: int) -> tuple[Floats, Floats]:
        """See `UniformMap.channel`."""
        smooth, peaks = self._rest.channel(a, b, sign)
        for w, part in self.parts:
            more, higher = part.channel(a, b, sign)
            smooth, peaks = smooth + w * more, peaks + w * higher
        return smooth, peaks
