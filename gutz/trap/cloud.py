"""A cloud in local-density approximation: chemical potentials and temperature from atom numbers and entropy.

In:  a uniform gas (`LocalGas`), a `Trap`, atom numbers, a temperature or an entropy per particle.
Out: `Cloud`: the local states at nodes of the potential, each with the number of sites it stands for.

Nodes are refined until what lies between them no longer matters: a cell counts with its number of sites times the
distance of its ends from the straight line through their neighbours. Where two phases coexist in the whole cloud
(the numbers asked for lie inside a jump), the cloud holds both, with their shares.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.phases import Phase
from gutz.status import Status
from gutz.trap.climb import Climbed, Sums, climb
from gutz.trap.geometry import Nodes, Trap
from gutz.trap.local import LocalGas, States
from gutz.trap.mesh import Mesh, mesh_of, total
from gutz.trap.phonons import PhononLaw, entropy_at_nodes

FloatArray = NDArray[np.float64]

TOLERANCE = {"product": 1e-3, "dressed": 5e-3}
"""Relative error of atom numbers and entropy from the spacing of the nodes, per ansatz."""

CUTOFF_SHARE = 1e-3
"""Weight of the highest occupation kept, averaged over the atoms, above which a cloud is marked."""

COLDEST = 1e-4
"""Temperature, in units of the largest energy of a site, below which no entropy is looked for."""

FEWEST_SITES = 2.0
"""Radius in sites along any axis below which the local-density approximation is void."""

_ROUGH, _MET = 1e-2, 1e-6
"""Mismatch of the totals, relative, on the coarse and on the refined nodes."""

_COEXIST = 1e-2
"""Difference of atom numbers (relative) between the two sides of a jump above which they are two phases: less is one
node crossing the border of a shell."""

_ROUNDS = 16

_SHARE_SAID = 0.01
"""Share of the atoms in local states with a remark above which the cloud bears the remark."""

_MOST_REPEATS = 8
_MODES_MET = 4e-3
"""Entropy of the collective modes, relative to the whole, at which it agrees with what was assumed."""


@dataclass(frozen=True, eq=False)
class Cloud:
    """A solved cloud. Energies in the unit of the Hubbard parameters, lengths in sites.

    mu: chemical potentials at the bottom of each species' trap, (species,); T: temperature. nodes: potentials and
    weights. sides, shares: the local states at the nodes and the share of each (one, unless phases coexist).
    error: estimated relative error of (N_1, .., S). status: bits of `gutz.status.Status`. coexist: two phases side by
    side. phonons: entropy per site of the collective modes at the nodes, None where not included.
    law: how their sum goes with T, as far as it was followed. notes: sentences for people.
    """

    gas: LocalGas
    trap: Trap
    mu: FloatArray
    T: float
    nodes: Nodes
    sides: tuple[States, ...]
    shares: FloatArray
    error: FloatArray
    status: Status
    coexist: bool
    phonons: FloatArray | None
    law: PhononLaw | None
    notes: tuple[str, ...]

    @property
    def atoms(self) -> FloatArray:
        """N_a, (species,)."""
        return np.asarray(np.einsum("n,na->a", self.nodes.weight, self.average("filling")))

    @property
    def entropy(self) -> float:
        """Entropy of the whole cloud in k_B."""
        return float(self.nodes.weight @ self.average("entropy"))

    @property
    def entropy_per_particle(self) -> float:
        """S/N in k_B."""
        return self.entropy / float(self.atoms.sum())

    def average(self, name: str) -> FloatArray:
        """A local output at every node, averaged over coexisting sides; first axis the node."""
        mean = np.asarray(sum(x * s.outputs[name] for x, s in zip(self.shares, self.sides, strict=True)))
        return mean + self.phonons if name == "entropy" and self.phonons is not None else mean

    def phases(self) -> NDArray[np.int8]:
        """Label at every node; SEPARATED where coexisting sides hold clearly different densities."""
        code = self.sides[0].outputs["phase"].copy()
        for side in self.sides[1:] if self.coexist else ():
            apart = np.abs(side.outputs["filling"] - self.sides[0].outputs["filling"]).max(-1) > 0.01
            code[apart] = int(Phase.SEPARATED)
        return np.asarray(code.astype(np.int8))

    def by_phase(self) -> dict[Phase, tuple[FloatArray, float]]:
        """Atoms of each species and entropy in each phase, coexisting sides counted with their shares."""
        found: dict[Phase, tuple[FloatArray, float]] = {}
        for x, side in zip(self.shares, self.sides, strict=True):
            for code in np.unique(side.outputs["phase"]):
                here = np.where(side.outputs["phase"] == code, self.nodes.weight, 0.0) * x
                local = side.outputs["entropy"] + (0.0 if self.phonons is None else self.phonons)
                atoms, entropy = here @ side.outputs["filling"], float(here @ local)
                before = found.get(Phase(int(code)), (np.zeros_like(atoms), 0.0))
                found[Phase(int(code))] = (before[0] + atoms, before[1] + entropy)
        return found

    def fraction(self, phase: Phase) -> float:
        """Fraction of all atoms that are in a phase."""
        atoms = self.by_phase().get(phase, (np.zeros(1), 0.0))[0]
        return float(atoms.sum() / self.atoms.sum())


@dataclass(frozen=True)
class _Problem:
    """What is asked: goal of (N_1, .., S), which of (mu, T) are free, and the accuracy."""

    gas: LocalGas
    mesh: Mesh
    goal: FloatArray
    free: NDArray[np.bool_]
    tolerance: float
    scale: float
    law: PhononLaw | None = None

    @property
    def asked(self) -> float:
        """Entropy per particle asked for, 0 where T is given."""
        return float(self.goal[-1] / self.goal[:-1].sum())

    def size(self, entropy: float = 0.0) -> FloatArray:
        """What errors of (N_1, .., S) are measured by: the goals, or the cloud's own entropy where T is given.

        An entropy below a hundredth per atom is measured by that.
        """
        size = np.abs(self.goal)
        size[-1] = max(size[-1], entropy, 1e-2 * size[:-1].sum())
        return np.asarray(size)

    def climb(self, nodes: Nodes, y: FloatArray, accuracy: float) -> Climbed:
        """Meet the goal on given nodes; at a kink to what their spacing may cost."""
        bearable = max(accuracy, self.tolerance) * self.size()

        def sums(at: FloatArray) -> Sums:
            found = total(nodes, at, self.gas(at[:-1] - nodes.potential, float(at[-1])))
            return found if self.law is None else self.law.added(found)

        scale = self.scale
        return climb(sums, y, self.goal, self.free, accuracy * self.size(), bearable, scale, COLDEST * scale)


def solve_cloud(
    gas: LocalGas,
    trap: Trap,
    atoms: FloatArray,
    *,
    T: float | None = None,
    entropy: float | None = None,
    guess: FloatArray | None = None,
    near: Cloud | None = None,
    tolerance: float | None = None,
    phonons: bool = True,
) -> Cloud:
    """Find the cloud with the given atom numbers (species,) and T, or entropy per particle (k_B).

    guess: (mu_1, .., T) to start from. near: a similar cloud, whose nodes then serve again.
    tolerance: relative error allowed from the spacing of the nodes. phonons: count the entropy of the collective modes
    as well (product ansatz only; the dressed one leaves it out).
    Raises InputError for numbers that make no sense, or a trap too tight for the local-density approximation.
    """
    atoms = _checked_atoms(gas, trap, atoms)
    if (T is None) == (entropy is None):
        raise InputError("give exactly one of T and entropy for a cloud")
    for name, value in (("T", T), ("entropy", entropy)):
        if value is not None and not (np.isfinite(value) and value >= 0):
            raise InputError(f"{name} is {value:g}; it must be a finite number, at least 0")
    if entropy == 0:
        T, entropy = 0.0, None
    goal = np.append(atoms, 0.0 if entropy is None else entropy * atoms.sum())
    free = np.append(np.ones(gas.species, bool), entropy is not None)
    y = first_guess(gas, trap, atoms, T, entropy) if guess is None else np.array(guess, float)
    if T is not None:
        y[-1] = T
    # Hard cores that hardly hop have no energy of their own but how deep they fill the trap.
    scale = max(gas.scale, float(np.abs(y).max())) if gas.n_max == 1 else gas.scale
    problem = _Problem(gas, mesh_of(gas, trap), goal, free, tolerance or TOLERANCE[gas.ansatz], scale)
    reused = None
    if near is not None and (near.nodes.line is None) == (trap.ratio is None or trap.size is not None):
        reused = problem.mesh.again(near.nodes, np.append(near.mu, near.T), y)
    counted = phonons and gas.ansatz == "product"
    if counted and problem.free[-1] and near is not None and near.phonons is not None and near.T > 0:
        amplitude = float(near.nodes.weight @ near.phonons) * atoms.sum() / near.atoms.sum()
        power = near.law.power if near.law is not None else 3.0
        problem = replace(problem, law=PhononLaw(amplitude, near.T * gas.scale / near.gas.scale, power, foreign=True))
    frozen, modes = False, None
    for _ in range(_MOST_REPEATS):
        nodes, climbed, error = _solve(problem, y, reused)
        best = climbed.sides[0]
        reused, y = None, best.y
        if problem.free[-1] and not climbed.met and y[-1] <= 1.01 * COLDEST * scale:
            frozen = True
            problem = replace(problem, free=np.append(np.ones(gas.species, bool), False), law=None)
            nodes, climbed, error = _solve(problem, y)
            best = climbed.sides[0]
        heavy = _cutoff_share(nodes, climbed, gas.n_max)
        if heavy > CUTOFF_SHARE and gas.raise_cutoff():
            continue
        if not counted:
            break
        modes = entropy_at_nodes(gas, nodes, best.states, best.y[:-1], float(best.y[-1]))
        if not problem.free[-1] or problem.goal[-1] == 0:
            break
        amplitude, T = float(nodes.weight @ modes), float(y[-1])
        law = problem.law or PhononLaw(0.0, T)
        if abs(amplitude - law.entropy(T)) <= _MODES_MET * problem.goal[-1]:
            break
        problem = replace(problem, law=law.through(T, amplitude))
        reused = problem.mesh.again(nodes, y, y)
    return _finish(problem, trap, nodes, climbed, error, heavy, frozen, modes)


def first_guess(
    gas: LocalGas, trap: Trap, atoms: FloatArray, T: float | None, entropy: float | None = None
) -> FloatArray:
    """Thomas-Fermi chemical potentials without hopping, or those of a cloud with one atom per site if higher.

    A hot gas starts as a classical one: N = (pi T / c)^(d/2) e^(mu/T), S/N = d/2 + 1 - mu/T.
    """
    total = float(atoms.sum())
    U = np.maximum(np.asarray(gas.mixture.U)[0], 1e-3 * gas.scale)
    U12 = float(gas.mixture.U12[0]) if gas.species == 2 else 0.0
    if trap.size is not None:
        n = atoms / np.prod(trap.size)
        return np.append(U * (n - 0.5) + U12 * (n.sum() - n), 0.1 * gas.scale if T is None else T)
    order = trap.axes / 2
    if entropy is not None and entropy > order + 1.0:
        hot = order + 1.0 - entropy
        mean = float(np.prod(trap.curvature[0])) ** (1 / trap.axes)
        T = mean / np.pi * float(atoms.max() * np.exp(-hot)) ** (1 / order)
        return np.append(np.full(gas.species, hot * T) - gas.z_t, T)
    mu = []
    for a in range(gas.species):
        one = float(trap.sites_below(1.0, a))
        # n = (mu - V)/U with the share of the other species in U: N U (order + 1) = one mu^(order + 1).
        shared = U[a] * atoms[a] + max(U12, 0.0) * (total - atoms[a])
        hard = gas.n_max == 1
        fermi = 0.0 if hard else (max(shared, 0.0) * (order + 1) / one) ** (1 / (order + 1))
        mu.append(max(fermi, (total / one) ** (1 / order)) - 0.5 * gas.z_t[a])
    return np.append(mu, 0.1 * max(gas.scale, *np.abs(mu)) if T is None else T)


def _checked_atoms(gas: LocalGas, trap: Trap, atoms: FloatArray) -> FloatArray:
    atoms = np.asarray(atoms, float)
    if atoms.shape != (gas.species,) or trap.species != gas.species:
        raise InputError(
            f"there are {atoms.size} atom numbers and {trap.species} traps; there must be {gas.species} each"
        )
    if np.any(~(atoms > 0)) or not np.all(np.isfinite(atoms)):
        raise InputError(
            f"N is {np.min(atoms):g}; it must be greater than 0 for every species (leave an empty species out)"
        )
    if trap.size is not None and gas.n_max == 1 and np.any(atoms >= np.prod(trap.size)):
        raise InputError(
            f"N is {np.max(atoms):g}; it must be below {np.prod(trap.size):g}, the sites of the box, for hard cores"
        )
    return atoms


def _solve(problem: _Problem, y: FloatArray, reused: Nodes | None = None) -> tuple[Nodes, Climbed, FloatArray]:
    """Climb on coarse nodes, then on nodes refined until the estimated error is within the tolerance.

    reused: refined nodes of a similar cloud, which spare the coarse ones.
    """
    mesh = problem.mesh
    if reused is None:
        nodes = mesh.coarse(y)
        for _ in range(_ROUNDS):
            climbed = problem.climb(nodes, y, _ROUGH)
            before, y = y, climbed.sides[0].y.copy()
            if not mesh.overflows(nodes, climbed.sides[0].states):
                break
            # Nodes that end too early leave no room for the entropy, which drives T up without bound.
            if before[-1] > 0:
                y[-1] = min(y[-1], 2.0 * before[-1])
            nodes = mesh.coarse(y)
        nodes = mesh.fine(y, problem.tolerance * problem.size(climbed.sides[0].totals[-1]))
    else:
        nodes = reused
    for _ in range(_ROUNDS):
        climbed = problem.climb(nodes, y, _MET)
        best = climbed.sides[0]
        y = best.y
        if reused is not None and mesh.overflows(nodes, best.states):
            return _solve(problem, y)
        allowed = problem.tolerance * problem.size(best.totals[-1])
        error = mesh.error(nodes, best)
        if np.all(error <= 2.0 * allowed) or mesh.exhausted(nodes):
            break
        nodes = mesh.finer(nodes, best, allowed)
    return nodes, climbed, error / problem.size(best.totals[-1])


def _cutoff_share(nodes: Nodes, climbed: Climbed, n_max: int) -> float:
    """Weight of the highest occupation kept, averaged over the atoms; 0 for hard cores, which are no approximation."""
    states = climbed.sides[0].states
    atoms = nodes.weight * states.of("filling").sum(-1)
    return 0.0 if n_max == 1 else float(atoms @ states.of("cutoff_weight") / max(atoms.sum(), 1e-300))


def _finish(
    problem: _Problem,
    trap: Trap,
    nodes: Nodes,
    climbed: Climbed,
    error: FloatArray,
    heavy: float,
    frozen: bool,
    modes: FloatArray | None,
) -> Cloud:
    """Name what is special about the result."""
    gas, best = problem.gas, climbed.sides[0]
    T = float(best.y[-1])
    status, notes = Status.OK, []
    if heavy > CUTOFF_SHARE:
        status |= Status.CUTOFF
        notes.append(
            f"{heavy:.1e} of the atoms' weight sits at the highest occupation kept, {gas.n_max}; at most "
            f"{CUTOFF_SHARE:g} is allowed: raise n_max, load fewer atoms, or weaken the trap"
        )
    apart = max((float(np.abs(s.totals - best.totals)[:-1].max()) for s in climbed.sides[1:]), default=0.0)
    coexist = apart > _COEXIST * problem.goal[:-1].sum()
    if frozen:
        status |= Status.ENTROPY_UNREACHABLE
        left, asked = best.totals[-1] / best.totals[:-1].sum(), problem.asked
        notes.append(
            f"the local states keep {left:.3g} k_B per atom down to T = 0, more than the {asked:.3g} asked for: "
            f"spins that the {gas.ansatz} ansatz does not order"
        )
    if not climbed.met:
        status |= Status.NOT_CONVERGED
    elif coexist:
        notes.append(
            "no uniform ordering of the cloud has these numbers: two phases coexist side by side, with shares "
            + ", ".join(f"{x:.3g}" for x in climbed.shares if x > 1e-3)
        )
    sides = tuple(s.states for s in climbed.sides)
    if gas.species == 2 and gas.n_max != 1:
        U = np.asarray(gas.mixture.U)[0]
        if float(gas.mixture.U12[0]) > np.sqrt(U[0] * U[1]):
            status |= Status.DEMIXING
    atoms = nodes.weight * best.states.of("filling").sum(-1)
    for bit in (Status.NOT_CONVERGED, Status.NOT_FINITE, Status.FALLBACK, Status.DRESSING_LARGE):
        if atoms[(best.states.status & int(bit)) > 0].sum() > _SHARE_SAID * atoms.sum():
            status |= bit
    if np.any(error > 3.0 * problem.tolerance):
        notes.append(f"the finest nodes used leave an error of about {error.max():.1%} in numbers or entropy")
    notes += tight(trap, gas, best.y, nodes)
    return Cloud(
        gas,
        trap,
        best.y[:-1].copy(),
        T,
        nodes,
        sides,
        climbed.shares,
        error,
        status,
        coexist,
        modes,
        problem.law,
        tuple(notes),
    )


def tight(trap: Trap, gas: LocalGas, y: FloatArray, nodes: Nodes) -> list[str]:
    """Judge the trap against the lattice: raise InputError where local density is void, else words of caution.

    Local density needs a potential that changes little from site to site against what smooths the cloud: the
    bandwidth or the temperature. In an insulator without hopping it is exact, so a steep trap is only a caution.
    """
    if trap.size is not None:
        return []
    bottom = np.maximum(y[:-1] + gas.z_t, 0.0) + y[-1]
    radius = np.sqrt(bottom[:, None] / trap.curvature)
    if radius.min() < FEWEST_SITES:
        raise InputError(
            f"the trap is so tight that the cloud has a radius of {radius.min():.2g} sites; local density needs at "
            f"least {FEWEST_SITES:g}: weaken the trap, load more atoms, or solve site by site (gutz.inhomogeneous)"
        )
    slope = 2.0 * np.sqrt(trap.curvature * bottom[:, None]).max(-1)
    smooth = np.maximum(4.0 * np.asarray(gas.mixture.t)[0].max(-1), y[-1])
    words = []
    for a in np.flatnonzero(slope > smooth):
        words.append(
            f"species {a + 1}: from site to site at the edge the trap rises by {slope[a] / smooth[a]:.2g} times the "
            "larger of the bandwidth per direction and T; local density is rough for the superfluid there"
        )
    return words
