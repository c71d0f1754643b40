"""One cloud at many temperatures, all at once and on few nodes: what curves of shots against temperature are made of.

In:  a uniform gas, a trap, atom numbers, temperatures.
Out: a `Cloud` per temperature.

`gutz.trap.cloud` refines each cloud until its numbers are right to a part in a thousand, which for the dressed ansatz
takes a minute a cloud. Here the nodes are few and the same at every temperature, every Newton step solves all of them
in one batch, and atom numbers are met to `ACCURACY`; sums of squared order come out within a few per cent.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.order import by_dimension
from gutz.status import Status
from gutz.targets import Evaluator
from gutz.trap import geometry
from gutz.trap.cloud import Cloud, first_guess, tight
from gutz.trap.geometry import Nodes, Trap
from gutz.trap.local import KEPT, LocalGas, States

FloatArray = NDArray[np.float64]

ACCURACY = 5e-3
"""Relative error of the atom numbers."""

LINE_NODES, CUTS, PLANE_STEPS = 24, 4, 9
_ROUNDS = 12
_TAIL = 8.0


def at_temperatures(gas: LocalGas, trap: Trap, atoms: FloatArray, T: FloatArray) -> list[Cloud]:
    """Solve the cloud with atom numbers (species,) at every temperature T (n,), > 0 or 0.

    Raises InputError for numbers without sense. Clouds whose atom numbers are not met carry Status.NOT_CONVERGED.
    """
    T = np.asarray(T, float)
    atoms = np.asarray(atoms, float)
    if T.ndim != 1 or T.size == 0 or not np.all(np.isfinite(T)) or np.any(T < 0):
        raise InputError("T must be a list of temperatures, each at least 0")
    if np.any(~(atoms > 0)):
        raise InputError(f"N is {np.min(atoms):g}; it must be greater than 0 for every species")
    middle = T[[T.size // 2]]
    start = first_guess(gas, trap, atoms, float(middle[0]))[None, :-1]
    nodes = _nodes(gas, trap, start[0], float(T.max()))
    start, seen, _ = _climb(gas, nodes, atoms, start, middle)
    nodes = _bordered(trap, nodes, seen)
    mu, states, met = _climb(gas, nodes, atoms, np.repeat(start, T.size, 0), T)
    found = []
    for i, temperature in enumerate(T):
        mine = slice(i * nodes.weight.size, (i + 1) * nodes.weight.size)
        status = Status.OK if met[i] else Status.NOT_CONVERGED
        made = Cloud(
            gas, trap, mu[i], float(temperature), nodes, (states.take(mine),), np.ones(1), np.full(3, np.nan), status,
            False, None, None, tuple(tight(trap, gas, np.append(mu[i], temperature), nodes)),
        )  # fmt: skip
        found.append(made)
    return found


def _nodes(gas: LocalGas, trap: Trap, mu: FloatArray, hottest: float) -> Nodes:
    """Few nodes that reach the edge of the cloud at every temperature."""
    if trap.size is not None:
        return geometry.box_nodes(trap)
    attraction = max(0.0, -float(gas.mixture.U12[0]))
    reach = np.maximum(mu + gas.z_t + attraction, 0.0) * 1.1 + _TAIL * hottest + 0.02 * gas.scale
    if trap.ratio is None:
        return geometry.plane_nodes(trap, reach, PLANE_STEPS)
    end = float((reach / trap.ratio).max())
    return geometry.line_nodes(trap, np.linspace(0.0, end, LINE_NODES))


def _bordered(trap: Trap, nodes: Nodes, states: States) -> Nodes:
    """Nodes packed where the phase changes: shells end there, within a cell, and move little with temperature."""
    if nodes.line is None or nodes.line.size == 1:
        return nodes
    phase = states.of("phase")
    atoms = states.of("filling").sum(-1) > 1e-3
    cells = np.flatnonzero((phase[1:] != phase[:-1]) & (atoms[1:] | atoms[:-1]))
    near = np.unique(np.concatenate([cells - 1, cells, cells + 1]))
    near = near[(near >= 0) & (near < phase.size - 1)]
    # Beyond the last atoms nothing changes: one node in three will do.
    kept = np.append(nodes.line[:-1][atoms[:-1] | (np.arange(phase.size - 1) % 3 == 0)], nodes.line[-1])
    parts = [
        a + (b - a) * np.arange(1, CUTS) / CUTS for a, b in zip(nodes.line[near], nodes.line[near + 1], strict=True)
    ]
    return geometry.line_nodes(trap, np.unique(np.concatenate([kept, *parts])))


def _climb(
    gas: LocalGas, nodes: Nodes, atoms: FloatArray, mu: FloatArray, T: FloatArray
) -> tuple[FloatArray, States, NDArray[np.bool_]]:
    """Newton steps in mu (temperature, species) for all temperatures together; each backs off by itself."""
    n = nodes.weight.size
    step, best, size = np.zeros_like(mu), mu.copy(), np.full(len(T), np.inf)
    limit = np.full(len(T), 0.2 * gas.scale)
    kept: States | None = None
    active = np.arange(len(T))
    for _ in range(_ROUNDS):
        states = _solve(gas, nodes, mu[active], T[active])
        totals = np.einsum("n,tna->ta", nodes.weight, states.of("filling").reshape(active.size, n, -1))
        slope = np.einsum(
            "n,tnab->tab", nodes.weight, states.response.reshape(active.size, n, *states.response.shape[1:])
        )
        miss = np.abs(totals / atoms - 1.0).max(-1)
        better = miss < size[active]
        kept = states if kept is None else _replaced(kept, states, active, better, n)
        won, lost = active[better], active[~better]
        fresh = _steps(slope[:, : gas.species, : gas.species], atoms - totals, atoms.sum() / gas.scale)
        best[won], size[won], step[won] = mu[won], miss[better], fresh[better]
        limit[lost] *= 0.35
        active = np.flatnonzero(size > ACCURACY)
        if not active.size:
            break
        length = np.abs(step).max(-1, keepdims=True)
        step = step * np.minimum(1.0, limit[:, None] / np.maximum(length, 1e-300))
        mu = best + step
    assert kept is not None
    return best, kept, size <= ACCURACY


def _steps(slope: FloatArray, miss: FloatArray, natural: float) -> FloatArray:
    """Newton steps, (temperature, species); directions in which nothing responds are held back."""
    values, vectors = np.linalg.eigh(0.5 * (slope + np.swapaxes(slope, -1, -2)))
    along = np.einsum("tab,ta->tb", vectors, miss)
    return np.einsum("tab,tb->ta", vectors, along / np.maximum(values, 1e-3 * natural))


def _replaced(old: States, new: States, active: NDArray[np.intp], better: NDArray[np.bool_], n: int) -> States:
    """The old states with those of temperatures that came out better in their place."""
    rows = (active[better][:, None] * n + np.arange(n)).ravel()
    mine = np.repeat(better, n)

    def mixed(a: NDArray[Any], b: NDArray[Any]) -> NDArray[Any]:
        out = a.copy()
        out[rows] = b[mine]
        return out

    outputs = {name: mixed(value, new.outputs[name]) for name, value in old.outputs.items()}
    return States(outputs, mixed(old.response, new.response), mixed(old.status, new.status))


def _solve(gas: LocalGas, nodes: Nodes, mu: FloatArray, T: FloatArray) -> States:
    """Local states at every node of every temperature, temperatures slow."""
    local = (mu[:, None, :] - nodes.potential[None]).reshape(-1, gas.species)
    warm = np.repeat(T, nodes.weight.size)
    evaluate = Evaluator(gas.mixture.replace(mu=None, T=None, entropy=None), gas.n_max, gas.ansatz)
    batch = evaluate(np.zeros(len(local), np.intp), local, warm)
    seen = {name: np.asarray(value) for name, value in batch.outputs.items()}
    hopping = np.broadcast_to(gas.mixture.t, (len(local), *gas.mixture.t.shape[1:]))
    outputs = {name: seen[name] for name in KEPT}
    outputs["phase"] = by_dimension(seen, hopping)["phase"]
    response = np.clip(np.nan_to_num(np.asarray(batch.response), posinf=1e9, neginf=-1e9), -1e9, 1e9)
    return States(outputs, response, np.asarray(batch.status))
