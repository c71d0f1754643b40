"""Bands of one axis: plane waves in, hopping and Wannier functions out, all in recoil energies and spacings.

In:  depths s of V = s E_R sin²(πx/d), in E_R = h²/(8 m d²).
Out: t, second hopping, gaps, ∫w⁴ and the overlap of two species' Wannier functions, to the tolerances below.

The basis grows until the residual of the truncated eigenproblem is below 1e-12 E_R, the number of wells until
the Wannier density has fallen by 1e-14 at the supercell's end; integrals of the resulting trigonometric
polynomials are then exact sums. Conventions: Bloch, Dalibard, Zwerger, RMP 80, 885 (2008), section IV.
"""

import math
import reprlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gutz.errors import InputError

FloatArray = NDArray[np.float64]

DEPTH_RANGE = (0.1, 200.0)
"""Allowed depths in E_R. Below, no band is tight-binding in any sense; above, hopping is below 1e-10 E_R."""

_RESIDUAL = 1e-12
_DENSITY_TAIL = 1e-14
_CHUNK_BYTES = 32e6
# Numbers of wells in use: odd, so that q = 0 is in and the band edge never counts half.
_LADDER = sorted(base * 2**n + 1 for base in (4, 6) for n in range(1, 12))


@dataclass(frozen=True, eq=False)
class Bands:
    """One axis of a lattice in recoil energies and spacings; arrays of the depths' shape.

    t, t2: hopping to the first and second neighbour; t2 is good to about 1e-10 t, not to its own digits.
    gap: bottom of the first excited band minus top of the lowest. excitation: distance of the bands' means.
    bottom, top: edges of the lowest band, measured from the potential's minimum.
    quartic: d ∫ w⁴ dx of the lowest band's Wannier function w.
    """

    t: FloatArray
    t2: FloatArray
    gap: FloatArray
    excitation: FloatArray
    bottom: FloatArray
    top: FloatArray
    quartic: FloatArray


def bands(depth: ArrayLike) -> Bands:
    """Bands and Wannier overlap of one axis; depths in E_R, any shape.

    Raises:
        InputError: a depth outside `DEPTH_RANGE`.
    """
    depths = check_range(depth, "depth", DEPTH_RANGE, "E_R")
    rows, back = np.unique(depths, return_inverse=True)
    solved, _ = solve_rows(rows[:, None])
    return Bands(**{name: values[:, 0][back].reshape(depths.shape) for name, values in vars(solved).items()})


def wannier(depth: float, x: ArrayLike) -> FloatArray:
    """Lowest band's maximally localised Wannier function of the well at 0, in 1/√d; x in spacings d.

    Real, even and positive at 0; ∫w² dx = 1. Outside the solved supercell, where |w| < 1e-7 w(0), it is 0.

    Raises:
        InputError: depth outside `DEPTH_RANGE`.
    """
    depths = check_range(depth, "depth", DEPTH_RANGE, "E_R").reshape(1)
    places = np.asarray(x, dtype=np.float64)
    cells = _cells(depths[0])
    while True:
        _, lowest = _bloch(depths, cells)
        if _tail(_wannier_grid(lowest, cells), cells)[0] < _DENSITY_TAIL:
            break
        cells = 2 * cells - 1
    spectrum = _spectrum(lowest, cells)[0] / cells
    waves = 2 * math.pi / cells * np.arange(1, spectrum.size)
    values = spectrum[0] + 2 * np.cos(places[..., None] * waves) @ spectrum[1:]
    return np.where(np.abs(places) <= cells / 2, values, 0.0)


def deep_hopping(depth: ArrayLike) -> FloatArray:
    """t/E_R = (4/√π) s^{3/4} e^{−2√s}, for comparison only: 12–19 % high at s = 10–20."""
    s = check_range(depth, "depth", DEPTH_RANGE, "E_R")
    return 4 / math.sqrt(math.pi) * s**0.75 * np.exp(-2 * np.sqrt(s))


def harmonic_interaction(depth: ArrayLike, length: ArrayLike, spacing: float) -> FloatArray:
    """U/E_R = √(8/π) k a s^{3/4}, Gaussian orbitals in a cubic lattice; 19–31 % high at s = 10–20.

    For comparison only; scattering length and spacing in m, k = π/spacing.
    """
    s = check_range(depth, "depth", DEPTH_RANGE, "E_R")
    return math.sqrt(8 / math.pi) * math.pi * np.asarray(length, dtype=np.float64) / spacing * s**0.75


def solve_rows(rows: FloatArray) -> tuple[Bands, FloatArray]:
    """Bands for depths of shape (row, species), and d ∫ w_1² w_last² per row (row,)."""
    columns = np.empty((7, *rows.shape))
    cross = np.empty(len(rows))
    cells = np.array([_cells(shallowest) for shallowest in rows.min(axis=1)])
    todo = np.ones(len(rows), dtype=bool)
    while todo.any():
        size = int(cells[todo].min())
        chunk = np.flatnonzero(todo & (cells == size))
        waves = _plane_waves(rows[chunk].max())
        chunk = chunk[: max(1, int(_CHUNK_BYTES / (8 * rows.shape[1] * size * (2 * waves + 1) ** 2)))]
        energies, lowest = _bloch(rows[chunk].reshape(-1), size)
        orbital = _wannier_grid(lowest, size)
        local = (_tail(orbital, size) < _DENSITY_TAIL).reshape(len(chunk), -1).all(axis=1)
        cells[chunk[~local]] = 2 * size - 1
        density = (orbital**2).reshape(len(chunk), rows.shape[1], -1)
        per_cell = density.shape[-1] // size
        values = np.stack([*_band_numbers(energies, lowest, size), (orbital**4).sum(axis=-1) / per_cell])
        columns[:, chunk[local]] = values.reshape(7, len(chunk), -1)[:, local]
        cross[chunk[local]] = ((density[:, 0] * density[:, -1]).sum(axis=-1) / per_cell)[local]
        todo[chunk[local]] = False
    return Bands(*columns), cross


def _cells(depth: float) -> int:
    """First guess for the number of wells; w falls off at least as exp(−x·0.42 s/(1 + 0.04 s)), measured."""
    wanted = 36 * (1 + 0.04 * depth) / (0.42 * depth)
    return next(size for size in _LADDER if size >= wanted)


def _plane_waves(depth: float) -> int:
    """First guess for M; waves −M…M around the quasimomentum are kept."""
    return 7 + math.ceil(0.85 * math.sqrt(depth))


def _bloch(depths: FloatArray, cells: int) -> tuple[FloatArray, FloatArray]:
    """Two lowest bands (depth, q, 2) and lowest Bloch states (depth, q, wave); q = 2j/cells ≥ 0, then 1.

    q in units of π/d. Extending a truncated eigenvector by zeros leaves the residual s/4 times its end
    component, which bounds the energy's error (quadratically in residual over gap); M grows until it is tiny.
    """
    q = np.append(2 * np.arange((cells + 1) // 2) / cells, 1.0)
    most = _plane_waves(float(depths.max()))
    while True:
        wave = 2 * np.arange(-most, most + 1)
        size = wave.size
        matrix = np.zeros((depths.size, q.size, size, size))
        i = np.arange(size)
        matrix[..., i, i] = (q[:, None] + wave) ** 2 + depths[:, None, None] / 2
        # numpy reads the lower triangle only.
        matrix[..., i[1:], i[:-1]] = -depths[:, None, None] / 4
        energies, states = np.linalg.eigh(matrix)
        ends = np.abs(states[:, :, [0, -1], :2]).max(axis=(1, 2, 3))
        if np.all(depths / 4 * ends < _RESIDUAL):
            break
        most += 2
    lowest = states[..., 0]
    # Positive at the well's centre for every q: the phase that makes Wannier functions real and localised.
    return energies[..., :2], lowest * np.sign(lowest.sum(axis=-1, keepdims=True))


def _band_numbers(energies: FloatArray, lowest: FloatArray, cells: int) -> tuple[FloatArray, ...]:
    """t, t2, gap, excitation, bottom, top: the first six columns of `Bands`, each (depth,)."""
    half = (lowest.shape[-1] - 1) // 2
    q = 2 * np.arange(1, (cells + 1) // 2) / cells
    wave = 2 * np.arange(-half, half + 1)
    # dE/dq is the current, and the current is the same at all x; at the barrier's top it is a product of two
    # small amplitudes instead of a difference of large numbers. E = E0 − 2 Σ t_n cos(nπq).
    state = lowest[:, 1:-1] * (1 - 2 * (np.arange(2 * half + 1) % 2))
    slope = 2 * state.sum(axis=-1) * (state * (q[:, None] + wave)).sum(axis=-1)
    t, t2 = (2 / (n * math.pi * cells) * (slope * np.sin(n * math.pi * q)).sum(axis=-1) for n in (1, 2))
    gap = energies[:, -1, 1] - energies[:, -1, 0]
    split = energies[:, :-1, 1] - energies[:, :-1, 0]
    excitation = (2 * split.sum(axis=-1) - split[:, 0]) / cells
    return t, t2, gap, excitation, energies[:, 0, 0], energies[:, -1, 0]


def _spectrum(lowest: FloatArray, cells: int) -> FloatArray:
    """Fourier coefficients n ≥ 0 (wave number 2πn/(cells d)) of cells·√d·w, (depth, n); even in n, real."""
    half, last = (lowest.shape[-1] - 1) // 2, (cells - 1) // 2
    positive = lowest[:, : last + 1, half:]
    negative = lowest[:, last:0:-1, half::-1]  # c(−q, m) = c(q, −m)
    blocks = np.concatenate([negative, positive], axis=1).swapaxes(1, 2)
    return blocks.reshape(len(lowest), -1)[:, last:]


def _wannier_grid(lowest: FloatArray, cells: int) -> FloatArray:
    """√d·w on a grid over the supercell, well at index 0, (depth, cells·g); sums of w⁴ are exact."""
    per_cell = 2 * lowest.shape[-1] + 2
    spectrum = _spectrum(lowest, cells)
    return per_cell * np.fft.irfft(spectrum, n=cells * per_cell, axis=-1)


def _tail(orbital: FloatArray, cells: int) -> FloatArray:
    """Largest density within half a well of the supercell's end, relative to the centre; (depth,)."""
    middle, reach = orbital.shape[-1] // 2, orbital.shape[-1] // (2 * cells)
    return (orbital[:, middle - reach : middle + reach] ** 2).max(axis=-1) / orbital[:, 0] ** 2


def check_range(value: ArrayLike, where: str, limits: tuple[float, float], unit: str) -> FloatArray:
    """Finite values within limits as an array, or one sentence naming the first offender."""
    try:
        values = np.asarray(value, dtype=np.float64)
    except (TypeError, ValueError, OverflowError):
        raise InputError(f"{where}: got {reprlib.repr(value)}, must be numbers in {unit}.") from None
    if values.size == 0:
        raise InputError(f"{where}: got an empty array, must hold at least one value in {unit}.")
    bad = ~((values >= limits[0]) & (values <= limits[1]))
    if bad.any():
        raise InputError(
            f"{where}: got {values[bad].flat[0]:.6g} {unit}, must lie between {limits[0]:.6g} and "
            f"{limits[1]:.6g} {unit}."
        )
    return values
