"""From laser light to Hubbard parameters: exact lowest-band physics of a simple-cubic optical lattice.

In:  wavelength (m), depth per axis (recoil energies), atoms, scattering lengths (m); arrays of depths batch.
Out: t, U, U12 and band gaps in J, each point with flags that say where the one-band model is strained.

The bands of each axis come from `gutz.bands`; the three axes are separable. Conventions and formulas: Bloch,
Dalibard, Zwerger, Rev. Mod. Phys. 80, 885 (2008), section IV.

Results are estimates of an ideal lattice; laser work follows local rules.
"""

import math
from dataclasses import dataclass, field
from enum import IntFlag

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gutz.atoms import Atom, check_wavelength
from gutz.bands import DEPTH_RANGE, FloatArray, check_range, solve_rows
from gutz.errors import InputError
from gutz.units import HBAR, PLANCK, from_si

PerSpecies = ArrayLike | tuple[ArrayLike, ArrayLike]
"""One value or array for all species, or a tuple with one per species. A list is an array, so it batches."""

FREQUENCY_RANGE = (1.0, 1e7)
"""Allowed harmonic confinement in Hz."""

# Where the one-band Hubbard model is called strained. Common practice, no single source.
SECOND_HOPPING_LIMIT = 0.05
GAP_FRACTION_LIMIT = 0.5
SHALLOW_LIMIT = 3.0
OSCILLATOR_FRACTION_LIMIT = 0.1
TRANSVERSE_LIMIT = 0.01


class Caution(IntFlag):
    """What an experimenter should know about a point; `sentences` puts it into words."""

    SECOND_HOPPING = 1
    GAP = 2
    SHALLOW = 4
    SCATTERING_LENGTH = 8
    TRANSVERSE_HOPPING = 16
    ESTIMATED_DEPTH = 32


_SENTENCES = {
    Caution.SECOND_HOPPING: f"Hopping to the second neighbour exceeds {SECOND_HOPPING_LIMIT:.0%} of t.",
    Caution.GAP: f"The interaction exceeds {GAP_FRACTION_LIMIT:.0%} of the band gap: higher bands mix in.",
    Caution.SHALLOW: f"The lattice is shallower than {SHALLOW_LIMIT:g} E_R: one band is not enough.",
    Caution.SCATTERING_LENGTH: f"A scattering length exceeds {OSCILLATOR_FRACTION_LIMIT:g} of the on-site "
    "oscillator length: U from first-order theory is off.",
    Caution.TRANSVERSE_HOPPING: f"Hopping across the tubes or planes exceeds {TRANSVERSE_LIMIT:.0%} of t: "
    "they are not isolated.",
    Caution.ESTIMATED_DEPTH: "The second species' depth is estimated from two spectral lines: calibrate it.",
}


def sentences(flags: int) -> tuple[str, ...]:
    """The sentences for a combination of `Caution` bits, lowest bit first."""
    return tuple(text for bit, text in _SENTENCES.items() if flags & bit)


@dataclass(frozen=True, eq=False)
class StandingWave:
    """A retro-reflected beam along one axis: depth in each species' own E_R, batch arrays allowed."""

    depth: PerSpecies


@dataclass(frozen=True, eq=False)
class Harmonic:
    """Smooth confinement along one axis instead of a lattice: trap frequency in Hz (cycles per second)."""

    frequency: PerSpecies


@dataclass(frozen=True, eq=False)
class OpticalLattice:
    """A lattice of one wavelength holding one or two species.

    Args:
        wavelength: vacuum wavelength in m; the lattice spacing is half of it.
        atoms: one or two `Atom`.
        axes: three of `StandingWave` or `Harmonic`, or one `StandingWave` for all. The first `dim` must be
            standing waves; the others confine to tubes or planes, and their hopping is reported too.
        a11, a22, a12: scattering lengths in m, numbers or batch arrays; the last two for two species only.
        dim: how many axes belong to the lattice problem, 1 to 3.
        same_light: depths are the first species', the second's follow from the ratio of the polarisabilities
            at this wavelength (`Atom.polarisability`); an estimate, and flagged as such.

    Attributes (all arrays broadcast to the common batch shape):
        depths: E_R of each species, shape (*batch, species, 3); 0 along harmonic axes.
        frequencies: Hz, same shape; 0 along standing waves.
        lengths: scattering lengths a11, a22, a12 in m, shape (*batch, 3); for one species (*batch, 1).

    Raises:
        InputError: any value out of its range; the sentence names the field, the value and the range.
    """

    wavelength: float
    atoms: tuple[Atom, ...]
    axes: StandingWave | tuple[StandingWave | Harmonic, ...]
    a11: ArrayLike
    a22: ArrayLike | None = None
    a12: ArrayLike | None = None
    dim: int = 3
    same_light: bool = False
    depths: FloatArray = field(init=False, repr=False)
    frequencies: FloatArray = field(init=False, repr=False)
    lengths: FloatArray = field(init=False, repr=False)

    def __post_init__(self) -> None:
        check_wavelength(self.wavelength)
        species = len(self.atoms)
        if species not in (1, 2):
            raise InputError(f"atoms: got {species} species, must be one or two.")
        if self.dim not in (1, 2, 3):
            raise InputError(f"dim: got {self.dim!r}, must be 1, 2 or 3.")
        axes = (self.axes,) * 3 if isinstance(self.axes, StandingWave) else tuple(self.axes)
        if len(axes) != 3 or not all(isinstance(axis, StandingWave) for axis in axes[: self.dim]):
            raise InputError(
                f"axes: got {[type(axis).__name__ for axis in axes]}, must be three, the first "
                f"{self.dim} (dim) of them standing waves."
            )
        depths, frequencies = [], []
        for number, axis in enumerate(axes, 1):
            if isinstance(axis, StandingWave):
                depths.append(self._depths(axis.depth, f"depth of axis {number}"))
                frequencies.append(np.zeros(species))
            else:
                depths.append(np.zeros(species))
                where = f"frequency of axis {number}"
                frequencies.append(_per_species(axis.frequency, species, where, FREQUENCY_RANGE, "Hz"))
        lengths = self._scattering_lengths()
        try:
            batch = np.broadcast_shapes(*(v.shape[:-1] for v in (*depths, *frequencies, lengths)))
        except ValueError:
            shapes = sorted({v.shape[:-1] for v in (*depths, *frequencies, lengths)} - {()})
            raise InputError(
                "depths, frequencies and scattering lengths: got arrays of shapes "
                f"{', '.join(map(str, shapes))}, must broadcast to one shape."
            ) from None
        for name, parts in (("depths", depths), ("frequencies", frequencies)):
            full = [np.broadcast_to(part, (*batch, species)) for part in parts]
            object.__setattr__(self, name, np.stack(full, axis=-1))
        object.__setattr__(self, "lengths", np.broadcast_to(lengths, (*batch, lengths.shape[-1])))

    @property
    def spacing(self) -> float:
        """Distance of neighbouring wells in m."""
        return self.wavelength / 2

    @property
    def recoil(self) -> FloatArray:
        """E_R = h²/(2 m λ²) in J, shape (species,)."""
        return np.array([recoil_energy(self.wavelength, atom.mass) for atom in self.atoms])

    def _depths(self, value: PerSpecies, where: str) -> FloatArray:
        species = len(self.atoms)
        if not self.same_light:
            return _per_species(value, species, where, DEPTH_RANGE, "E_R")
        if species != 2 or isinstance(value, tuple):
            raise InputError(f"{where}: same_light needs two species and the first one's depth only.")
        first = _per_species(value, 1, where, DEPTH_RANGE, "E_R")[..., 0]
        factor = depth_ratio(self.wavelength, *self.atoms)
        derived = f"{where}, {self.atoms[1].name} (× {factor:.4g} from the same light)"
        return np.stack([first, check_range(first * factor, derived, DEPTH_RANGE, "E_R")], axis=-1)

    def _scattering_lengths(self) -> FloatArray:
        given = {"a11": self.a11, "a22": self.a22, "a12": self.a12}
        wanted = {"a11"} if len(self.atoms) == 1 else {"a11", "a22", "a12"}
        for name, value in given.items():
            if (value is None) != (name not in wanted):
                need = "must be given in m for two species" if value is None else "must be left out for one species"
                raise InputError(f"{name}: got {value!r}, {need}.")
        limit = (-self.spacing, self.spacing)
        values = [
            check_range(value, f"scattering length {name}", limit, "m")
            for name, value in given.items()
            if value is not None
        ]
        try:
            return np.stack(np.broadcast_arrays(*values), axis=-1)
        except ValueError:
            raise InputError("scattering lengths: arrays must broadcast to one shape.") from None


@dataclass(frozen=True, eq=False)
class HubbardParameters:
    """Parameters of the one-band Hubbard model, all energies in J; made by `hubbard_parameters`.

    Attributes:
        t: hopping to the next neighbour, shape (*batch, species, 3); 0 along harmonic axes.
        t2_ratio: hopping to the second neighbour over t, same shape; negative in a lattice.
        U: on-site interaction of each species, (*batch, species).
        U12: interspecies interaction, (*batch); None for one species.
        band_gap: smallest distance of the first excited band from the lowest, (*batch, species, 3);
            hν along harmonic axes.
        excitation: distance of the two bands' mean energies, i.e. of the on-site levels; same shape.
        recoil: E_R, (species,).
        flags: `Caution` bits, integers of shape (*batch).
        dim: how many axes belong to the lattice problem.
    """

    t: FloatArray
    t2_ratio: FloatArray
    U: FloatArray
    U12: FloatArray | None
    band_gap: FloatArray
    excitation: FloatArray
    recoil: FloatArray
    flags: NDArray[np.int64]
    dim: int

    @property
    def recoil_hz(self) -> FloatArray:
        """E_R/h in Hz, (species,)."""
        return self.recoil / PLANCK

    @property
    def cautions(self) -> tuple[str, ...]:
        """The sentences of every flag raised anywhere in the batch."""
        return sentences(int(np.bitwise_or.reduce(self.flags.reshape(-1))))

    def energies_in(self, unit: str) -> dict[str, FloatArray]:
        """All energies in "U1", in "E_R" (of the first species), or in an energy unit ("kHz", "nK", …).

        Returns:
            t, U, U12 (two species), band_gap, excitation; shapes as the attributes.

        Raises:
            InputError: unknown unit, or U1 = 0 somewhere.
        """
        energies = {"t": self.t, "U": self.U, "band_gap": self.band_gap, "excitation": self.excitation}
        if self.U12 is not None:
            energies["U12"] = self.U12
        if unit == "U1":
            U1 = self.U[..., 0]
            if not U1.all():
                raise InputError("unit: got U1, must be another one here because a11 = 0 somewhere.")
            return {k: v / U1.reshape(U1.shape + (1,) * (v.ndim - U1.ndim)) for k, v in energies.items()}
        if unit == "E_R":
            return {k: v / self.recoil[0] for k, v in energies.items()}
        return {k: np.asarray(from_si(v, "energy", unit)) for k, v in energies.items()}


def recoil_energy(wavelength: float, mass: float) -> float:
    """E_R = h²/(2 m λ²) in J from a wavelength in m and a mass in kg."""
    return PLANCK**2 / (2 * mass * wavelength**2)


def depth_ratio(wavelength: float, first: Atom, second: Atom) -> float:
    """Depth of the second atom over that of the first in the same light, each in its own E_R.

    (α₂/α₁)(m₂/m₁), because the potential goes with α and E_R with 1/m.

    Raises:
        InputError: no lines known, light too near a line, or one atom attracted and the other repelled.
    """
    alpha = first.polarisability(wavelength), second.polarisability(wavelength)
    if alpha[0] * alpha[1] <= 0:
        raise InputError(
            f"wavelength: got {wavelength * 1e9:.7g} nm, where light attracts one of {first.name} and "
            f"{second.name} and repels the other, half a spacing apart; must act alike on both."
        )
    return alpha[1] / alpha[0] * second.mass / first.mass


def hubbard_parameters(lattice: OpticalLattice) -> HubbardParameters:
    """Solve the bands of a lattice and return the Hubbard parameters of all points of its batch.

    U_a = (4πħ²a_aa/m_a) Π ∫|w_a|⁴, U12 = (2πħ²a_12/μ) Π ∫|w_1|²|w_2|², μ the reduced mass, products over the
    three axes; along a harmonic axis w is the oscillator's ground state, width ℓ² = ħ/(mω).
    """
    masses = np.array([atom.mass for atom in lattice.atoms])
    recoil = lattice.recoil
    shape, waves = (
        lattice.depths.shape,
        np.flatnonzero(lattice.depths.any(axis=tuple(range(lattice.depths.ndim - 1)))),
    )
    axes_first = np.moveaxis(lattice.depths[..., waves], -1, 0)
    rows, back = np.unique(axes_first.reshape(-1, shape[-2]), axis=0, return_inverse=True)
    bands, cross_rows = solve_rows(rows)
    back = back.reshape(-1)

    omega = 2 * math.pi * lattice.frequencies
    # ℓ² in m²; along a lattice it is that of the harmonic bottom of a well and only used for the flags.
    width = np.sqrt(
        np.where(
            omega > 0,
            HBAR / (masses[:, None] * np.where(omega > 0, omega, 1.0)),
            lattice.spacing**2 / (math.pi**2 * np.sqrt(np.where(omega > 0, 1.0, lattice.depths))),
        )
    )

    def placed(values: FloatArray, elsewhere: FloatArray) -> FloatArray:
        """Rows back on their axes and points; `elsewhere` (full shape) along harmonic axes."""
        full = elsewhere.copy()
        full[..., waves] = np.moveaxis(values[back].reshape(*axes_first.shape[:-1], *values.shape[1:]), 0, -1)
        return full

    zero, quantum = np.zeros(shape), HBAR * omega
    t = placed(bands.t * recoil, zero)
    t2_ratio = placed(bands.t2 / bands.t, zero)
    gap = placed(bands.gap * recoil, quantum)
    excitation = placed(bands.excitation * recoil, quantum)
    own = placed(bands.quartic / lattice.spacing, 1 / (math.sqrt(2 * math.pi) * width)).prod(axis=-1)
    a = lattice.lengths
    U = 4 * math.pi * HBAR**2 / masses * a[..., : len(masses)] * own
    U12 = None
    if len(masses) == 2:
        shared = placed(cross_rows / lattice.spacing, 1 / np.sqrt(math.pi * (width**2).sum(axis=-2))).prod(axis=-1)
        U12 = np.asarray(2 * math.pi * HBAR**2 * (1 / masses).sum() * a[..., 2] * shared)
    flags = _flags(lattice, t, t2_ratio, U, U12, gap, width)
    return HubbardParameters(t, t2_ratio, U, U12, gap, excitation, recoil, flags, lattice.dim)


def _flags(
    lattice: OpticalLattice,
    t: FloatArray,
    t2_ratio: FloatArray,
    U: FloatArray,
    U12: FloatArray | None,
    gap: FloatArray,
    width: FloatArray,
) -> NDArray[np.int64]:
    """`Caution` bits per point; a species' flag is the point's flag."""
    inside, dim = slice(None, lattice.dim), lattice.dim
    narrowest = width.min(axis=-1)
    a, count = np.abs(lattice.lengths), len(lattice.atoms)
    too_strong = np.abs(U) > GAP_FRACTION_LIMIT * gap.min(axis=-1)
    too_long = a[..., :count] > OSCILLATOR_FRACTION_LIMIT * narrowest
    if U12 is not None:
        too_strong |= (np.abs(U12) > GAP_FRACTION_LIMIT * gap.min(axis=(-2, -1)))[..., None]
        too_long |= (a[..., 2] > OSCILLATOR_FRACTION_LIMIT * narrowest.min(axis=-1))[..., None]
    raised = {
        Caution.SECOND_HOPPING: np.abs(t2_ratio[..., inside]).max(axis=-1) > SECOND_HOPPING_LIMIT,
        Caution.GAP: too_strong,
        Caution.SHALLOW: lattice.depths[..., inside].min(axis=-1) < SHALLOW_LIMIT,
        Caution.SCATTERING_LENGTH: too_long,
        Caution.TRANSVERSE_HOPPING: t[..., dim:].max(axis=-1, initial=0.0)
        > TRANSVERSE_LIMIT * t[..., inside].min(axis=-1),
    }
    flags = np.full(U.shape[:-1], int(Caution.ESTIMATED_DEPTH) if lattice.same_light else 0, dtype=np.int64)
    for bit, where in raised.items():
        flags |= np.where(where.any(axis=-1), int(bit), 0)
    return flags


def _per_species(value: PerSpecies, species: int, where: str, limits: tuple[float, float], unit: str) -> FloatArray:
    """Checked values with a trailing species axis."""
    parts = value if isinstance(value, tuple) else (value,) * species
    if len(parts) != species:
        raise InputError(f"{where}: got a tuple of {len(parts)}, must be one value or {species} (one per species).")
    checked = [check_range(part, where, limits, unit) for part in parts]
    try:
        return np.stack(np.broadcast_arrays(*checked), axis=-1)
    except ValueError:
        raise InputError(f"{where}: the species' arrays must broadcast to one shape.") from None
