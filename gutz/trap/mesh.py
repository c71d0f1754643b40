"""Where in the potential a cloud is sampled: nodes laid out, judged and refined.

In:  a uniform gas, a trap, a trial (mu_1, .., T), local states at nodes.
Out: nodes; the estimated error of (N_1, .., S) that comes from their spacing.

Between nodes everything counts as linear. On a line, a cell's error is its number of sites times the distance of its
ends from the straight line through their neighbours; where the filling steps within a cell, the entropy hidden in the
step counts as well. On a plane, halving the spacing tells the error.
"""

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from gutz.trap import geometry
from gutz.trap.climb import Sums
from gutz.trap.geometry import Nodes, Trap
from gutz.trap.local import LocalGas, States, joined

FloatArray = NDArray[np.float64]

_FIRST_NODES = {"product": 96, "dressed": 48}
_MOST_NODES = 1200
_PLANE_STEPS = (21, 41, 81, 161)
_MOST_PLANE_NODES = 8000
_THERMAL_TAIL = 22.0
"""Depth in T beyond the bottom of the band at which a thermal gas ends: e^-22 of a filling of one."""
_EMPTY = 1e-7
_STEP = 0.2
_HIDDEN = 0.3
"""Entropy per site, k_B, that may hide where the total filling steps by one between two nodes: about half of log 2."""
_LEAST_SHARE = 0.2
_WORTH_KEEPING = 300
"""Nodes up to which a neighbouring cloud takes them over: they only ever grow in number."""


class Mesh(Protocol):
    """A way of laying out nodes."""

    def coarse(self, y: FloatArray) -> Nodes:
        """Few nodes that reach well beyond the cloud at y."""

    def again(self, nodes: Nodes, old: FloatArray, y: FloatArray) -> Nodes | None:
        """Nodes of a cloud at `old`, stretched for a similar one at y; None where that saves nothing."""

    def fine(self, y: FloatArray, allowed: FloatArray) -> Nodes:
        """Nodes for the cloud at y whose error is within `allowed` (N_1, .., S)."""

    def finer(self, nodes: Nodes, best: Sums, allowed: FloatArray) -> Nodes:
        """More nodes, where they help."""

    def error(self, nodes: Nodes, best: Sums) -> FloatArray:
        """Estimated absolute error of (N_1, .., S)."""

    def overflows(self, nodes: Nodes, states: States) -> bool:
        """True where atoms stand at the outermost nodes."""

    def exhausted(self, nodes: Nodes) -> bool:
        """True where no finer nodes are offered."""


def mesh_of(gas: LocalGas, trap: Trap) -> Mesh:
    """The layout that fits the trap."""
    if trap.size is not None:
        return _Box(trap)
    return _Plane(gas, trap) if trap.ratio is None else _Line(gas, trap)


def total(nodes: Nodes, y: FloatArray, states: States) -> Sums:
    """Sum local states over the nodes."""
    w = nodes.weight
    totals = np.append(w @ states.of("filling"), w @ states.of("entropy"))
    return Sums(y, float(w @ states.of("free_energy")), totals, np.einsum("n,nij->ij", w, states.response), states)


def _reach(gas: LocalGas, y: FloatArray, margin: float) -> FloatArray:
    """Potential beyond which there are no atoms, (species,)."""
    attraction = max(0.0, -float(gas.mixture.U12[0])) if gas.species == 2 else 0.0
    bottom = np.maximum(y[:-1] + gas.z_t + attraction, 0.0)
    return np.asarray(bottom * margin + _THERMAL_TAIL * y[-1] + 0.02 * gas.scale)


class _Box:
    """One node; nothing to refine."""

    def __init__(self, trap: Trap) -> None:
        self.nodes = geometry.box_nodes(trap)

    def coarse(self, y: FloatArray) -> Nodes:
        """As in `Mesh`."""
        return self.nodes

    def again(self, nodes: Nodes, old: FloatArray, y: FloatArray) -> Nodes | None:
        """As in `Mesh`."""
        return None

    def fine(self, y: FloatArray, allowed: FloatArray) -> Nodes:
        """As in `Mesh`."""
        return self.nodes

    def finer(self, nodes: Nodes, best: Sums, allowed: FloatArray) -> Nodes:
        """As in `Mesh`."""
        return nodes

    def error(self, nodes: Nodes, best: Sums) -> FloatArray:
        """As in `Mesh`."""
        return np.zeros_like(best.totals)

    def overflows(self, nodes: Nodes, states: States) -> bool:
        """As in `Mesh`."""
        return False

    def exhausted(self, nodes: Nodes) -> bool:
        """As in `Mesh`."""
        return True


class _Line:
    """Potentials of all species in proportion: nodes on a line, refined by bisection."""

    def __init__(self, gas: LocalGas, trap: Trap) -> None:
        self.gas, self.trap = gas, trap
        ratio = trap.ratio
        assert ratio is not None
        self.ratio = ratio

    def coarse(self, y: FloatArray) -> Nodes:
        """As in `Mesh`."""
        return self._even(y, 1.4)

    def _even(self, y: FloatArray, margin: float) -> Nodes:
        end = float((_reach(self.gas, y, margin) / self.ratio).max())
        return geometry.line_nodes(self.trap, np.linspace(0.0, end, _FIRST_NODES[self.gas.ansatz]))

    def again(self, nodes: Nodes, old: FloatArray, y: FloatArray) -> Nodes | None:
        """As in `Mesh`."""
        assert nodes.line is not None
        if nodes.weight.size > _WORTH_KEEPING:
            return None
        stretch = float((_reach(self.gas, y, 1.03) / self.ratio).max()) / float(nodes.line[-1])
        return geometry.line_nodes(self.trap, nodes.line * stretch)

    def fine(self, y: FloatArray, allowed: FloatArray) -> Nodes:
        """As in `Mesh`."""
        nodes = self._even(y, 1.03)
        return self._refined(nodes, y, self.gas(y[:-1] - nodes.potential, float(y[-1])), allowed)

    def finer(self, nodes: Nodes, best: Sums, allowed: FloatArray) -> Nodes:
        """As in `Mesh`."""
        return self._refined(nodes, best.y, best.states, allowed)

    def error(self, nodes: Nodes, best: Sums) -> FloatArray:
        """As in `Mesh`."""
        return np.asarray(self._cells(nodes, best.states).sum(0))

    def overflows(self, nodes: Nodes, states: States) -> bool:
        """As in `Mesh`."""
        return bool(states.of("filling")[-1].max() > _EMPTY)

    def exhausted(self, nodes: Nodes) -> bool:
        """As in `Mesh`."""
        return nodes.weight.size >= _MOST_NODES

    def _refined(self, nodes: Nodes, y: FloatArray, states: States, allowed: FloatArray) -> Nodes:
        """Bisect the cells that count most until their sum is within `allowed`."""
        while not self.exhausted(nodes):
            cells = self._cells(nodes, states)
            if np.all(cells.sum(0) <= allowed):
                break
            worth = (cells / allowed).max(-1)
            chosen = np.flatnonzero(worth > _LEAST_SHARE / worth.size)
            assert nodes.line is not None
            # A cell that counts for much is cut into four at once.
            cuts = np.where(worth[chosen] > 16.0 / worth.size, 4, 2)
            low, high = nodes.line[chosen], nodes.line[chosen + 1]
            new = np.concatenate([a + (b - a) * np.arange(1, k) / k for a, b, k in zip(low, high, cuts, strict=True)])
            v = np.concatenate([nodes.line, new])
            order = np.argsort(v, kind="stable")
            states = joined(states, self.gas(y[:-1] - new[:, None] * self.ratio, float(y[-1]))).take(order)
            nodes = geometry.line_nodes(self.trap, v[order])
        return nodes

    def _cells(self, nodes: Nodes, states: States) -> FloatArray:
        """Error of every cell, (cell, N_1 .. S)."""
        v = nodes.line
        assert v is not None
        f = np.concatenate([states.of("filling"), states.of("entropy")[:, None]], -1)
        share = ((v[1:-1] - v[:-2]) / (v[2:] - v[:-2]))[:, None]
        bend = np.zeros_like(f)
        bend[1:-1] = np.abs(f[1:-1] - (f[:-2] * (1 - share) + f[2:] * share))
        step = np.abs(np.diff(f, axis=0))
        curved = np.maximum(bend[1:], bend[:-1]) / 4.0
        error = np.minimum(curved, step / 2.0 + 0.1 * curved)
        if np.any(f[:, -1] > 0):
            stepped = np.abs(np.diff(f[:, :-1].sum(-1)))
            error[:, -1] = curved[:, -1] + np.where(stepped > _STEP, _HIDDEN * stepped, 0.0)
        return np.asarray(error * np.diff(self.trap.sites_below(v))[:, None])


class _Plane:
    """Potentials that differ in shape: nodes on a grid, refined by halving its spacing."""

    def __init__(self, gas: LocalGas, trap: Trap) -> None:
        self.gas, self.trap = gas, trap
        self.level = 0

    def coarse(self, y: FloatArray) -> Nodes:
        """As in `Mesh`."""
        return self._grid(y, 1.4, 0)

    def again(self, nodes: Nodes, old: FloatArray, y: FloatArray) -> Nodes | None:
        """As in `Mesh`."""
        return None

    def fine(self, y: FloatArray, allowed: FloatArray) -> Nodes:
        """As in `Mesh`."""
        self.level = 0
        return self._grid(y, 1.03, 0)

    def finer(self, nodes: Nodes, best: Sums, allowed: FloatArray) -> Nodes:
        """As in `Mesh`."""
        self.level += 1
        return self._grid(best.y, 1.03, self.level)

    def error(self, nodes: Nodes, best: Sums) -> FloatArray:
        """As in `Mesh`: a third of the change against twice the spacing, as for an error of second order."""
        if self.level == 0:
            return np.full(best.totals.shape, np.inf)
        wide = self._grid(best.y, 1.03, self.level - 1)
        before = total(wide, best.y, self.gas(best.y[:-1] - wide.potential, float(best.y[-1])))
        return np.asarray(np.abs(best.totals - before.totals) / 3.0)

    def overflows(self, nodes: Nodes, states: States) -> bool:
        """As in `Mesh`."""
        beyond = nodes.potential >= nodes.potential.max(0)
        return bool(np.where(beyond, states.of("filling"), 0.0).max() > _EMPTY)

    def exhausted(self, nodes: Nodes) -> bool:
        """As in `Mesh`."""
        return self.level == len(_PLANE_STEPS) - 1 or 4 * nodes.weight.size > _MOST_PLANE_NODES

    def _grid(self, y: FloatArray, margin: float, level: int) -> Nodes:
        return geometry.plane_nodes(self.trap, _reach(self.gas, y, margin), _PLANE_STEPS[level])
