"""Phase boundaries traced as curves to a tolerance, not read off a grid.

In:  a function that solves points (x, y), and the rectangle to look in.
Out: `Boundaries`: curves between pairs of phases, every point bracketed, with the kind of transition.

The label of the global minimum changes where two free energies are equal (first order) or where the curvature for a
new order passes zero (onset), so bisection on the label finds either, whatever the ansatz. A coarse grid finds where to
look; crossings of its edges are bisected all at once; then each curve is followed: the middle of every piece is found
by bisection across it, and pieces are halved until the middle lies on the straight line to a tolerance. Cells in which
that fails (cusps, branches, thin wedges) are divided, and so are neighbours into which a wedge runs.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from enum import IntEnum
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from gutz.errors import InputError

Array = NDArray[np.float64]

LOCATION = 1e-6
"""Default width of the bracket around every point of a curve, relative to the side of the rectangle."""

STRAIGHTNESS = 1e-3
"""Default largest distance of a curve from the lines drawn between its points, relative to the rectangle."""

NODES = 17
"""Default nodes of the coarse grid along each axis: structures smaller than its cells can be missed."""

_MOST_HALVINGS = 5
_DIVISIONS = 4
"""A cell is divided into this many along each side, at most twice."""
_WIDER = 64.0
"""Orders are compared across the tolerance and across this many times it."""


class Kind(IntEnum):
    """What happens at a boundary; the integer values are stored and never change meaning."""

    ONSET = 0
    FIRST_ORDER = 1
    CROSSOVER = 2
    DIMENSION = 3


KIND_WORDS: dict[Kind, str] = {
    Kind.ONSET: "onset: an order grows continuously from zero",
    Kind.FIRST_ORDER: "first order: two states of equal free energy, orders jump",
    Kind.CROSSOVER: "crossover: no symmetry changes, a stated threshold is passed",
    Kind.DIMENSION: "lost to fluctuations: mean field has order on both sides, the rule for the dimension decides",
}


class Solved(NamedTuple):
    """What the tracer wants to know of points. phase: (n,) labels; order: (n, k) order parameters; bad: (n,) bool."""

    phase: NDArray[np.integer]
    order: Array
    bad: NDArray[np.bool_]

    def pick(self, index: NDArray[Any]) -> "Solved":
        """Some of the points."""
        return Solved(self.phase[index], self.order[index], self.bad[index])


Solve = Callable[[Array, Array], Solved]


class Side(NamedTuple):
    """One side of the rectangle: its ends, and whether distances are measured in the logarithm."""

    low: float
    high: float
    logarithmic: bool = False

    def values(self, u: Array) -> Array:
        """From 0 .. 1 to values."""
        if self.logarithmic:
            return np.asarray(self.low * (self.high / self.low) ** u)
        return self.low + (self.high - self.low) * u


@dataclass(frozen=True)
class Curve:
    """One boundary. x, y: (n,); kind: (n,) of `Kind`; jump: change of the largest order parameter across it, (n,).

    phases: labels on its two sides. across: unit vectors from the first phase's side to the second's, (n, 2), in the
    plane where both axes run from 0 to 1. closed: the last point joins the first.
    """

    phases: tuple[int, int]
    x: Array
    y: Array
    kind: NDArray[np.int8]
    jump: Array
    across: Array
    closed: bool = False


@dataclass(frozen=True)
class Boundaries:
    """All curves found, and what they cost. solves: points solved; untrusted: how many of those carried a warning."""

    curves: tuple[Curve, ...]
    location: float
    straightness: float
    solves: int
    untrusted: int


def trace(
    solve: Solve,
    x: Side,
    y: Side,
    *,
    nodes: int = NODES,
    location: float = LOCATION,
    straightness: float = STRAIGHTNESS,
) -> Boundaries:
    """Find the curves between different phases in a rectangle.

    solve: called with arrays of x and y of the same length. Raises InputError for tolerances outside (0, 0.1), fewer
    than 2 nodes, or an empty rectangle.
    """
    for name, value in (("location", location), ("straightness", straightness)):
        if not 0 < value < 0.1:
            raise InputError(f"{name} is {value:g}; it must lie between 0 and 0.1 (a fraction of the axis)")
    if nodes < 2:
        raise InputError(f"nodes is {nodes}; it must be at least 2")
    for name, side in (("x", x), ("y", y)):
        if not side.high > side.low or (side.logarithmic and side.low <= 0):
            raise InputError(f"{name} runs from {side.low:g} to {side.high:g}; the end must lie above the start")
    tracer = _Tracer(solve, x, y, location, nodes)
    segments = tracer.follow(tracer.resolve(), straightness)
    curves = tuple(tracer.curve(chain) for chain in _chains(segments))
    return Boundaries(curves, location, straightness, tracer.solves, tracer.untrusted)


class _Cell(NamedTuple):
    """A square of the grid: its lower corner and side in steps of the finest grid."""

    i: int
    j: int
    side: int


class _Segment(NamedTuple):
    """A piece of a curve between two points of the pool, and the cell it lies in."""

    start: int
    end: int
    phases: tuple[int, int]
    cell: _Cell


class _Tracer:
    """Solves points, keeps the pool of boundary points found so far."""

    def __init__(self, solve: Solve, x: Side, y: Side, location: float, nodes: int) -> None:
        self._solve, self._x, self._y, self._location = solve, x, y, location
        self._cells, self._steps = nodes - 1, (nodes - 1) * _DIVISIONS**2
        self._node: dict[tuple[int, int], int] = {}  # grid point -> its row in _known
        self._known: list[Solved] = []
        self._on_edge: dict[tuple[tuple[int, int], tuple[int, int]], tuple[int, tuple[int, int]]] = {}
        self.solves = self.untrusted = 0
        self.at, self.across = np.zeros((0, 2)), np.zeros((0, 2))
        self.kind, self.jump = np.zeros(0, np.int8), np.zeros(0)

    def points(self, at: Array) -> Solved:
        """Solve points of the unit square, (n, 2)."""
        found = self._solve(self._x.values(at[:, 0]), self._y.values(at[:, 1]))
        self.solves += len(at)
        self.untrusted += int(np.count_nonzero(found.bad))
        return found

    def resolve(self) -> list[_Segment]:
        """Pieces of all curves, from cells divided until each holds one plain piece or is as small as they get."""
        side = _DIVISIONS**2
        todo = [_Cell(i * side, j * side, side) for i in range(self._cells) for j in range(self._cells)]
        plain: list[_Segment] = []
        whole = set(todo)
        while todo:
            pieces, odd = self._pieces(todo)
            if todo[0].side == 1:
                plain += pieces
                break
            plainly = self._separates(pieces)
            odd |= {piece.cell for piece, found in zip(pieces, plainly, strict=True) if not found}
            plain += [piece for piece in pieces if piece.cell not in odd]
            todo, whole = self._divided(odd, whole - odd)
            plain = [piece for piece in plain if piece.cell in whole]
            whole |= set(todo)
        return self._merged(plain)

    def _merged(self, pieces: list[_Segment]) -> list[_Segment]:
        """Give crossings found twice, from cells of different size, one number."""
        number = np.arange(len(self.at))
        for a, b in sorted(cKDTree(self.at).query_pairs(4 * self._location)) if len(self.at) else []:
            number[b] = number[a]
        renamed = [p._replace(start=int(number[p.start]), end=int(number[p.end])) for p in pieces]
        return [piece for piece in renamed if piece.start != piece.end]

    def _divided(self, odd: set[_Cell], whole: set[_Cell]) -> tuple[list[_Cell], set[_Cell]]:
        """Divide cells, and with them each neighbour of their size along whose side labels now change unseen."""
        parts: list[_Cell] = []
        while odd:
            smaller = [
                _Cell(c.i + a * step, c.j + b * step, step)
                for c in sorted(odd)
                for step in (c.side // _DIVISIONS,)
                for a in range(_DIVISIONS)
                for b in range(_DIVISIONS)
            ]
            parts += smaller
            self._solve_nodes(smaller)
            odd = {cell for cell in whole if cell.side == smaller[0].side * _DIVISIONS and self._hides(cell)}
            whole = whole - odd
        return parts, whole

    def _hides(self, cell: _Cell) -> bool:
        """Somewhere along a side, known grid points differ from both its ends."""
        i, j, side = cell
        step = side // _DIVISIONS
        for a, b, along in ((i, j, (1, 0)), (i, j + side, (1, 0)), (i, j, (0, 1)), (i + side, j, (0, 1))):
            nodes = [(a + along[0] * k * step, b + along[1] * k * step) for k in range(_DIVISIONS + 1)]
            if all(node in self._node for node in nodes):
                labels = [self._label(node) for node in nodes]
                if sum(p != q for p, q in zip(labels, labels[1:], strict=False)) > (labels[0] != labels[-1]):
                    return True
        return False

    def _label(self, node: tuple[int, int]) -> int:
        return int(self._known[self._node[node]].phase)

    def _solve_nodes(self, cells: Sequence[_Cell]) -> None:
        corners = {(c.i + a * c.side, c.j + b * c.side) for c in cells for a in (0, 1) for b in (0, 1)}
        fresh = sorted(corners - self._node.keys())
        if fresh:
            found = self.points(np.array(fresh) / self._steps)
            for k, node in enumerate(fresh):
                self._node[node] = len(self._known)
                self._known.append(found.pick(np.asarray(k)))

    def _pieces(self, cells: Sequence[_Cell]) -> tuple[list[_Segment], set[_Cell]]:
        """Crossings of the sides of cells, joined within each; also the cells where joining is not plain."""
        self._solve_nodes(cells)
        sides = {cell: _sides(cell) for cell in cells}
        edges = {edge for four in sides.values() for edge in four} - self._on_edge.keys()
        crossed = sorted(edge for edge in edges if self._label(edge[0]) != self._label(edge[1]))
        if crossed:
            ends = [[self._known[self._node[edge[k]]] for edge in crossed] for k in (0, 1)]
            stacked = [Solved(*(np.stack(part) for part in zip(*end, strict=True))) for end in ends]
            at = np.array(crossed) / self._steps
            numbers, phases = self._bisect(at[:, 0], at[:, 1], *stacked)
            self._on_edge |= dict(zip(crossed, zip(numbers, phases, strict=True), strict=True))
        pieces: list[_Segment] = []
        odd: set[_Cell] = set()
        for cell, four in sides.items():
            found = [self._on_edge[edge] for edge in four if edge in self._on_edge]
            pieces += _join(found, self.at, cell)
            if len(found) not in (0, 2) or len({pair for _, pair in found}) > 1:
                odd.add(cell)
        return pieces, odd

    def follow(self, segments: list[_Segment], straightness: float) -> list[_Segment]:
        """Halve pieces until the curve stays within `straightness` of them."""
        done: list[_Segment] = []
        todo = segments
        for _ in range(_MOST_HALVINGS):
            if not todo:
                break
            middle, bracketed = self._middles(todo)
            later: list[_Segment] = []
            for piece, number, found in zip(todo, middle, bracketed, strict=True):
                if not found:
                    done.append(piece)
                    continue
                away = _distance(self.at[number], self.at[piece.start], self.at[piece.end])
                halves = [piece._replace(end=number), piece._replace(start=number)]
                # Kept either way; halving leaves a quarter of the distance.
                (done if away < 4 * straightness else later).extend(halves)
            todo = later
        return done + todo

    def _separates(self, pieces: list[_Segment]) -> NDArray[np.bool_]:
        """True for pieces with one of their phases all along one side and the other along the other."""
        if not pieces:
            return np.zeros(0, bool)
        low, high = zip(*(self._beside(pieces, part, 0.1) for part in (0.25, 0.5, 0.75)), strict=True)
        labels = self.points(np.concatenate([*low, *high])).phase.reshape(2, 3, len(pieces))
        alike = (labels == labels[:, :1]).all((0, 1))
        wanted = np.array([piece.phases for piece in pieces])
        found: NDArray[np.bool_] = alike & (np.sort(labels[:, 0].T, -1) == wanted).all(-1)
        return found

    def _beside(self, pieces: list[_Segment], part: float, reach: float) -> tuple[Array, Array]:
        """Points on either side of pieces, `part` of the way along, `reach` of their length away."""
        start, end = (self.at[[getattr(piece, name) for piece in pieces]] for name in ("start", "end"))
        centre, along = start + part * (end - start), end - start
        normal = reach * np.stack([-along[:, 1], along[:, 0]], -1)
        return np.clip(centre - normal, 0.0, 1.0), np.clip(centre + normal, 0.0, 1.0)

    def _middles(self, pieces: list[_Segment]) -> tuple[list[int], list[bool]]:
        """A boundary point across the middle of every piece, where one of the same two phases can be bracketed."""
        number, found = np.full(len(pieces), -1), np.zeros(len(pieces), bool)
        wanted = np.array([piece.phases for piece in pieces])
        length = np.linalg.norm(np.diff([self.at[[p.start, p.end]] for p in pieces], axis=1)[:, 0], axis=-1)
        for reach in (0.1, 0.5):
            left = np.flatnonzero(~found & (length > 8 * self._location))
            if not left.size:
                break
            low, high = self._beside([pieces[k] for k in left], 0.5, reach)
            both = self.points(np.concatenate([low, high]))
            sides = both.pick(np.arange(left.size)), both.pick(np.arange(left.size, 2 * left.size))
            pair = np.sort(np.stack([side.phase for side in sides], -1), -1)
            good = np.flatnonzero((pair == wanted[left]).all(-1))
            made, phases = self._bisect(low[good], high[good], sides[0].pick(good), sides[1].pick(good))
            number[left[good]] = made
            found[left[good]] = (np.array(phases).reshape(-1, 2) == wanted[left][good]).all(-1)
        return number.tolist(), found.tolist()

    def _bisect(
        self, low: Array, high: Array, at_low: Solved, at_high: Solved
    ) -> tuple[list[int], list[tuple[int, int]]]:
        """Halve brackets between different labels down to the tolerance; add the points to the pool."""
        low, high = low.copy(), high.copy()
        labels = [at_low.phase.copy(), at_high.phase.copy()]
        count = len(low)
        if not count:
            return [], []
        while np.abs(high - low).max() > self._location:
            middle = 0.5 * (low + high)
            found = self.points(middle)
            # A third phase in between: keep its boundary to the lower end.
            up = found.phase != labels[0]
            high, low = np.where(up[:, None], middle, high), np.where(up[:, None], low, middle)
            labels[1] = np.where(up, found.phase, labels[1])
        first = len(self.at)
        at, across = 0.5 * (low + high), high - low
        across = across / np.linalg.norm(across, axis=-1, keepdims=True)
        kind, jump = self._kinds(at, across)
        swapped = (labels[0] > labels[1])[:, None]
        self.at, self.across = (
            np.concatenate([self.at, at]),
            np.concatenate([self.across, np.where(swapped, -1, 1) * across]),
        )
        self.kind, self.jump = np.concatenate([self.kind, kind]), np.concatenate([self.jump, jump])
        pairs = np.sort(np.stack(labels, -1), -1)
        return list(range(first, first + count)), [(int(a), int(b)) for a, b in pairs]

    def _kinds(self, at: Array, across: Array) -> tuple[NDArray[np.int8], Array]:
        """Compare orders across two widths: one that grows from zero as a square root shrinks by 8, a jump does not."""
        offsets = self._location * np.array([-_WIDER, -1.0, 1.0, _WIDER])[:, None, None]
        found = self.points(np.clip(at + offsets * across, 0.0, 1.0).reshape(-1, 2))
        order = found.order.reshape(4, len(at), -1)
        wide, narrow = np.abs(order[3] - order[0]), np.abs(order[2] - order[1])
        largest = np.argmax(wide, axis=-1)[:, None]
        before, now = (np.take_along_axis(v, largest, -1)[:, 0] for v in (wide, narrow))
        size = np.abs(order).max((0, 2))
        kind = np.where(now < 0.5 * before, Kind.ONSET, Kind.FIRST_ORDER)
        kind = np.where(before < 1e-3 * size, Kind.DIMENSION, kind)
        return np.where(size < 1e-9, Kind.CROSSOVER, kind).astype(np.int8), narrow.max(-1)

    def curve(self, chain: Sequence[_Segment]) -> Curve:
        """Values along a chain of pieces."""
        numbers = [chain[0].start, *(piece.end for piece in chain)]
        closed = len(numbers) > 2 and numbers[0] == numbers[-1]
        at = self.at[numbers]
        return Curve(
            chain[0].phases,
            self._x.values(at[:, 0]),
            self._y.values(at[:, 1]),
            self.kind[numbers],
            self.jump[numbers],
            self.across[numbers],
            closed,
        )


def _sides(cell: _Cell) -> list[tuple[tuple[int, int], tuple[int, int]]]:
    i, j, side = cell
    sw, se, ne, nw = (i, j), (i + side, j), (i + side, j + side), (i, j + side)
    return [(sw, se), (se, ne), (nw, ne), (sw, nw)]


def _join(edges: Sequence[Any], at: Array, cell: _Cell) -> list[_Segment]:
    """Join the crossings of one cell that separate the same two phases; two pairs of them by the shorter joins."""
    segments: list[_Segment] = []
    for sides in {pair for _, pair in edges}:
        numbers = [number for number, pair in edges if pair == sides]
        if len(numbers) == 2:
            segments.append(_Segment(numbers[0], numbers[1], sides, cell))
        elif len(numbers) == 4:
            a, b, c, d = numbers
            options = [((a, b), (c, d)), ((a, d), (b, c))]
            best = min(options, key=lambda option: sum(np.linalg.norm(at[i] - at[j]) for i, j in option))
            segments += [_Segment(i, j, sides, cell) for i, j in best]
    return segments


def _chains(segments: list[_Segment]) -> list[list[_Segment]]:
    """Put pieces with common ends and phases into order."""
    chains: list[list[_Segment]] = []
    for sides in sorted({piece.phases for piece in segments}):
        touching: dict[int, list[_Segment]] = {}
        for piece in segments:
            if piece.phases == sides:
                touching.setdefault(piece.start, []).append(piece)
                touching.setdefault(piece.end, []).append(piece)
        ends = [number for number, pieces in touching.items() if len(pieces) == 1]
        used: set[int] = set()
        for begin in [*ends, *touching]:
            chain: list[_Segment] = []
            here = begin
            while free := [piece for piece in touching[here] if id(piece) not in used]:
                piece = free[0]
                used.add(id(piece))
                chain.append(piece if piece.start == here else piece._replace(start=piece.end, end=piece.start))
                here = chain[-1].end
            if chain:
                chains.append(chain)
    return chains


def _distance(point: Array, start: Array, end: Array) -> float:
    along = end - start
    length = max(float(np.linalg.norm(along)), 1e-300)
    away = point - start
    return abs(float(along[0] * away[1] - along[1] * away[0])) / length
