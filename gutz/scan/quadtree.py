"""Which points of a grid to solve so that the lines between different labels are found to the grid's own spacing.

In:  the shape of a grid, labels of the points solved so far.
Out: `Tree`: points to solve next; and a filled grid, between the points solved, where all labels around agree.

Cells start coarse. One whose corners differ is divided in four, down to the grid; so is a cell along whose sides a
point known from a finer neighbour differs. A region smaller than a coarse cell, that touches none of the points, is
missed.
"""

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Node = tuple[int, int]


class Cell(NamedTuple):
    """A rectangle of the grid by the indices of its corners, both ends included."""

    i0: int
    i1: int
    j0: int
    j1: int

    @property
    def corners(self) -> tuple[Node, Node, Node, Node]:
        """Lower left, upper left, lower right, upper right (i first)."""
        return (self.i0, self.j0), (self.i0, self.j1), (self.i1, self.j0), (self.i1, self.j1)

    @property
    def whole(self) -> tuple[slice, slice]:
        """All its points."""
        return slice(self.i0, self.i1 + 1), slice(self.j0, self.j1 + 1)

    def parts(self) -> list["Cell"]:
        """Its halves along every direction in which it is longer than the spacing; [] if it is as small as they get."""
        along = [self._halves(a, b) for a, b in ((self.i0, self.i1), (self.j0, self.j1))]
        if all(len(part) == 1 for part in along):
            return []
        return [Cell(*a, *b) for a in along[0] for b in along[1]]

    @staticmethod
    def _halves(a: int, b: int) -> list[tuple[int, int]]:
        middle = (a + b) // 2
        return [(a, middle), (middle, b)] if b - a > 1 else [(a, b)]


class Tree:
    """The cells of one grid. leaves: cells not divided (so far)."""

    def __init__(self, shape: tuple[int, int], nodes: int) -> None:
        lines = [np.unique(np.linspace(0, n - 1, min(n, nodes)).round().astype(int)).tolist() for n in shape]
        (xs, ys) = lines
        self.leaves = [
            Cell(a, b, c, d) for a, b in zip(xs, xs[1:], strict=False) for c, d in zip(ys, ys[1:], strict=False)
        ]

    def corners(self) -> list[Node]:
        """All points the cells rest on, in order."""
        return sorted({corner for cell in self.leaves for corner in cell.corners})

    def divide(self, labels: NDArray[np.integer], known: NDArray[np.bool_]) -> bool:
        """Divide every cell that needs it, once; False if there is none.

        labels, known: of the grid's shape; labels count where known. Cells with an unknown corner are left alone.
        """
        kept: list[Cell] = []
        for cell in self.leaves:
            kept.extend((cell.parts() if _mixed(cell, labels, known) else []) or [cell])
        changed = len(kept) > len(self.leaves)
        self.leaves = kept
        return changed

    def fill(
        self, values: NDArray[np.generic], known: NDArray[np.bool_], scales: Sequence[NDArray[np.float64]], flags: bool
    ) -> None:
        """Fill the points not solved, in place, from the corners of their cell; cells with an unknown corner stay.

        values: grid and trailing axes. Floating numbers: linear in either direction of `scales`, (n,) per direction;
        whole numbers: of the nearest corner, or all bits of all corners if `flags`.
        """
        for cell in self.leaves:
            if not cell.parts() or not all(known[corner] for corner in cell.corners):
                continue
            part, new = values[cell.whole], ~known[cell.whole]
            u = _fractions(scales[0][cell.i0 : cell.i1 + 1])
            v = _fractions(scales[1][cell.j0 : cell.j1 + 1])
            four = np.stack([values[corner] for corner in cell.corners])
            part[new] = _between(four, u, v, flags)[new]


def _mixed(cell: Cell, labels: NDArray[np.integer], known: NDArray[np.bool_]) -> bool:
    """Corners differ, or a known point of the cell differs from them."""
    if not all(known[corner] for corner in cell.corners):
        return False
    seen = labels[cell.whole][known[cell.whole]]
    return bool((seen != seen[0]).any())


def _fractions(scale: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray((scale - scale[0]) / (scale[-1] - scale[0]))


def _between(
    four: NDArray[np.generic], u: NDArray[np.float64], v: NDArray[np.float64], flags: bool
) -> NDArray[np.generic]:
    """Values over a cell from its four corners, (4, ...)."""
    nearest = four[2 * (u > 0.5)[:, None] + (v > 0.5)[None, :]]
    if four.dtype.kind != "f":
        return np.broadcast_to(np.bitwise_or.reduce(four), nearest.shape) if flags else nearest
    trailing = (...,) + (None,) * (four.ndim - 1)
    a, b = u[:, None][trailing], v[None, :][trailing]
    with np.errstate(invalid="ignore"):
        linear = (1 - a) * ((1 - b) * four[0] + b * four[1]) + a * ((1 - b) * four[2] + b * four[3])
    # Infinities (a decay length without decay) and values without meaning have nothing between them.
    plain = np.isfinite(four).all(0) & (four != four[0]).any(0)
    return np.where(plain, linear, nearest)
